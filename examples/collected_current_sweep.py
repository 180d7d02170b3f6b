"""Which contact pitch collects most carriers when the junction lies under the fingers alone?

Opaque fingers on local n-type strips lie on the passivated front of a p-type wafer, line contacts to the base on its
rear. Narrow pitches shade much, wide ones mean long ways to the strips. AM1.5G light enters the front. Solved is the
steady continuity equation of the excess carriers in half a period,

    ∇·(D ∇Δn) + G = Δn/τ + R_Auger + R_radiative,   Δn = 0 under the strips (short circuit),
    −q D ∂Δn/∂ν = J0 (np/ni² − 1) on the other surfaces.

Files go to the folder `results` where the script is run.
"""

import warnings
from pathlib import Path

import numpy as np

import fem_carriers as fc

COLLECTED = "collected_front_mA_per_cm2"
FINGER_UM, STRIP_UM, PITCHES_UM = 25, 60, np.geomspace(80, 1500, 14).round()

wafer = fc.Base("p", doping_per_cm3=1.5e16, thickness_um=140, lifetime_us=300)
emitter = fc.DopedLayer("n", sheet_resistance_ohm_per_sq=90)
finger_metal = fc.Contact("front", contact_resistivity_mohm_cm2=2)
front_patches = [
    fc.Strip("strip", STRIP_UM, J0_fA_per_cm2=60, layer=emitter),
    fc.Strip("finger", FINGER_UM, J0_fA_per_cm2=700, contact=finger_metal),
]
rear_metal = fc.Strip("metal", width_um=30, J0_fA_per_cm2=600, contact=fc.Contact("rear"))
front = fc.Face(fc.Surface(J0_fA_per_cm2=8), front_patches)
rear = fc.Face(fc.Surface(J0_fA_per_cm2=12), [rear_metal])
light = fc.Light.sunlight(reflectance=0.03, path="lambertian")
cell = fc.UnitCell(wafer, pitch_um=400, front=front, rear=rear, light=light)


def losses(table):
    """What was collected and lost, mA/cm², in few columns."""
    short = table.rename(columns=lambda c: c.removesuffix("_mA_per_cm2").removeprefix("lost_"))
    short["shaded %"] = 100 * FINGER_UM / short["pitch_um"]
    short["Auger+rad."] = short["base_Auger"] + short["base_radiative"]
    names = {"pitch_um": "pitch (µm)", "collected_front": "collected", "base_lifetime": "lost: defects"}
    wanted = ["pitch_um", "shaded %", "generated", "collected_front", "base_lifetime", "Auger+rad.", "front", "rear"]
    short["collected_front"] = fc.with_bars(table, {COLLECTED: "text"})["text"]
    return short[[*wanted, "rear_metal"]].rename(columns=names)


def main(pitches_um=PITCHES_UM):
    results = Path("results")
    results.mkdir(exist_ok=True)
    table = fc.sweep(cell, {"pitch_um": pitches_um})
    print(f"Currents in mA/cm² of cell area; fingers of {FINGER_UM} µm on n-type strips of {STRIP_UM} µm")
    print(losses(table).to_string(index=False, float_format="{:.2f}".format))
    strained = table[table["note"].str.contains("majority density")]
    if len(strained):
        print(
            f"On {len(strained)} points the excess density reaches up to {100 * table['injection_ratio'].max():.0f} % "
            "of the doping.\nIt is for low injection: it leaves out the majority current's field. See the last line."
        )
    best = fc.best_point(table, "pitch_um", COLLECTED)
    print(best)
    at_best = fc.changed(cell, {"pitch_um": best.location})
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", fc.ModelWarning)  # said above
        solution = fc.solve_excess(at_best)
    full = fc.solve_bipolar(at_best, target_error={"current_front_mA_per_cm2": 0.01})
    fc.write_table(table, results / "collected_current_sweep.csv")
    fc.plot_sweep(table, "pitch_um", picture=results / "collected_current_sweep.png")
    fc.write_fields(solution, results / "collected_current_sweep.vtu")
    fc.view(solution, picture=results / "collected_current_sweep_excess_density.png")
    found, checked = (s.collected_mA_per_cm2["front"] for s in (solution, full))
    bars = solution.uncertainty[COLLECTED], full.uncertainty["current_front_mA_per_cm2"]
    text = f"At that pitch {fc.with_bar(found, bars[0])} mA/cm² are collected; {fc.with_bar(checked, bars[1])}"
    print(text, "in the full form (both carriers, layers, field)")
    return best, table, found, checked


if __name__ == "__main__":
    main()
