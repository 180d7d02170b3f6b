"""The driver: symmetry, closure, maps, varying laws, wires and pads."""

import numpy as np
import pytest

from fem_carriers.errors import InputError
from fem_carriers.grid.cell_curve import cell_at, cell_curve
from fem_carriers.grid.diodes import diode_current
from fem_carriers.grid.layout import Grid, GridLayout
from fem_carriers.grid.local_laws import EdgeRecombination, Region
from fem_carriers.grid.metal import MetalLine
from fem_carriers.grid.outline import CellOutline
from fem_carriers.grid.parts import Breaks, Busbars, CollectionPoints, Fingers, PerimeterBusbar, Wires
from fem_carriers.grid.tables import current_from_table

SILICON = diode_current(39.0, 25.0, J02_nA_per_cm2=4.0)
METAL = diode_current(0.0, 500.0)
FINGER = MetalLine(40, 15, 2 / 3, 3e-6)
BAR = MetalLine(600, 15, resistivity_ohm_cm=3e-6)
WIRE = MetalLine.round_wire(250, 1.8e-6, shading_width_um=180)
SHEET = {"sheet_resistance_ohm_per_sq": 130.0, "contact_resistivity_mohm_cm2": 1.5}


def wired(ends="both", n=3, **more) -> GridLayout:
    grid = Grid(Fingers(FINGER, 1300, **more), wires=Wires(WIRE, n, ends=ends, joint_resistance_mohm=20), **SHEET)
    return GridLayout(CellOutline(13, 24), front=grid)


@pytest.mark.parametrize("mode", ["smeared", "resolved"])
@pytest.mark.parametrize("margin", [0.0, 600.0])
def test_symmetry_changes_nothing(mode, margin):
    layout = wired(margin_um=margin)
    unit, whole = (cell_curve(layout, SILICON, mode=mode, symmetry=s) for s in ("auto", "none"))
    assert unit.maximum_power.window.repeats == (12 if margin == 0 else 4)
    assert whole.maximum_power.window.repeats == 1
    assert unit.maximum_power.power_mW == pytest.approx(
        whole.maximum_power.power_mW, rel=1e-8 if mode == "smeared" else 2e-5
    )
    for name, value in whole.losses.rows.items():
        assert unit.losses.rows[name] == pytest.approx(value, rel=2e-3, abs=1e-4)
    assert sum(unit.maximum_power.metal_mass_mg.values()) == pytest.approx(
        sum(whole.maximum_power.metal_mass_mg.values())
    )
    for solution in (unit.maximum_power, whole.maximum_power):
        assert solution.samples["area_cm2"].sum() == pytest.approx(layout.outline.area_cm2)
        assert solution.samples["x_max_mm"].max() == pytest.approx(13)
        assert solution.samples["y_max_mm"].max() == pytest.approx(24)


@pytest.mark.parametrize("mode", ["smeared", "resolved"])
def test_budget_closes(mode):
    curve = cell_curve(wired("high"), SILICON, mode=mode, under_metal=METAL)
    losses = curve.losses
    assert abs(losses.misclosure_mW) < 1e-8 * losses.available_mW
    assert losses.output_mW == pytest.approx(curve.maximum_power.power_mW)
    parts = {name for kind, name in losses.rows if kind == "resistance"}
    expected = {"front: finger", "front: wire", "joint: wires"}
    assert parts == expected | ({"front: sheet", "front: contact"} if mode == "resolved" else set())
    assert ("recombination", "recombination under metal") in losses.rows or mode == "smeared"
    assert losses.table["percent_absolute"].notna().all()


def test_current_is_the_slope_of_nothing_else():
    # dI/dV of the linearised equations against differences
    layout = wired("high")
    one, two = (cell_at(layout, SILICON, v, mode="resolved") for v in (0.61, 0.6102))
    middle = cell_at(layout, SILICON, 0.6101, mode="resolved")
    slope = (two.current_mA_per_cm2 - one.current_mA_per_cm2) / 2e-4
    assert middle.slope_mA_per_cm2_V == pytest.approx(slope, rel=1e-4)


def test_maximum_power_is_the_maximum():
    layout = wired("high")
    best = cell_curve(layout, SILICON).maximum_power
    for step in (-1e-3, 1e-3):
        assert cell_at(layout, SILICON, best.voltage_V + step).power_mW < best.power_mW
    assert cell_at(layout, SILICON, best.voltage_V).power_mW == pytest.approx(best.power_mW, rel=1e-9)


def test_currents_in_the_metal_add_up():
    solution = cell_at(wired("high"), SILICON, 0.55, symmetry="none")
    wires = solution.metal[solution.metal["kind"] == "wire"]
    out = wires[wires["x_end_mm"] == wires["x_end_mm"].max()]["current_mA"].sum()
    assert out == pytest.approx(1e3 * solution.current_A, rel=1e-6)
    assert solution.worst_place["x_mm"] < 2
    assert solution.worst_place["above_terminal_mV"] > 0


