"""What does a front layer of higher sheet resistance cost, and how much of that does a closer pitch win back?

Current flows sideways in the layer to the fingers, ∇s·(∇sφ/R_sh) = current that enters it − (φ − V)/ρc. Solved are Δn
and the potentials (the bipolar form) for every sheet resistance and pitch, all else the same. For scale: collecting
evenly between the fingers, the layer alone has R_sh pitch (pitch − width)/12 of series resistance (Ω·cm²). If shade and
this were all that depends on the pitch, the best pitch would fall as R_sh^(−1/3); transport in the base makes it fall
less.

Files go to the folder `results` where the script is run.
"""

from pathlib import Path

import pandas as pd

import fem_carriers as fc

wafer = fc.Base("p", resistivity_ohm_cm=1.2, thickness_um=160, lifetime_us=600)
finger_metal = fc.Contact("front", contact_resistivity_mohm_cm2=2)
rear_metal = fc.Contact("rear", contact_resistivity_mohm_cm2=1)
finger = fc.Strip("finger", width_um=32, J0_fA_per_cm2=700, contact=finger_metal)
layer = fc.DopedLayer("n", sheet_resistance_ohm_per_sq=120)
front = fc.Face(fc.Surface(J0_fA_per_cm2=25, layer=layer), [finger])
rear = fc.Face(fc.Surface(J0_fA_per_cm2=7), [fc.Strip("line", width_um=50, J0_fA_per_cm2=450, contact=rear_metal)])
light = fc.Light.sunlight(reflectance=0.02, path="lambertian")
cell = fc.UnitCell(wafer, pitch_um=1400, front=front, rear=rear, light=light)

SHEET, FIXED_PITCH_UM = "front.layer.sheet_resistance_ohm_per_sq", 1400
SHEETS_OHM, PITCHES_UM = (80, 120, 170, 230, 300), (700, 900, 1100, FIXED_PITCH_UM, 1800, 2300)
LAYER_LOSS = "lost_layer_on_front_mW_per_cm2"


def main(sheets_ohm_per_sq=SHEETS_OHM, pitches_um=PITCHES_UM):
    results = Path("results")
    results.mkdir(exist_ok=True)
    variables = {SHEET: sheets_ohm_per_sq, "pitch_um": pitches_um}
    table = fc.sweep(cell, variables, compute=fc.current_voltage)
    rows, bar = [], 0.0
    for sheet, swept in table.groupby(SHEET):
        fixed = swept[swept["pitch_um"] == FIXED_PITCH_UM].iloc[0]
        best = fc.best_point(swept, "pitch_um", "efficiency_percent")
        rows.append((sheet, fixed["efficiency_percent"], fixed[LAYER_LOSS], best.location, best.value))
        bar = max(bar, swept["error_bar_efficiency_percent"].max())
    names = ["R_sh (Ω/sq)", "eff. fixed (%)", "layer (mW/cm²)", "best pitch (µm)", "eff. best (%)"]
    costs = pd.DataFrame(rows, columns=names)
    for column, cost in (("eff. fixed (%)", "cost fixed (%)"), ("eff. best (%)", "cost best (%)")):
        costs[cost] = costs[column].iloc[0] - costs[column]
    print(f"At a fixed pitch of {FIXED_PITCH_UM} µm and at the best pitch; costs in % absolute, ± {bar:.1g} % each")
    print(costs.to_string(index=False, float_format="{:.3f}".format))
    last = costs.iloc[-1]
    print(
        f"From {costs.iloc[0, 0]:g} to {last.iloc[0]:g} Ω/sq: {last['cost fixed (%)']:.3f} % absolute at a fixed "
        f"pitch, {last['cost best (%)']:.3f} % at the best one"
    )
    fc.write_table(table, results / "sheet_resistance.csv")
    fc.plot_map(table, "pitch_um", SHEET, picture=results / "sheet_resistance.png")
    return table, costs


if __name__ == "__main__":
    main()
