"""Which contact pitch gives the most power: narrow, with much shade and metal, or wide, with long ways to the contact?

Fingers on a full n-type layer lie on the front of a p-type wafer, line contacts on its rear; AM1.5G light enters the
front. Solved are the excess density Δn and the potentials of majority carriers and layers,

    ∇·Jn = q (R − G),   ∇·Jp = −q (R − G),   n − n0 = p − p0 = Δn,   Jn = −q µn n ∇φn,   Jp = −q µp p ∇φp,
    ∇s·(∇sφ/R_sh) = current that enters the layer − (φ − V)/ρc under the fingers,   q U = J0 (np/ni² − 1).

Files go to the folder `results` where the script is run. `--collected` instead asks how much a cell collects whose
junction lies under the fingers alone (`collected_current_sweep.py`).
"""

import runpy
import sys
from pathlib import Path

import numpy as np

import fem_carriers as fc

wafer = fc.Base("p", resistivity_ohm_cm=0.9, thickness_um=150, lifetime_us=400)
finger_metal = fc.Contact("front", contact_resistivity_mohm_cm2=1.5)
finger = fc.Strip("finger", width_um=28, J0_fA_per_cm2=750, contact=finger_metal)
line = fc.Strip("line", width_um=45, J0_fA_per_cm2=450, contact=fc.Contact("rear", contact_resistivity_mohm_cm2=1))
front = fc.Face(fc.Surface(J0_fA_per_cm2=28, layer=fc.DopedLayer("n", sheet_resistance_ohm_per_sq=130)), [finger])
rear = fc.Face(fc.Surface(J0_fA_per_cm2=9), [line])
light = fc.Light.sunlight(reflectance=0.02, path="lambertian")
cell = fc.UnitCell(wafer, pitch_um=1200, front=front, rear=rear, light=light)

PITCHES_UM = np.geomspace(500, 3000, 14).round(-1)
LOST = {"shading": "shaded", "bulk": "lost_base", "surfaces": ("lost_front", "lost_rear"), "layers": "lost_layer",
        "base transport": ("lost_electrons", "lost_holes"), "contacts": "lost_contact"}  # fmt: skip
WORDS = {"bulk": "recombination in the", "surface": "recombination at", "transport": "transport of",
         "sheet": "transport in the", "contact": "resistance of"}  # fmt: skip
HEADLINES = {"pitch_um": "pitch (µm)", "voc_V": "Voc (V)", "efficiency_percent": "efficiency (%)"}


def grouped(table):
    """Headline numbers with error bars, and losses of a few kinds, mW/cm²."""
    short = fc.with_bars(table, HEADLINES)
    for kind, beginning in LOST.items():
        short[kind] = table[[c for c in table if c.startswith(beginning) and c.endswith("mW_per_cm2")]].sum(axis=1)
    return short


def limits(losses):
    """The three largest losses by name; reflected and escaping light are the same for every pitch."""
    parts = {f"{WORDS[kind]} {name}": value for (kind, name), value in losses.rows.items() if kind in WORDS}
    parts["shading"] = losses.optical["shaded"]
    return "; ".join(f"{name} {parts[name]:.2f}" for name in sorted(parts, key=parts.get, reverse=True)[:3])


def main(pitches_um=PITCHES_UM):
    results = Path("results")
    results.mkdir(exist_ok=True)
    table = fc.sweep(cell, {"pitch_um": pitches_um}, compute=fc.current_voltage)
    print("Losses at maximum power in mW/cm²; those of light that is reflected or escapes are left out")
    print(grouped(table).to_string(index=False, float_format="{:.2f}".format))
    best = fc.best_point(table, "pitch_um", "efficiency_percent")
    print(best)
    curve = fc.current_voltage(fc.changed(cell, {"pitch_um": best.location}))
    solution = curve.maximum_power.solution
    print(f"Limited there by (mW/cm²): {limits(solution.losses)}")
    print(f"At that pitch, ± what the mesh may cost:\n{curve}")
    fc.write_table(table, results / "contact_pitch_sweep.csv")
    fc.plot_sweep(table, "pitch_um", picture=results / "contact_pitch_sweep.png")
    fc.plot_curve(curve, picture=results / "contact_pitch_sweep_curve.png")
    fc.plot_losses(solution.losses, picture=results / "contact_pitch_sweep_losses.png")
    fc.write_fields(solution, results / "contact_pitch_sweep.vtu")
    fc.view(solution, picture=results / "contact_pitch_sweep_excess_density.png", arrows=True, stretch_z=2)
    return best, table, curve


if __name__ == "__main__":
    if "--collected" in sys.argv[1:]:
        runpy.run_path(str(Path(__file__).with_name("collected_current_sweep.py")), run_name="__main__")
    else:
        main()
