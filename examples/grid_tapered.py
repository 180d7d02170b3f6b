"""What does tapering the fingers save, for the same metal and a tip that can still be printed?

A finger that collects evenly carries its largest current at the root, so metal is better spent there. In each finger

    −d(g dx/ds)/ds = pitch · J(u),   g = w(s) h/ρ,   w linear from the root to the tip, of the same mean throughout;

u is the local cell voltage, where (n0 + Δn)(p0 + Δn) = ni² exp(u/V_T). With an even J the loss is a third of what the
root's current would lose along the whole finger, and a quarter with a tip of no width. Files go to `results`.
"""

from pathlib import Path

import numpy as np
import pandas as pd

import fem_carriers as fc
from fem_carriers.grid.cell_curve import cell_curve
from fem_carriers.grid.diodes import diode_current
from fem_carriers.grid.layout import Grid, GridLayout
from fem_carriers.grid.metal import MetalLine
from fem_carriers.grid.outline import CellOutline
from fem_carriers.grid.parts import Busbars, CollectionPoints, Fingers
from fem_carriers.output.plan import plot_repeat_unit

PITCH_UM, MEAN_UM, HEIGHT_UM, LEAST_UM = 1500, 60, 16, 30
LENGTH_MM, CELL_MM = 28, 60
SHARES = (1.0, 0.8, 0.6, 0.4, 0.2, 0.0)
RESISTIVITY = 3.1e-6
current = diode_current(38.5, J01_fA_per_cm2=60, J02_nA_per_cm2=5, series_resistance_ohm_cm2=0.35).with_light(
    1 - MEAN_UM / PITCH_UM
)


def layout(tip_share):
    """Fingers on one busbar at the lower side; tip and root widths have the mean `MEAN_UM`."""
    root = 2 * MEAN_UM / (1 + tip_share)
    line = MetalLine(root, HEIGHT_UM, resistivity_ohm_cm=RESISTIVITY)
    bar = Busbars(MetalLine(1000, 200, resistivity_ohm_cm=2e-6), positions_mm=[0.5])
    grid = Grid(
        Fingers(line, PITCH_UM, tip_width_um=tip_share * root, margin_um=(0, 0)), bar,
        collection=CollectionPoints(per_busbar=4),
    )  # fmt: skip
    return GridLayout(CellOutline(CELL_MM, LENGTH_MM + 1), front=grid)


def main():
    results = Path("results")
    results.mkdir(exist_ok=True)
    rows, curves = [], {}
    for share in SHARES:
        curve = curves[share] = cell_curve(layout(share), current)
        root = 2 * MEAN_UM / (1 + share)
        best = curve.maximum_power
        rows.append({"root_um": root, "tip_um": share * root, "finger_mass_mg": best.metal_mass_mg["finger"],
                     "lost_in_fingers_mW": curve.losses.rows["resistance", "front: finger"],
                     "power_mW": best.power_mW})  # fmt: skip
    table = pd.DataFrame(rows)
    table["gain_percent"] = 100 * (table["power_mW"] / table["power_mW"][0] - 1)
    print(table.to_string(index=False, float_format="{:.4g}".format))
    gain = float(np.interp(LEAST_UM, table["tip_um"][::-1], table["gain_percent"][::-1]))
    print(f"with a tip of {LEAST_UM} µm, the least that can be printed, tapering gains {gain:.3f} % of the power")
    finer = fc.grid_maximum_power(layout(SHARES[0]), current, fineness=2.0).power_mW
    uniform = float(table["power_mW"][0])
    print(f"uniform fingers: {fc.with_bar(uniform, abs(uniform - finer))} mW, ± the change on a finer mesh")
    fc.write_table(table, results / "grid_tapered.csv")
    plot_repeat_unit(curves[0.2].maximum_power, results / "grid_tapered.png")
    return table, gain, curves


if __name__ == "__main__":
    main()
