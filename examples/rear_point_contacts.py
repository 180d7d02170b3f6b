"""How large and how far apart should round openings in a passivated rear be?

Dots on a square grid touch the base of a p-type wafer through its passivated rear. Large or close dots recombine (their
J0 is a hundred times that of the passivation); small or distant ones crowd the current of the holes. For a given share
of metal small and close dots are better than large and distant ones, so the question is: which pitch for a diameter
that can be made? The front, a full n-type layer, counts as evenly contacted: its grid stands for 0.4 Ω·cm² and 3 % of
shade. Solved are Δn and the potentials (the bipolar form) in a quarter of the period, for whole curves.

For scale, the way through the base to a dot of diameter d has the series resistance (R. H. Cox, H. Strack, Solid-State
Electron. 10, 1213 (1967), with the limit of a wide contact after B. Fischer (2003))

    pitch² ρ/(π d) atan(4W/d) + ρ W (1 − exp(−W/pitch))

if all current entered at the front; holes generated on the way save a part of the second term.

Files go to the folder `results` where the script is run.
"""

import math
from pathlib import Path

import fem_carriers as fc

PITCHES_UM, DIAMETERS_UM = (130, 200, 300, 450), (30, 45, 70)
TARGET = {"target_error_percent": 0.5}
RESISTIVITY_OHM_CM, THICKNESS_UM = 1.5, 150
wafer = fc.Base("p", resistivity_ohm_cm=RESISTIVITY_OHM_CM, thickness_um=THICKNESS_UM, lifetime_us=500)
emitter = fc.DopedLayer("n", sheet_resistance_ohm_per_sq=120)
front = fc.Surface(J0_fA_per_cm2=30, layer=emitter, contact=fc.Contact("front", contact_resistivity_mohm_cm2=400))
dot_metal = fc.Contact("rear", contact_resistivity_mohm_cm2=1)
light = fc.Light.sunlight(reflectance=0.02 + 0.03, path="lambertian")


def dotted(pitch_um, diameter_um):
    """The unit cell of equal pitch in x and y."""
    rear = fc.Face(fc.Surface(J0_fA_per_cm2=8), [fc.Dot("dot", diameter_um, J0_fA_per_cm2=800, contact=dot_metal)])
    return fc.UnitCell(wafer, pitch_um, pitch_y_um=pitch_um, front=front, rear=rear, light=light)


def formula_ohm_cm2(pitch_um, diameter_um):
    """Series resistance of the base with dots, see above."""
    W, d, pitch = (1e-4 * length for length in (THICKNESS_UM, diameter_um, pitch_um))
    spreading = RESISTIVITY_OHM_CM / (math.pi * d) * math.atan(4 * W / d)
    return pitch**2 * spreading + RESISTIVITY_OHM_CM * W * (1 - math.exp(-W / pitch))


def main(pitches_um=PITCHES_UM, diameters_um=DIAMETERS_UM):
    results = Path("results")
    results.mkdir(exist_ok=True)
    variables = {"pitch_um": pitches_um, "diameter_um": diameters_um}
    table = fc.sweep(dotted, variables, compute=fc.current_voltage, **TARGET)
    current = table["maximum_power_mW_per_cm2"] / table["maximum_power_voltage_V"]
    table["base_ohm_cm2"] = 1e3 * table["lost_holes_in_the_base_mW_per_cm2"] / current**2
    table["formula_ohm_cm2"] = [formula_ohm_cm2(p, d) for p, d in zip(table.pitch_um, table.diameter_um, strict=True)]
    columns = {"pitch_um": "pitch (µm)", "diameter_um": "diameter (µm)", "voc_V": "Voc (V)",
               "fill_factor_percent": "FF (%)", "efficiency_percent": "efficiency (%)",
               "base_ohm_cm2": "base (Ω·cm²)", "formula_ohm_cm2": "formula (Ω·cm²)"}  # fmt: skip
    print(fc.with_bars(table, columns).to_string(index=False, float_format="{:.3f}".format))
    for diameter, rows in table.groupby("diameter_um"):
        print(f"dots of {diameter:g} µm: {fc.best_point(rows, 'pitch_um', 'efficiency_percent')}")
    best = table.loc[table["efficiency_percent"].idxmax()]
    pitch, diameter, voltage = (float(best[c]) for c in ("pitch_um", "diameter_um", "maximum_power_voltage_V"))
    fc.write_table(table, results / "rear_point_contacts.csv")
    fc.plot_map(table, "pitch_um", "diameter_um", picture=results / "rear_point_contacts.png")
    solution = fc.solve_bipolar(dotted(pitch, diameter), voltage, **TARGET)
    fc.write_fields(solution, results / "rear_point_contacts.vtu")
    fc.plot_losses(solution.losses, picture=results / "rear_point_contacts_losses.png")
    picture = results / "rear_point_contacts_potential.png"
    fc.view(solution, "hole_quasi_fermi_potential_V", picture=picture)
    return table, best


if __name__ == "__main__":
    main()
