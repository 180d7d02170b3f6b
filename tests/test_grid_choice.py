"""Finding a layout: against formulas, limits, interpolation, words."""

import math

import numpy as np
import pytest

import fem_carriers as fc
from fem_carriers.errors import InputError
from fem_carriers.grid.cell_curve import cell_curve
from fem_carriers.grid.diodes import diode_current
from fem_carriers.grid.layout import Grid, GridLayout
from fem_carriers.grid.metal import MetalLine
from fem_carriers.grid.operating import grid_maximum_power
from fem_carriers.grid.outline import CellOutline
from fem_carriers.grid.parts import Busbars, CollectionPoints, Fingers, Wires
from fem_carriers.grid.printing import Printing
from fem_carriers.studies.grid_choice import best_layout
from fem_carriers.studies.interpolation import Interpolant, lobatto, weights
from fem_carriers.studies.unit_cell_laws import unit_cell_laws

SILICON = diode_current(39.0, 25.0, J02_nA_per_cm2=4.0)
PRINT = Printing(20, lambda width_um: 20 * (1 - math.exp((8 - width_um) / 20)), resistivity_ohm_cm=3.2e-6)
WIRE = MetalLine.round_wire(130, 1.75e-6, shading_width_um=90)


def wafer(fingers=120, width_um=30.0, wires=10) -> GridLayout:
    lines = Fingers(PRINT.line(width_um), 90e3 / fingers * (1 - 1e-9))
    return GridLayout(CellOutline(90, 60), front=Grid(lines, wires=Wires(WIRE, wires)))


def shaded(pitch_um: float, width_um: float):
    """Light on metal is lost; the sheet of 150 Ω/sq is a series resistance R_sh p²/12."""
    return SILICON.with_light(1 - width_um / pitch_um).with_series_resistance(150 * (pitch_um * 1e-4) ** 2 / 12)


@pytest.fixture(scope="module")
def choice():
    variables = {"fingers": range(50, 151), "width_um": (20.0, 45.0), "wires": [6, 8, 10, 12]}
    return best_layout(wafer, shaded, variables, nodes=4)


def test_maximum_power_alone():
    curve = cell_curve(wafer(), SILICON)
    alone = grid_maximum_power(wafer(), SILICON)
    assert alone.power_mW == pytest.approx(curve.maximum_power.power_mW, rel=1e-9)
    assert alone.voltage_V == pytest.approx(curve.maximum_power.voltage_V, abs=1e-6)
    with pytest.raises(InputError, match="a lit cell"):
        grid_maximum_power(wafer(), SILICON.with_light(0))


def test_printing():
    table = Printing(20, [(20, 9), (30, 13), (45, 17)], 3.2e-6)
    assert table.line(25).height_um == pytest.approx(11)
    assert table.line(60).height_um == 17
    assert Printing(10, lambda w: w / 3, 3e-6).line(30).height_um == pytest.approx(10)
    with pytest.raises(InputError, match="the least printable width"):
        PRINT.line(19)
    with pytest.raises(InputError, match="rising widths"):
        Printing(20, [(30, 9), (20, 8)], 3e-6)


def test_polynomials_are_exact():
    # x² in powers, and ln²x in logarithms, from three nodes
    nodes = lobatto(2.0, 8.0, 3)
    assert nodes == pytest.approx([2, 4, 8])
    at = np.array([2.5, 3.0, 7.0])
    np.testing.assert_allclose(weights(nodes, at, (0, -1, 2)) @ (1 / nodes + 3 * nodes**2), 1 / at + 3 * at**2)
    np.testing.assert_allclose(weights(nodes, at) @ np.log(nodes) ** 2, np.log(at) ** 2)
    table = np.log(nodes)[:, None] * np.log(nodes)
    assert Interpolant((nodes, nodes), table[None]).at(3.0, 5.0) == pytest.approx([math.log(3) * math.log(5)])


