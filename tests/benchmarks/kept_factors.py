"""Six voltages of a three-dimensional current-voltage curve: kept factors against new ones for every Newton step.

    python tests/benchmarks/kept_factors.py            # about 80,000 unknowns
    python tests/benchmarks/kept_factors.py 1.2 2.3    # first step in µm and growth of the mesh

Prints unknowns, seconds of processor and clock, factorisations, Krylov iterations, and the ratios, in one run.
"""

import resource
import sys
import time
import warnings

from curves import finger_cell

import fem_carriers as fc
from fem_carriers.transport import walk
from fem_carriers.transport.bipolar import BipolarSystem
from fem_carriers.transport.linear import Factorization, Scaled
from fem_carriers.transport.solver import LinearSolver, Prepared

VOLTAGES_V = (0.65, 0.62, 0.58, 0.5, 0.3, 0.0)
MADE: list[LinearSolver] = []


class Kept(LinearSolver):
    """The solver as it is."""

    def __init__(self) -> None:
        super().__init__(two_carriers=True)
        MADE.append(self)


class Fresh(Kept):
    """Factors in double precision, new ones for every matrix."""

    def prepare(self, matrix: object) -> Prepared:
        self.kept = None
        self.kept = Factorization(Scaled(matrix, equilibrate=True))
        self.factorisations += 1
        return Prepared(self, self.kept.scaled)


def traced(problem: fc.Problem, solver: type[Kept]) -> tuple[float, float]:
    """Processor and clock seconds of all voltages, with the slope of the current at each; prints what they took."""
    walk.two_carrier_solver = lambda space, spread: solver()
    MADE.clear()
    start, busy = time.perf_counter(), time.process_time()
    walker = walk.Walker(BipolarSystem(problem))
    states = [walker.at({"front": 0.0, "rear": voltage}) for voltage in VOLTAGES_V]
    slopes = [state.slopes["rear"] for state in states]
    clock, processor = time.perf_counter() - start, time.process_time() - busy
    steps = sum(state.outcome.steps for state in walker.states)
    memory_GB = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    print(
        f"{solver.__name__}: {2 * problem.space.size} unknowns, {steps} Newton steps, {processor:.1f} s of processor, "
        f"{clock:.1f} s, {MADE[0].factorisations} factorisations, {MADE[0].iterations} iterations, {memory_GB:.1f} GB; "
        f"current {states[-1].currents_A['rear']:.12e} A, slope {slopes[0]:.8e} A/V",
        flush=True,
    )
    return processor, clock


def main() -> None:
    """One small curve first, which loads the libraries. Processor time counts threads that wait, too."""
    warnings.simplefilter("ignore", fc.ModelWarning)
    first_step_um, growth = (float(a) for a in sys.argv[1:3]) if len(sys.argv) > 2 else (4.0, 3.5)
    fc.current_voltage(fc.problem(finger_cell(), first_step_um=2, growth=3))
    problem = fc.problem(finger_cell(400), first_step_um=first_step_um, growth=growth)
    problem.space.bulk.pattern.entries  # noqa: B018 -- built before the clock starts
    kept, fresh = traced(problem, Kept), traced(problem, Fresh)
    print(f"ratio {fresh[0] / kept[0]:.1f} of processor time, {fresh[1] / kept[1]:.1f} of clock time")


if __name__ == "__main__":
    main()
