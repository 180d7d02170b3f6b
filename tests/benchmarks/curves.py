"""How long a current-voltage curve takes, in two and three dimensions.

    python tests/benchmarks/curves.py

Prints unknowns, voltages solved, Newton steps per voltage, seconds and peak memory. Ratios between the lines are what
to trust; seconds depend on the machine and on what else it does.
"""

import resource
import time
import warnings

import fem_carriers as fc


def finger_cell(pitch_y_um: float | None = None) -> fc.UnitCell:
    """Fingers on a full n-layer; rear lines in 2-D, rear dots in 3-D."""
    base = fc.Base("p", resistivity_ohm_cm=1.0, thickness_um=150, lifetime_us=300)
    rear_contact = {"J0_fA_per_cm2": 500, "contact": fc.Contact("rear", 1)}
    rear = fc.Strip("line", 60, **rear_contact) if pitch_y_um is None else fc.Dot("dot", 60, **rear_contact)
    front = fc.Face(
        fc.Surface(J0_fA_per_cm2=20, layer=fc.DopedLayer("n", 120)),
        [fc.Strip("finger", 20, J0_fA_per_cm2=500, contact=fc.Contact("front", 1))],
    )
    pitch = 1200 if pitch_y_um is None else pitch_y_um
    rear_face = fc.Face(fc.Surface(J0_fA_per_cm2=8), [rear])
    light = fc.Light.sunlight(path="lambertian")
    return fc.UnitCell(base, pitch, pitch_y_um, front=front, rear=rear_face, light=light)


def report(name: str, problem: fc.Problem) -> None:
    """Trace one curve and print what it took."""
    start = time.perf_counter()
    curve = fc.current_voltage(problem)
    seconds = time.perf_counter() - start
    memory_GB = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    print(
        f"{name}: {2 * problem.space.size} unknowns, {len(curve.points)} voltages, "
        f"{curve.newton_steps:.1f} Newton steps each, {seconds:.1f} s, {memory_GB:.1f} GB; "
        f"efficiency {curve.efficiency_percent:.3f} %",
        flush=True,
    )


def main() -> None:
    """2-D on the default mesh, 3-D with more than 50,000 unknowns; one small curve first, which loads the libraries."""
    warnings.simplefilter("ignore", fc.ModelWarning)
    fc.current_voltage(fc.problem(finger_cell(), first_step_um=2, growth=3))
    report("2-D", fc.problem(finger_cell()))
    report("3-D", fc.problem(finger_cell(400), first_step_um=1.2, growth=2.3))


if __name__ == "__main__":
    main()