def test_polarity_changes_nothing_but_signs():
    def layout(collects):
        grid = Grid(Fingers(FINGER, 1300), wires=Wires(WIRE, 2), collects=collects, **SHEET)
        return GridLayout(CellOutline(13, 20), front=grid)

    one, two = (cell_at(layout(c), SILICON, 0.6, mode="resolved") for c in ("electrons", "holes"))
    assert one.power_mW == pytest.approx(two.power_mW, rel=1e-10)
    np.testing.assert_allclose(one.sheet_nodes[1][0], -two.sheet_nodes[1][0], atol=1e-12)


def test_front_and_rear_sheets():
    front = Grid(Fingers(FINGER, 1300), wires=Wires(WIRE, 2), **SHEET)
    rear = Grid(Fingers(MetalLine(80, 10, 1.0, 5e-6), 1300), wires=Wires(WIRE, 2), collects="holes", **SHEET)
    both = cell_curve(GridLayout(CellOutline(13, 20), front=front, rear=rear), SILICON, mode="resolved")
    alone = cell_curve(GridLayout(CellOutline(13, 20), front=front), SILICON, mode="resolved")
    resistance = {k: v for k, v in both.maximum_power.series_resistance_ohm_cm2.items() if k.startswith("rear")}
    front_only = sum(alone.maximum_power.series_resistance_ohm_cm2.values())
    shaded = SILICON.with_light(alone.jsc_mA_per_cm2 / SILICON.jsc_mA_per_cm2)
    one, two = (
        shaded.with_series_resistance(r).maximum_power_mW_per_cm2
        for r in (front_only, front_only + sum(resistance.values()))
    )
    assert sum(resistance.values()) > 0.2
    cost = alone.maximum_power.power_mW_per_cm2 - both.maximum_power.power_mW_per_cm2
    assert cost == pytest.approx(one - two, rel=0.03)
    assert abs(both.losses.misclosure_mW) < 1e-8 * both.losses.available_mW


def test_broken_finger_costs_power_and_stays_connected():
    whole = wired("high")
    grid = Grid(Fingers(FINGER, 1300), wires=whole.front.wires, breaks=Breaks(50, [(4, 4.6)]), **SHEET)
    broken = cell_curve(GridLayout(whole.outline, front=grid), SILICON, mode="resolved")
    intact = cell_curve(whole, SILICON, mode="resolved", symmetry="none")
    lost = intact.maximum_power.power_mW - broken.maximum_power.power_mW
    assert 0 < lost < 0.01 * intact.maximum_power.power_mW


def test_pseudo_square_resolved_against_smeared():
    # all ideal but the fingers and the sheet: the triangles of the cut grid carry the area of the outline exactly
    outline = CellOutline(20, 20, diameter_mm=25)
    grid = Grid(
        Fingers(FINGER, 2000, margin_um=300), Busbars(BAR, 1), collection=CollectionPoints(per_busbar=4), **SHEET
    )
    layout = GridLayout(outline, front=grid)
    for symmetry in ("auto", "none"):
        for mode in ("resolved", "smeared"):
            solution = cell_at(layout, SILICON, 0.0, mode=mode, symmetry=symmetry)
            assert solution.samples["area_cm2"].sum() == pytest.approx(outline.area_cm2, rel=1e-9)
    one, two = (
        cell_curve(layout, SILICON, mode="resolved", symmetry=s).maximum_power.power_mW for s in ("auto", "none")
    )
    assert one == pytest.approx(two, rel=1e-4)


def test_finer_mesh():
    layout = wired(margin_um=300)
    coarse, fine = (cell_curve(layout, SILICON, mode="resolved", fineness=f).maximum_power.power_mW for f in (1.0, 2.0))
    assert coarse == pytest.approx(fine, rel=1e-4)


def lab_cell(**sheet) -> GridLayout:
    pad = CollectionPoints(points_mm=[(10, 0.3)])
    grid = Grid(Fingers(FINGER, 1200), perimeter=PerimeterBusbar(BAR), collection=pad, **(SHEET | sheet))
    return GridLayout(CellOutline(20, 20), front=grid)