def test_best_pitch_of_the_classical_losses():
    """S minimising R_sh S² J/12V (sheet) + L² S J ρ/(3 w h V) (finger) + w/S (shading), a cubic in S.

    V = 0.55 V, w = 60 µm, h = 15 µm, ρ = 3e-6 Ω cm, L = 2.6 cm, R_sh = 100 Ω/sq; J is that at maximum power of a cell
    with 37 mA/cm², less the shaded 3.6 %. Formulas as in M. A. Green, Solar Cells (1982), ch. 8 (from memory). The
    number of fingers is whole, so that the pitch comes in steps of 1.8 %.
    """
    V, w, L = 0.55, 60e-4, 2.6
    law = diode_current(37, 1e-3)
    scale = law.maximum_power_voltage_V / V  # the same fractions at this law's voltage
    J = 1e-3 * law.at(law.maximum_power_voltage_V) * (1 - 0.036)
    sheet, finger = 100 * J / (12 * V), L**2 * J * 3e-6 / (3 * w * 15e-4 * V)
    roots = np.roots([2 * sheet, finger, 0, -w])
    best_cm = float(next(r.real for r in roots if abs(r.imag) < 1e-12 and r.real > 0))

    def cell(pitch_um, width_um):
        lateral = 100 * (pitch_um * 1e-4) ** 2 / 12 * scale
        return law.with_light(1 - width_um / pitch_um).with_series_resistance(lateral)

    def layout(fingers):
        line = MetalLine(60, line_resistance_ohm_per_cm=3e-6 / (w * 15e-4) * scale)
        bar = Busbars(MetalLine(1e-3, line_resistance_ohm_per_cm=0), positions_mm=[5e-7])
        grid = Grid(Fingers(line, 9e4 / fingers * (1 - 1e-9)), bar, collection=CollectionPoints(per_busbar=1))
        return GridLayout(CellOutline(90, 26), front=grid)

    found = best_layout(layout, cell, {"fingers": range(38, 91)})
    assert 9 / found.best["fingers"] == pytest.approx(best_cm, rel=0.018)
    assert len(found.trade) == 1  # metal without a height has no mass
    power = found.best["power_mW"] / (9 * 2.6 * law.maximum_power_mW_per_cm2)
    assert 1 - power == pytest.approx(sheet * best_cm**2 + finger * best_cm + w / best_cm, rel=0.05)


def test_best_is_the_largest_of_what_can_be_solved(choice):
    best = choice.best
    for change in ({"fingers": 1}, {"fingers": -1}, {"wires": 2}, {"wires": -2}, {"width_um": 0.5}):
        at = {name: best[name] + change.get(name, 0) for name in ("fingers", "width_um", "wires")}
        solved = grid_maximum_power(wafer(**at), shaded(90e3 / at["fingers"], at["width_um"]))
        assert solved.power_mW < best["power_mW"] * (1 + 1e-5)
    assert choice.interpolation_percent < 0.02
    assert best["power_mW"] == pytest.approx(choice.solution.power_mW)


def test_interpolated_layouts_are_solved_ones(choice):
    at = {"fingers": 97, "width_um": 27.0, "wires": 8}
    solved = grid_maximum_power(wafer(**at), shaded(90e3 / 97, 27.0))
    assert choice.surface.at(at)["power_mW"] == pytest.approx(solved.power_mW, rel=4e-4)
    printed = solved.metal_mass_mg["finger"]
    assert choice.surface.at(at)["printed_mass_mg"] == pytest.approx(printed, rel=5e-3)


def test_limit_binds_and_costs(choice):
    limit = 0.7 * choice.best["printed_mass_mg"]
    variables = {"fingers": range(50, 151), "width_um": (20.0, 45.0), "wires": [6, 8, 10, 12]}
    tight = best_layout(wafer, shaded, variables, limits={"printed_mass_mg": limit}, nodes=4)
    assert tight.best["printed_mass_mg"] <= 1.002 * limit
    assert tight.best["power_mW"] < choice.best["power_mW"]
    assert any("the limit" in text for text in tight.binding)
    k = int(np.argmin(np.abs(choice.trade["printed_mass_mg"] - limit)))
    assert tight.best["power_mW"] == pytest.approx(choice.trade["power_mW"][k], rel=1e-3)
    with pytest.raises(InputError, match="no layout with printed_mass_mg at most 1"):
        best_layout(wafer, shaded, variables, limits={"printed_mass_mg": 1.0}, nodes=3)


