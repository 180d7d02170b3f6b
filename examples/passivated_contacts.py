"""When the layer under the metal passivates it, how narrow and how close should fingers be?

Both faces of an n-type wafer carry full-area layers that keep recombination low under the metal too, q U = J0 (np/ni²
− 1) with one small J0 everywhere on a face. Metal then costs only shade, transport and contact resistance. Solved are
Δn and the potentials of majority carriers and layers (the bipolar form) for fingers on both faces, width by pitch.

Files go to the folder `results` where the script is run.
"""

from pathlib import Path

import fem_carriers as fc

wafer = fc.Base("n", resistivity_ohm_cm=3, thickness_um=140, lifetime_us=2500)
front_layer = fc.DopedLayer("p", sheet_resistance_ohm_per_sq=140)
front_metal = fc.Contact("plus", contact_resistivity_mohm_cm2=2)
rear_layer = fc.DopedLayer("n", sheet_resistance_ohm_per_sq=80)
rear_metal = fc.Contact("minus", contact_resistivity_mohm_cm2=1)
front = fc.Face(fc.Surface(J0_fA_per_cm2=6, layer=front_layer), [fc.Strip("finger", 25, contact=front_metal)])
rear = fc.Face(fc.Surface(J0_fA_per_cm2=3, layer=rear_layer), [fc.Strip("finger", 40, contact=rear_metal)])
light = fc.Light.sunlight(reflectance=0.03, path="lambertian")
cell = fc.UnitCell(wafer, pitch_um=1000, front=front, rear=rear, light=light)

WIDTHS_UM, PITCHES_UM = (15, 20, 30, 40), (500, 700, 900, 1200, 1500, 2000)
WIDTH = "front.finger.width_um"
COMMON_METAL = {"front.finger.J0_fA_per_cm2": 900, "rear.finger.J0_fA_per_cm2": 500}


def main(widths_um=WIDTHS_UM, pitches_um=PITCHES_UM):
    results = Path("results")
    results.mkdir(exist_ok=True)
    table = fc.sweep(cell, {WIDTH: widths_um, "pitch_um": pitches_um}, compute=fc.current_voltage)
    print("Efficiency (%) by finger width (µm, down) and pitch (µm, across)")
    shown = table.assign(text=fc.with_bars(table, {"efficiency_percent": "text"})["text"])
    print(shown.pivot(index=WIDTH, columns="pitch_um", values="text").to_string())
    best = {}
    for width, rows in table.groupby(WIDTH):
        best[width] = fc.best_point(rows, "pitch_um", "efficiency_percent")
        print(f"fingers {width:g} µm wide: {best[width]}")
    width = min(best)
    at_best = fc.changed(cell, {WIDTH: width, "pitch_um": best[width].location})
    common = fc.changed(at_best, COMMON_METAL)
    curves = [fc.current_voltage(c) for c in (at_best, common)]
    gain = curves[0].efficiency_percent - curves[1].efficiency_percent
    print(f"At {width:g} µm and {best[width].location:.0f} µm, ± what the mesh may cost:\n{curves[0]}")
    lower_mV = 1e3 * (curves[0].voc_V - curves[1].voc_V)
    print(f"With J0 of 900 and 500 fA/cm² under the metal {gain:.2f} % and {lower_mV:.1f} mV less")
    fc.write_table(table, results / "passivated_contacts.csv")
    fc.plot_map(table, "pitch_um", WIDTH, picture=results / "passivated_contacts.png")
    fc.plot_losses(curves[0].maximum_power.solution.losses, picture=results / "passivated_contacts_losses.png")
    return table, best, curves


if __name__ == "__main__":
    main()
