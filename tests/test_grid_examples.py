"""The examples on grids run, leave their files, and say what formulas say."""

import math

import numpy as np
import pytest
from example_files import assert_written, number_after
from scipy.integrate import quad

from fem_carriers.grid.cell_curve import cell_at
from fem_carriers.grid.diodes import diode_current


def test_lab_cell(example, capsys):
    """Edges lower Voc as if J02 were larger by edge current × perimeter/area, metal as if J01 were (elementary).

    At open circuit current flows from lit places to metal, where up to half of it recombines; its way through the sheet
    takes about a millivolt that the formula does not know.
    """
    module = example("grid_lab_cell")
    table, enough, curves = module.main((12, 22, 40))
    cost = table["ideal_voc_V"] - table["voc_V"]
    for side, found, ideal in zip(table["side_mm"], cost, table["ideal_voc_V"], strict=True):
        edge, covered = module.EDGE_NA_PER_CM * 40 / side, metal_share(module, side)
        J01, light = 35 + covered * (600 - 35), 40.5 * (1 - covered)
        two = [diode_current(light, J01, J02_nA_per_cm2=j, shunt_ohm_cm2=2e4).voc_V for j in (3, 3 + edge)]
        assert 0 < two[0] - ideal < 1.5e-3
        assert found == pytest.approx(two[0] - two[1], rel=0.1)
    lost = table["lost_at_edges_percent"]
    assert (np.diff(lost) < 0).all()
    assert table["side_mm"].iloc[0] < enough < table["side_mm"].iloc[-1]
    for curve in curves.values():
        assert abs(curve.losses.misclosure_mW) < 1e-3 * curve.losses.available_mW
    assert number_after(capsys.readouterr().out, "above a side of") == pytest.approx(enough, abs=0.06)
    assert_written("grid_lab_cell.csv", "grid_lab_cell.png", "grid_lab_cell_losses.png")


def metal_share(module, side_mm):
    """Of the area: the frame, and fingers over the length inside it."""
    inner = side_mm - 2 * (module.INSET_UM + module.BAR_UM) / 1e3
    frame = 4 * module.BAR_UM / 1e3 * (side_mm - 2 * module.INSET_UM / 1e3 - module.BAR_UM / 1e3)
    fingers = math.floor(inner / 1.1 + 1e-6) * 25e-3 * inner
    return (frame + fingers) / side_mm**2


def test_tapered_fingers(example, capsys):
    """Loss against ρ/h ∫ (J p s)²/w ds over the finger, w from tip to root; 3/4 of a uniform finger's for no tip.

    The ratio 1/4 to 1/3 at equal mass is classical (e.g. A. Flat and A. G. Milnes, Solar Energy 23, 289 (1979), from
    memory). J differs from an even one by the voltage along the finger.
    """
    module = example("grid_tapered")
    table, gain, curves = module.main()
    lost = table["lost_in_fingers_mW"].to_numpy()
    shape = [
        quad(lambda s, a=a: s**2 * (1 + a) / 2 / (a + (1 - a) * s), 0, 1)[0] for a in module.SHARES
    ]  # mean width over width
    np.testing.assert_allclose(lost / lost[0], np.array(shape) * 3, rtol=2e-3)
    assert np.ptp(table["finger_mass_mg"]) < 1e-6 * table["finger_mass_mg"][0]
    length, pitch = module.LENGTH_MM / 10, module.PITCH_UM * 1e-4
    section = module.MEAN_UM * module.HEIGHT_UM * 1e-8
    number = round(module.CELL_MM * 1e3 / module.PITCH_UM)
    J = curves[1.0].maximum_power.current_A / (6.0 * 2.8)  # 1 mm of 29 lies under the busbar
    even = 1e3 * number * module.RESISTIVITY / section * (J * pitch) ** 2 * length**3 / 3
    assert lost[0] == pytest.approx(even, rel=0.02)
    assert (np.diff(table["power_mW"]) > 0).all()
    assert table["gain_percent"].iloc[-1] == pytest.approx(100 * (lost[0] - lost[-1]) / table["power_mW"][0], rel=0.1)
    assert number_after(capsys.readouterr().out, "tapering gains") == pytest.approx(gain, abs=6e-4)
    assert_written("grid_tapered.csv", "grid_tapered.png")