def test_trade_and_flat_range(choice):
    trade = choice.trade
    assert (np.diff(trade["printed_mass_mg"]) > 0).all()
    assert (np.diff(trade["power_mW"]) > 0).all()
    assert trade["power_mW"].iloc[-1] == pytest.approx(choice.best["power_mW"], rel=1e-4)
    gain = trade["gain_mW_per_mg"].to_numpy()
    assert gain[0] > 5 * gain[-1] > 0
    low, high = choice.flat.loc["fingers", ["from", "to"]]
    assert low < choice.best["fingers"] < high
    at = choice.surface.best(fixed={"fingers": low})
    assert at["power_mW"] == pytest.approx(choice.best["power_mW"] * 0.999, rel=2e-4)


def test_words(choice):
    text = str(choice)
    assert f"best: {choice.best['fingers']:g} fingers" in text
    assert "within 0.1 % of that power: fingers" in text
    table = choice.by("wires")
    assert list(table["wires"]) == [6, 8, 10, 12]
    assert table["told_apart"].sum() == 3
    assert "more than the error bars" in choice.compared(choice.best, table.iloc[0])
    assert "cannot be told apart" in choice.compared(choice.best, choice.best)
    with pytest.raises(InputError, match="one of fingers, width_um, wires"):
        choice.by("pitch_um")


def test_refusals():
    with pytest.raises(InputError, match="a range of whole numbers"):
        best_layout(wafer, SILICON, {"fingers": (100, 20)})
    with pytest.raises(InputError, match="a limit on 'cost'"):
        best_layout(wafer, SILICON, {"fingers": [100]}, limits={"cost": 3})
    with pytest.raises(InputError, match="the least printable width") as refused:
        best_layout(wafer, SILICON, {"width_um": (10.0, 30.0)})
    assert "width_um = 10" in refused.value.__notes__[0]


def unit_cell(pitch_um, width_um):
    base = fc.Base("p", resistivity_ohm_cm=1.0, thickness_um=150, lifetime_us=500)
    metal = fc.Contact("front", contact_resistivity_mohm_cm2=2)
    finger = fc.Strip("finger", width_um, J0_fA_per_cm2=600, contact=metal)
    front = fc.Face(fc.Surface(J0_fA_per_cm2=30, layer=fc.DopedLayer("n", 130)), [finger])
    rear = fc.Face(fc.Surface(J0_fA_per_cm2=30, contact=fc.Contact("rear")))
    return fc.UnitCell(base, pitch_um, front=front, rear=rear, light=fc.Light.sunlight(0.03))


def test_laws_between_unit_cells():
    laws = unit_cell_laws(unit_cell, [900, 1300, 1900], [36], target_error_percent=1.0, processes=1)
    assert laws.interpolation_percent < 0.05
    between = laws(1600, 36)
    solved = fc.current_voltage(unit_cell(1600, 36), target_error_percent=1.0, progress=False)
    assert between.maximum_power_mW_per_cm2 == pytest.approx(solved.maximum_power.power_mW_per_cm2, rel=1e-3)
    assert between.voc_V == pytest.approx(solved.voc_V, abs=3e-4)
    assert between.jsc_mA_per_cm2 == pytest.approx(solved.jsc_mA_per_cm2, rel=1e-3)
    budget = solved.maximum_power.solution.losses
    assert np.interp(solved.maximum_power.voltage_V, *between.parts["sheet"]) == pytest.approx(
        budget.sum_of("sheet"), rel=0.05
    )
    assert between.error_bar_percent >= laws.interpolation_percent
    with pytest.raises(InputError, match="pitch_um = 2500"):
        laws(2500, 36)
    with pytest.raises(InputError, match="different numbers above 0"):
        unit_cell_laws(unit_cell, [900, 900], [30])