def test_edge_recombination():
    # at open circuit the edges take what the area gives, as if J02 were larger by edge current · perimeter/area; a good
    # sheet keeps them at the voltage of the rest
    layout = lab_cell(sheet_resistance_ohm_per_sq=1.0, contact_resistivity_mohm_cm2=0.01)
    curve = cell_curve(layout, SILICON, mode="resolved", edge=EdgeRecombination(20.0))
    none = cell_curve(layout, SILICON, mode="resolved")
    assert curve.losses.rows["recombination", "edge recombination"] > 0
    assert abs(curve.losses.misclosure_mW) < 1e-8 * curve.losses.available_mW
    light = none.jsc_mA_per_cm2
    two = [diode_current(light, 25.0, J02_nA_per_cm2=j02).voc_V for j02 in (4.0, 4.0 + 20.0 * 8 / 4)]
    assert none.voc_V - curve.voc_V == pytest.approx(two[0] - two[1], rel=5e-3)
    half = cell_curve(layout, SILICON, mode="resolved", edge=EdgeRecombination(20.0, sides=["left", "right"]))
    middle = diode_current(light, 25.0, J02_nA_per_cm2=4.0 + 20.0 * 4 / 4).voc_V
    assert none.voc_V - half.voc_V == pytest.approx(two[0] - middle, rel=5e-3)


@pytest.mark.parametrize("mode", ["smeared", "resolved"])
def test_shaded_part_and_light_map(mode):
    layout = wired("high")
    shaded = Region("tape", SILICON.with_light(0.2), box_mm=(0, 13, 0, 8))
    one = cell_at(layout, SILICON, 0.0, mode=mode, regions=[shaded])
    two = cell_at(layout, SILICON, 0.0, mode=mode, light=lambda x, y: 0.5 + 0.02 * y)
    whole = cell_at(layout, SILICON, 0.0, mode=mode)
    assert one.current_A == pytest.approx(whole.current_A * (2 / 3 + 0.2 / 3), rel=1e-2)
    assert two.current_A == pytest.approx(whole.current_A * 0.74, rel=1e-4)
    assert ("region", "tape") in one.losses.rows


def test_table_and_diode_agree():
    v = np.linspace(0, 0.75, 151)
    table = current_from_table(v, SILICON.at(v))
    assert table.maximum_power_mW_per_cm2 == pytest.approx(SILICON.maximum_power_mW_per_cm2, rel=1e-5)
    layout = wired()
    one, two = (cell_curve(layout, law).maximum_power.power_mW for law in (table, SILICON))
    assert one == pytest.approx(two, rel=1e-4)


def test_series_resistance_of_a_law():
    law = SILICON.with_series_resistance(0.8)
    j = law.at(0.6)
    assert j == pytest.approx(SILICON.at(0.6 + 0.8e-3 * j), rel=1e-8)


def test_pads_with_a_resistance():
    # 3 × 2 pads of 30 mΩ on ideal metal are 5 mΩ behind the cell
    ideal = MetalLine(0.001, line_resistance_ohm_per_cm=0)
    pads = CollectionPoints(per_busbar=2, resistance_mohm=30)
    grid = Grid(Fingers(MetalLine(40, line_resistance_ohm_per_cm=0), 1300), Busbars(ideal, 3), collection=pads)
    layout = GridLayout(CellOutline(26, 30), front=grid)
    lumped = SILICON.with_series_resistance(5e-3 * layout.outline.area_cm2)
    for symmetry in ("auto", "none"):
        best = cell_curve(layout, SILICON, symmetry=symmetry).maximum_power
        assert best.power_mW_per_cm2 == pytest.approx(lumped.maximum_power_mW_per_cm2, rel=1e-6)
        assert best.series_resistance_ohm_cm2["terminal: collection points"] == pytest.approx(5e-3 * 7.8, rel=1e-6)
    with pytest.raises(InputError, match="a voltage with current"):
        _ = cell_curve(layout, SILICON).open_circuit.series_resistance_ohm_cm2


def test_tapered_fingers_between_two_busbars_in_both_modes():
    # four pieces of L = 1 cm per finger, each tapering from its root to nothing: r L³/2 with r that of the root
    ideal = MetalLine(0.1, line_resistance_ohm_per_cm=0)
    finger = MetalLine(60, line_resistance_ohm_per_cm=1.0)
    grid = Grid(
        Fingers(finger, 1500, tip_width_um=0), Busbars(ideal, 2), collection=CollectionPoints(per_busbar=1), **SHEET
    )
    layout = GridLayout(CellOutline(3, 40), front=grid)
    light = diode_current(1.0, 0.0)
    expected = 1e3 * 2 * 4 * 1.0 * (1e-3 * 0.15) ** 2 * 1.0**3 / 2
    smeared = cell_at(layout, light, 0.5)
    assert smeared.losses.rows["resistance", "front: finger"] == pytest.approx(expected, rel=1e-3)
    assert smeared.metal["width_end_um"].min() == 0
    resolved = cell_at(layout, light, 0.5, mode="resolved")
    shaded = 1 - 60 / 1500
    assert resolved.losses.rows["resistance", "front: finger"] == pytest.approx(expected * shaded**2, rel=2e-2)
