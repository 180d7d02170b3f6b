"""How much power does the edge of a small cell cost, and how large must the cell be for it to lose less than 1 %?

A square cell with fingers inside a perimeter busbar; the sheet between them is resolved,

    −∇·(∇x/R_sh) = J(u) − (x − x_metal)/ρc under metal,        current e (exp(u/2V_T) − 1) per cm out of its outline,

u is the local cell voltage, where (n0 + Δn)(p0 + Δn) = ni² exp(u/V_T). Where a cell was cut its junction ends at an
edge that can be passivated only in part. Per area its current goes as perimeter/area, 4/side. Files go to `results`.
"""

from pathlib import Path

import numpy as np
import pandas as pd

import fem_carriers as fc
from fem_carriers.grid.cell_curve import cell_curve
from fem_carriers.grid.diodes import diode_current
from fem_carriers.grid.layout import Grid, GridLayout
from fem_carriers.grid.local_laws import EdgeRecombination
from fem_carriers.grid.metal import MetalLine
from fem_carriers.grid.outline import CellOutline
from fem_carriers.grid.parts import CollectionPoints, Fingers, PerimeterBusbar
from fem_carriers.output.plan import plot_plan
from fem_carriers.output.plan_power import plot_grid_losses

EDGE_NA_PER_CM = 2.5
SIDES_MM = (12, 16, 22, 30, 40)
BAR_UM, INSET_UM = 350, 200
current = diode_current(40.5, J01_fA_per_cm2=35, J02_nA_per_cm2=3, shunt_ohm_cm2=2e4)
under_metal = diode_current(0, J01_fA_per_cm2=600)
finger = MetalLine(25, 6, resistivity_ohm_cm=2.2e-6)
bar = MetalLine(BAR_UM, 6, resistivity_ohm_cm=2.2e-6)


def layout(side_mm):
    """A square with evaporated and plated fingers, probed in the middle of two sides."""
    inner = INSET_UM / 1e3 + BAR_UM / 2e3
    probes = CollectionPoints(points_mm=[(side_mm / 2, inner), (side_mm / 2, side_mm - inner)])
    grid = Grid(
        Fingers(finger, 1100), perimeter=PerimeterBusbar(bar, INSET_UM), collection=probes,
        sheet_resistance_ohm_per_sq=110, contact_resistivity_mohm_cm2=0.3,
    )  # fmt: skip
    return GridLayout(CellOutline(side_mm, side_mm), front=grid)


def solved(side_mm, edge_nA_per_cm, fineness=None):
    edge = EdgeRecombination(edge_nA_per_cm) if edge_nA_per_cm > 0 else None
    options = {"mode": "resolved", "under_metal": under_metal, "edge": edge, "fineness": fineness}
    return cell_curve(layout(side_mm), current, voltages_V=[], **options)


def main(sides_mm=SIDES_MM):
    results = Path("results")
    results.mkdir(exist_ok=True)
    rows, curves = [], {}
    for side in sides_mm:
        cut, ideal = solved(side, EDGE_NA_PER_CM), solved(side, 0)
        lost = 100 * (1 - cut.maximum_power.power_mW / ideal.maximum_power.power_mW)
        rows.append({"side_mm": side, "voc_V": cut.voc_V, "ideal_voc_V": ideal.voc_V,
                     "efficiency_percent": cut.efficiency_percent, "lost_at_edges_percent": lost})  # fmt: skip
        curves[f"{side} mm"] = cut
    table = pd.DataFrame(rows)
    print(table.to_string(index=False, float_format="{:.4g}".format))
    enough = float(np.exp(np.interp(0, -np.log(table["lost_at_edges_percent"]), np.log(table["side_mm"]))))
    print(f"edges cost less than 1 % of the power above a side of {enough:.1f} mm")
    smallest = next(iter(curves.values()))
    power = smallest.maximum_power.power_mW
    finer = solved(sides_mm[0], EDGE_NA_PER_CM, fineness=2.0).maximum_power.power_mW
    print(f"smallest cell: {fc.with_bar(power, abs(power - finer))} mW, ± the change on a finer mesh")
    fc.write_table(table, results / "grid_lab_cell.csv")
    plot_plan(smallest.maximum_power, results / "grid_lab_cell.png")
    plot_grid_losses(smallest.losses, results / "grid_lab_cell_losses.png")
    return table, enough, curves


if __name__ == "__main__":
    main()
