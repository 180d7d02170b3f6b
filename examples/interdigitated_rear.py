"""With both contacts on the rear, how much of the period should the emitter take, and what is lost above the rest?

An n-type wafer has p-type emitter strips and n-type strips side by side on its rear; nothing shades its front. Holes
generated above the n-type strip have to travel sideways to the emitter, ∇·(D ∇Δn) + G = R(Δn) there, and recombine on
the way ("electrical shading"). A wide emitter shortens that way and lengthens that of the electrons to their contact.
Solved are Δn and the potentials (the bipolar form), for the efficiency and for light on the n-type strip alone.

Files go to the folder `results` where the script is run.
"""

from pathlib import Path

import pandas as pd

import fem_carriers as fc

PITCH_UM, GAP_SHARE, THICKNESS_UM = 1500, 0.04, 150
FRACTIONS = (0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.88)
SHOWN = (0.4, 0.6, 0.8)
HEADLINES = {"emitter_fraction": "emitter fraction", "jsc_mA_per_cm2": "Jsc (mA/cm²)", "voc_V": "Voc (V)",
             "fill_factor_percent": "FF (%)", "efficiency_percent": "efficiency (%)",
             "above_base_percent": "collected above base (%)"}  # fmt: skip
wafer = fc.Base("n", resistivity_ohm_cm=4, thickness_um=THICKNESS_UM, lifetime_us=1200)
plus, minus = fc.Contact("plus", contact_resistivity_mohm_cm2=1), fc.Contact("minus", contact_resistivity_mohm_cm2=1)


def interdigitated(emitter_fraction, lit=()):
    """The unit cell; `lit` masks the light."""
    center, base_um = PITCH_UM / 2, (1 - GAP_SHARE - emitter_fraction) * PITCH_UM
    patches = [
        fc.Strip("emitter", emitter_fraction * PITCH_UM, J0_fA_per_cm2=20, layer=fc.DopedLayer("p", 90)),
        fc.Strip("emitter_metal", width_um=70, J0_fA_per_cm2=450, contact=plus),
        fc.Strip("base_layer", base_um, center_um=center, J0_fA_per_cm2=40, layer=fc.DopedLayer("n", 80)),
        fc.Strip("base_metal", width_um=50, center_um=center, J0_fA_per_cm2=400, contact=minus),
    ]
    return fc.UnitCell(
        wafer,
        pitch_um=PITCH_UM,
        front=fc.Surface(J0_fA_per_cm2=10),
        rear=fc.Face(fc.Surface(J0_fA_per_cm2=6), patches),
        light=fc.Light.sunlight(reflectance=0.01, path="lambertian", mask=lit),
    )


def collected_above_base(emitter_fraction):
    """Share of the holes generated above the n-type strip that arrive at the emitter, at short circuit."""
    base_starts_um = (emitter_fraction + GAP_SHARE) * PITCH_UM / 2
    cell = interdigitated(emitter_fraction, lit=fc.LitRectangle((base_starts_um, PITCH_UM / 2)))
    return fc.solve_bipolar(cell).ledger.share("plus")


def main(fractions=FRACTIONS):
    results = Path("results")
    results.mkdir(exist_ok=True)
    table = fc.sweep(interdigitated, {"emitter_fraction": fractions}, compute=fc.current_voltage)
    table["above_base_percent"] = [100 * collected_above_base(f) for f in fractions]
    print(fc.with_bars(table, HEADLINES).to_string(index=False, float_format="{:.3f}".format))
    best = fc.best_point(table, "emitter_fraction", "efficiency_percent")
    print(best)
    line = {}
    for fraction in SHOWN:
        solution = fc.solve_bipolar(interdigitated(fraction))
        along = solution.along_line((0, THICKNESS_UM - 5), (PITCH_UM / 2, THICKNESS_UM - 5), points=151)
        line["distance_um"] = along["distance_um"]
        line[f"emitter_{100 * fraction:g}_percent_per_cm3"] = along["excess_density_per_cm3"]
    fc.plot_line(pd.DataFrame(line), picture=results / "interdigitated_rear_near_front.png")
    fc.write_table(table, results / "interdigitated_rear.csv")
    fc.plot_sweep(table, "emitter_fraction", picture=results / "interdigitated_rear.png")
    collected = table[["emitter_fraction", "jsc_mA_per_cm2"]]
    fc.plot_sweep(collected, "emitter_fraction", y="jsc_mA_per_cm2", picture=results / "interdigitated_rear_jsc.png")
    fc.view(solution, picture=results / "interdigitated_rear_excess_density.png", arrows=True, stretch_z=2)
    return table, best, pd.DataFrame(line)


if __name__ == "__main__":
    main()
