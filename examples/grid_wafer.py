"""How many fingers and wires does a half-cut wafer need, how wide, and how much metal?

Between fingers the unit cell is solved: ∇·Γ + G − R(Δn) = 0 with its sheet and contacts, for a few pitches and finger
widths. Its law J(u) then feeds fingers that are joined to wires, with R in Ω/cm and u the local cell voltage:

    −d(dx/ds / R)/ds = pitch · J(u) along every finger,   −d(dx/ds / R)/ds = the fingers' currents along every wire.

Narrow prints are low, so metal can be saved by width or by number. Files go to the folder `results`.
"""

import math
from pathlib import Path

import fem_carriers as fc
from fem_carriers.grid.cell_curve import cell_curve
from fem_carriers.grid.layout import Grid, GridLayout
from fem_carriers.grid.metal import MetalLine
from fem_carriers.grid.outline import CellOutline
from fem_carriers.grid.parts import Fingers, Wires
from fem_carriers.grid.printing import Printing
from fem_carriers.output.plan import plot_plan
from fem_carriers.output.plan_power import plot_grid_losses, plot_trade
from fem_carriers.studies.grid_choice import best_layout
from fem_carriers.studies.unit_cell_laws import unit_cell_laws

WIDTH_MM, HEIGHT_MM = 178, 89
LIMIT_MG = 14
HEADINGS = {"wires": "wires", "fingers": "fingers", "width_um": "width (µm)", "power_mW": "power (mW)",
            "printed_mass_mg": "print (mg)", "wire_mass_mg": "wire (mg)", "below_best_percent": "below best (%)",
            "told_apart": "told apart"}  # fmt: skip
silver = Printing(24, lambda width_um: 20 * (1 - math.exp((16 - width_um) / 18)), resistivity_ohm_cm=3.3e-6)
wire = MetalLine.round_wire(200, resistivity_ohm_cm=1.75e-6, shading_width_um=140)
half_wafer = CellOutline(WIDTH_MM, 2 * HEIGHT_MM, diameter_mm=242, pieces=2)


def unit_cell(pitch_um, width_um):
    """One finger of an n-type wafer with a p-type layer on its front and a passivating contact all over its rear."""
    metal = fc.Contact("front", contact_resistivity_mohm_cm2=1.2)
    finger = fc.Strip("finger", width_um, J0_fA_per_cm2=650, contact=metal)
    front = fc.Face(fc.Surface(J0_fA_per_cm2=20, layer=fc.DopedLayer("p", 160)), [finger])
    rear = fc.Face(fc.Surface(J0_fA_per_cm2=7, layer=fc.DopedLayer("n", 70), contact=fc.Contact("rear", 4)))
    wafer = fc.Base("n", resistivity_ohm_cm=1.2, thickness_um=135, lifetime_us=2000)
    return fc.UnitCell(wafer, pitch_um, front=front, rear=rear, light=fc.Light.sunlight(0.025, path="lambertian"))


def layout(fingers, width_um, wires, outline=None, margin_um=0):
    """Fingers that fill the width, and wires that lead to the terminal on one side."""
    rows = Wires(wire, wires, ends="high")
    lines = Fingers(silver.line(width_um), 1e3 * WIDTH_MM / fingers * (1 - 1e-9), margin_um=margin_um)
    return GridLayout(outline or CellOutline(WIDTH_MM, HEIGHT_MM), front=Grid(lines, wires=rows))


def main(widths_um=(24, 34, 48)):
    results = Path("results")
    results.mkdir(exist_ok=True)
    laws = unit_cell_laws(unit_cell, [800, 1250, 1950], widths_um, target_error_percent=0.2)
    ranges = {"fingers": range(92, 222), "width_um": (widths_um[0], widths_um[-1]), "wires": range(8, 21)}
    choice = best_layout(layout, laws, ranges, limits={"printed_mass_mg": LIMIT_MG}, nodes=4)
    table = choice.by("wires")
    print(f"At most {LIMIT_MG} mg of print: the best layout for every number of wires")
    print(fc.with_bars(table, HEADINGS).to_string(index=False, float_format="{:.4g}".format))
    print(choice)
    print(choice.compared(choice.best, table[table["wires"] == choice.best["wires"] + 1].iloc[0]))
    fingers, width_um, wires = (choice.best[name] for name in ranges)
    whole = layout(fingers, width_um, wires, half_wafer, margin_um=700)
    curve = cell_curve(whole, laws(1e3 * WIDTH_MM / fingers, width_um))
    print(f"The whole half wafer with its corners and margins:\n{curve}")
    fc.write_table(choice.trade, results / "grid_wafer.csv")
    plot_trade(choice, results / "grid_wafer.png")
    plot_grid_losses(curve.losses, results / "grid_wafer_losses.png")
    plot_plan(curve.maximum_power, results / "grid_wafer_plan.png")
    return laws, choice, curve


if __name__ == "__main__":
    main()