def test_broken_fingers(example, monkeypatch):
    """With an even J the sheet around a piece left alone loses J² R_sh l [(2S − w)³ − 2 (S − w)³]/12 more (elementary).

    The other gaps leave all metal connected. The field at the piece's ends carries a part, within a pitch or so.
    """
    module = example("grid_broken_fingers")
    table, solved = module.main()
    cost = table["lost (mW)"].to_numpy()
    assert abs(cost[1]) < 0.02 < cost[2] < 0.2 * cost[3] < cost[4]
    assert (table["in the sheet (mW)"][3:] < table["formula (mW)"][3:]).all()
    assert solved["two between busbars"].worst_place["above_terminal_mV"] > table["worst place (mV)"][0] + 20
    even = diode_current(40, 0)
    monkeypatch.setattr(module, "GAP_UM", 1500)  # wide enough that the piece does not reach across

    def in_sheet(*places):
        solution = cell_at(module.layout(places), even, 0.3, mode="resolved", symmetry="none")
        return solution.losses.rows["resistance", "front: sheet"]

    S, w = module.PITCH_UM * 1e-4, module.metal.width_um * 1e-4
    formula = 1e3 * 0.04**2 * module.SHEET_OHM * ((2 * S - w) ** 3 - 2 * (S - w) ** 3) / 12
    per_cm = (in_sheet(13, 31) - in_sheet(16, 28)) / 0.6
    assert per_cm == pytest.approx(formula, rel=0.05)
    assert 0.85 < (in_sheet(13, 31) - in_sheet()) / (1.95 * formula) < 1
    assert_written("grid_broken_fingers.csv", "grid_broken_fingers.png", "grid_broken_fingers_unit.png")


def test_wafer(example, capsys):
    """The chosen layout, solved as a whole wafer: area, mass and finger loss by hand.

    Fingers fed over l = H/(2 n) on both sides of each of n wires lose r p J² l²/3 per area (elementary); with a share a
    of the light taken by the wires, where they are joined, the same J comes from the rest: 1 + 2 a times as much.
    """
    module = example("grid_wafer")
    laws, choice, curve = module.main((24, 30))
    best = choice.best
    fingers, width, wires = best["fingers"], best["width_um"], best["wires"]
    metal = module.silver.line(width)
    assert best["printed_mass_mg"] == pytest.approx(fingers * module.HEIGHT_MM / 10 * metal.mass_mg_per_cm, rel=1e-6)
    assert best["printed_mass_mg"] <= module.LIMIT_MG * 1.001
    assert any("limit" in text for text in choice.binding)
    area = module.WIDTH_MM * module.HEIGHT_MM / 100
    J = 1e-3 * choice.solution.current_mA_per_cm2
    pitch, reach = module.WIDTH_MM / 10 / fingers, module.HEIGHT_MM / 10 / (2 * wires)
    formula = 1e3 * area * metal.resistance_ohm_per_cm * pitch * J**2 * reach**2 / 3
    formula *= 1 + 2 * wires * module.wire.shaded_um * 1e-3 / module.HEIGHT_MM
    assert choice.solution.losses.rows["resistance", "front: finger"] == pytest.approx(formula, rel=0.01)
    assert curve.maximum_power.area_cm2 < area
    assert curve.maximum_power.power_mW_per_cm2 == pytest.approx(best["power_mW_per_cm2"], rel=5e-3)
    assert abs(curve.losses.misclosure_mW) < 1e-3 * curve.losses.available_mW
    assert 0 < laws.interpolation_percent < 0.1
    out = capsys.readouterr().out
    assert f"best: {fingers:g} fingers" in out
    assert_written("grid_wafer.csv", "grid_wafer.png", "grid_wafer_losses.png", "grid_wafer_plan.png")
