"""Point contacts in three dimensions: how far apart may opaque dots on local n-type openings be?

Round contacts on a square grid lie on the passivated front of a p-type wafer, smaller ones to the base on its rear. As
in two dimensions, in a quarter of the period (0 to pitch/2 in x and y):

    ∇·(D ∇Δn) + G = R(Δn),   Δn = 0 under the front dots (short circuit),
    −q D ∂Δn/∂ν = J0 (np/ni² − 1) on the other surfaces.

The crowding of carriers into a dot is stronger than into a line. Files go to the folder `results` where the script is
run.
"""

import warnings
from pathlib import Path

import fem_carriers as fc

DOT_UM, TARGET_PERCENT = 90.0, 0.5
PITCHES_UM = (180.0, 220.0, 260.0, 300.0, 350.0, 420.0, 500.0)

wafer = fc.Base("p", doping_per_cm3=1.5e16, thickness_um=140, lifetime_us=300)
emitter = fc.DopedLayer("n", sheet_resistance_ohm_per_sq=60)
front_dot = fc.Dot("dot", DOT_UM, J0_fA_per_cm2=700, layer=emitter, contact=fc.Contact("front"))
rear_dot = fc.Dot("metal", diameter_um=50, J0_fA_per_cm2=600, contact=fc.Contact("rear"))


def square_grid(pitch_um):
    """The unit cell of equal pitch in x and y."""
    return fc.UnitCell(
        wafer,
        pitch_um,
        pitch_y_um=pitch_um,
        front=fc.Face(fc.Surface(J0_fA_per_cm2=8), [front_dot]),
        rear=fc.Face(fc.Surface(J0_fA_per_cm2=12), [rear_dot]),
        light=fc.Light.sunlight(reflectance=0.03, path="lambertian"),
    )


def main(pitches_um=PITCHES_UM, target_error_percent=TARGET_PERCENT):
    results = Path("results")
    results.mkdir(exist_ok=True)
    table = fc.sweep(square_grid, {"pitch_um": pitches_um}, target_error_percent=target_error_percent)
    columns = {"pitch_um": "pitch (µm)", "shaded_mA_per_cm2": "shaded", "generated_mA_per_cm2": "generated",
               "collected_front_mA_per_cm2": "collected", "unknowns": "unknowns"}  # fmt: skip
    print("Currents in mA/cm² of cell area")
    print(fc.with_bars(table, columns).to_string(index=False, float_format="{:.2f}".format))
    best = fc.best_point(table, "pitch_um", "collected_front_mA_per_cm2")
    print(best)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", fc.ModelWarning)
        at_best = square_grid(best.location)
        solution = fc.solve_excess(at_best, target_error_percent=target_error_percent)
    name = "collected_front_mA_per_cm2"
    print(
        f"At that pitch: {fc.with_bar(solution.headline[name], solution.uncertainty[name])} mA/cm². The excess density "
        f"reaches {100 * solution.injection_ratio:.1f} % of the doping; this form is meant for low injection."
    )
    fc.write_table(table, results / "dots_3d.csv")
    fc.plot_sweep(table, "pitch_um", picture=results / "dots_3d.png")
    fc.write_fields(solution, results / "dots_3d.vtu")
    fc.view(solution, picture=results / "dots_3d_excess_density.png")
    return best, table, solution


if __name__ == "__main__":
    main()
