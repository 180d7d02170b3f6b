"""Which breaks in fingers matter, and how much power does each of them cost?

The sheet between fingers is resolved, so that current finds its way around a gap,

    −∇·(∇x/R_sh) = J(u) − (x − x_metal)/ρc under metal,        −d(g dx/ds)/ds = current from the sheet along fingers;

u is the local cell voltage, where (n0 + Δn)(p0 + Δn) = ni² exp(u/V_T). A gap between two busbars leaves both pieces
connected. A piece of length l without any busbar sends its current to both neighbours: the sheet loses as with twice
the pitch S, J² R_sh l (8 − 2) S³/12 more, if J is even. Files go to the folder `results`.
"""

from itertools import pairwise
from pathlib import Path

import pandas as pd

import fem_carriers as fc
from fem_carriers.grid.diodes import diode_current
from fem_carriers.grid.layout import Grid, GridLayout
from fem_carriers.grid.metal import MetalLine
from fem_carriers.grid.outline import CellOutline
from fem_carriers.grid.parts import Breaks, Busbars, CollectionPoints, Fingers
from fem_carriers.output.plan import plot_plan, plot_repeat_unit

WIDTH_MM, HEIGHT_MM, BARS_MM = 24, 44, (11, 33)
PITCH_UM, SHEET_OHM, GAP_UM, FINGER = 1600, 120, 150, 7
current = diode_current(40, J01_fA_per_cm2=40, J02_nA_per_cm2=2)
metal = MetalLine(45, 14, 2 / 3, resistivity_ohm_cm=3.2e-6)
busbar = MetalLine(700, 14, resistivity_ohm_cm=3.2e-6)
CASES = {"none": (), "half-way between busbars": (22,), "beside a busbar, between": (12.5,),
         "beside a busbar, outside": (34.5,), "two between busbars": (13, 31)}  # fmt: skip


def layout(places_mm):
    """Fingers on two busbars; the places are gaps in one finger."""
    breaks = Breaks(GAP_UM, [(FINGER, y) for y in places_mm]) if places_mm else None
    grid = Grid(
        Fingers(metal, PITCH_UM), Busbars(busbar, positions_mm=BARS_MM), collection=CollectionPoints(per_busbar=2),
        breaks=breaks, sheet_resistance_ohm_per_sq=SHEET_OHM, contact_resistivity_mohm_cm2=1.0,
    )  # fmt: skip
    return GridLayout(CellOutline(WIDTH_MM, HEIGHT_MM), front=grid)


def alone_mm(places_mm):
    """Length of the pieces that no busbar holds."""
    edges = [0, *places_mm, HEIGHT_MM]
    return sum(b - a for a, b in pairwise(edges) if not any(a < bar < b for bar in BARS_MM))


def main():
    results = Path("results")
    results.mkdir(exist_ok=True)
    options = {"mode": "resolved", "symmetry": "none"}
    solved = {name: fc.grid_maximum_power(layout(y), current, **options) for name, y in CASES.items()}
    whole = solved["none"]
    amperes = 1e-3 * whole.current_mA_per_cm2
    rows = []
    for name, solution in solved.items():
        alone = alone_mm(CASES[name])
        sheet = solution.losses.rows["resistance", "front: sheet"] - whole.losses.rows["resistance", "front: sheet"]
        rows.append({"gaps": name, "left alone (mm)": alone, "power (mW)": solution.power_mW,
                     "lost (mW)": whole.power_mW - solution.power_mW, "in the sheet (mW)": sheet,
                     "formula (mW)": 1e3 * amperes**2 * SHEET_OHM * alone / 10 * (PITCH_UM * 1e-4) ** 3 / 2,
                     "worst place (mV)": solution.worst_place["above_terminal_mV"]})  # fmt: skip
    table = pd.DataFrame(rows)
    print(table.to_string(index=False, float_format="{:.4g}".format))
    lost = table["lost (mW)"]
    finer = fc.grid_maximum_power(layout(CASES["none"]), current, fineness=2.0, **options).power_mW
    print(f"without gaps {fc.with_bar(whole.power_mW, abs(whole.power_mW - finer))} mW, ± the change on a finer mesh")
    print(f"two gaps between busbars cost {lost.iloc[-1]:.3f} mW, one half-way {lost[1]:.3f}")
    print("(a gap shades nothing, and the voltage of a piece left alone is beyond maximum power: sheet is not all)")
    fc.write_table(table, results / "grid_broken_fingers.csv")
    place = (FINGER * PITCH_UM / 1e3 + 1.2, 22)
    plot_plan(solved["two between busbars"], results / "grid_broken_fingers.png")
    plot_repeat_unit(solved["two between busbars"], results / "grid_broken_fingers_unit.png", at_mm=place)
    return table, solved


if __name__ == "__main__":
    main()
