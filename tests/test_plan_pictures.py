"""Pictures of plans: what they show is what was solved, and files are written."""

import numpy as np
import pytest

import fem_carriers as fc
from fem_carriers.errors import InputError
from fem_carriers.grid.cell_curve import cell_at
from fem_carriers.grid.diodes import diode_current
from fem_carriers.grid.layout import Grid, GridLayout
from fem_carriers.grid.metal import MetalLine
from fem_carriers.grid.outline import CellOutline
from fem_carriers.grid.parts import Breaks, Busbars, CollectionPoints, Fingers, PerimeterBusbar, Wires
from fem_carriers.output.plan import _around, plot_plan, plot_repeat_unit
from fem_carriers.output.plan_data import gaps_mm, metal_polygons_mm, plan_map, terminals_mm
from fem_carriers.output.plan_power import _apart, plot_grid_losses, plot_trade
from fem_carriers.output.plan_window import PlanWindow
from fem_carriers.output.window import new_plotter
from fem_carriers.studies.grid_choice import best_layout

SILICON = diode_current(39.0, 25.0, J02_nA_per_cm2=4.0)
FINGER = MetalLine(50, 15, 2 / 3, 3e-6)
WIRE = MetalLine.round_wire(250, 1.8e-6, shading_width_um=180)
SHEET = {"sheet_resistance_ohm_per_sq": 130.0, "contact_resistivity_mohm_cm2": 1.5}


def layout(fingers=6, breaks=None, **outline):
    lines = Fingers(FINGER, 12e3 / fingers * (1 - 1e-9), margin_um=500)
    return GridLayout(CellOutline(12, 16, **outline), front=Grid(lines, wires=Wires(WIRE, 2), breaks=breaks, **SHEET))


@pytest.fixture(scope="module", params=["smeared", "resolved"])
def solution(request):
    outline = {"corner_mm": 2} if request.param == "smeared" else {}
    return cell_at(layout(**outline), SILICON, 0.6, mode=request.param)


def area(points, triangles):
    a, b, c = (points[triangles[:, k]] for k in range(3))
    return 0.5 * np.abs((b - a)[:, 0] * (c - a)[:, 1] - (b - a)[:, 1] * (c - a)[:, 0])


def test_map_covers_the_cell_with_the_solved_values(solution):
    shown = plan_map(solution, "above_terminal_mV")
    sizes = area(shown.points_mm, shown.triangles)
    assert sizes.sum() / 100 == pytest.approx(solution.area_cm2, rel=2e-3)
    areas = solution.samples
    above = 1e3 * (areas["local_voltage_V"] - 0.6)
    assert shown.values.max() == pytest.approx(above.max(), rel=2e-2)
    mean = float(areas["area_cm2"] @ above) / areas["area_cm2"].sum()
    found = sizes @ shown.values[shown.triangles].mean(axis=1) / sizes.sum()
    chords = 1.0 if solution.space is None else 0.98  # straight lines below parabolas between nodes
    assert found == pytest.approx(chords * mean, rel=1e-2)
    current = plan_map(solution, "current_mA_per_cm2")
    lit = areas[areas["part"] == "lit"]["current_mA_per_cm2"]
    assert lit.min() - 1e-9 <= current.values.min() <= current.values.max() <= lit.max() + 1e-9


def test_metal_is_to_scale(solution):
    fingers = metal_polygons_mm(solution, "front", "finger")
    assert len(fingers) >= 6
    np.testing.assert_allclose(np.ptp(fingers[:, :, 0], axis=1), 0.05)
    assert np.ptp(fingers[..., 1]) == pytest.approx(15, abs=1e-6)
    assert sorted(terminals_mm(solution, "front")[:, 1]) == pytest.approx([4, 12])


def test_frame_has_corners():
    pad = CollectionPoints(points_mm=[(8, 0.3)])
    bar = PerimeterBusbar(MetalLine(400, 15, resistivity_ohm_cm=3e-6), inset_um=100)
    grid = Grid(Fingers(FINGER, 2000), perimeter=bar, collection=pad, **SHEET)
    solved = cell_at(GridLayout(CellOutline(16, 16), front=grid), SILICON, 0.5, mode="resolved")
    frame = metal_polygons_mm(solved, "front", "perimeter")
    assert frame.min() == pytest.approx(0.1)
    assert frame.max() == pytest.approx(15.9)
    bottom = frame[frame[..., 1].max(axis=1) < 1]
    assert bottom[..., 0].min() == pytest.approx(0.1)


def test_gaps_are_found():
    solved = cell_at(layout(breaks=Breaks(100, [(2, 7.5)])), SILICON, 0.5, mode="resolved")
    assert gaps_mm(solved, "front") == pytest.approx(np.array([[5.0, 7.5]]), abs=1e-6)


def test_pictures_are_written(solution, tmp_path):
    figure = plot_plan(solution, tmp_path / "plan.png")
    texts = [text.get_text() for text in figure.legends[0].get_texts()]
    assert texts[0].startswith("fingers, 50 µm wide")
    assert "worst place" in texts[-1]
    plot_plan(solution, tmp_path / "current.pdf", field="current_mA_per_cm2")
    unit = plot_repeat_unit(solution, tmp_path / "unit.svg", at_mm=(5.2, 3.0))
    ax = unit.axes[0]
    assert ax.get_xlim() == pytest.approx((0, 8), abs=1e-6)
    assert ax.get_ylim() == pytest.approx((4, 6), abs=1e-6)
    assert ax.get_aspect() == 1
    plot_grid_losses(solution.losses, tmp_path / "losses.png")
    plot_grid_losses({"one": solution.losses, "two": solution.losses}, tmp_path / "both.png")
    for name in ("plan.png", "current.pdf", "unit.svg", "losses.png", "both.png"):
        assert (tmp_path / name).stat().st_size > 5000


def test_thin_fingers_are_drawn_wider_and_said_to_be():
    lines = Fingers(MetalLine(20, 10, 2 / 3, 3e-6), 1500)
    bar = Busbars(MetalLine(900, 15, resistivity_ohm_cm=3e-6), 1)
    grid = Grid(lines, bar, collection=CollectionPoints(per_busbar=3))
    figure = plot_plan(cell_at(GridLayout(CellOutline(180, 90), front=grid), SILICON, 0.5))
    texts = [text.get_text() for text in figure.legends[0].get_texts()]
    assert texts[0].startswith("fingers, 20 µm wide (drawn ")
    assert 50 < float(texts[0].split("drawn ")[1].split()[0]) < 200
    assert texts[1] == "busbars, 900 µm wide"


def test_labels_keep_apart():
    found = _apart(np.array([1.0, 1.1, 1.2, 9.9]), 0.5, 10.0)
    assert (np.diff(found) >= 0.5 - 1e-12).all()
    assert found[-1] <= 10
    assert _around(np.array([2.0, 4.0, 6.0]), 4.4, 0, 8) == (3.0, 5.0)
    assert _around(np.array([2.0, 4.0, 6.0]), 7.0, 0, 8) == (5.0, 8.0)


def test_trade_picture(tmp_path):
    choice = best_layout(layout, SILICON, {"fingers": range(4, 13)}, limits={"printed_mass_mg": 5.0}, nodes=3)
    figure = plot_trade(choice, tmp_path / "trade.png")
    assert (tmp_path / "trade.png").stat().st_size > 5000
    assert figure.axes[1].get_xlabel() == "printed mass (mg)"
    one = best_layout(layout, SILICON, {"fingers": [6]}, nodes=3)
    with pytest.raises(InputError, match="layouts of one mass"):
        plot_trade(one)


def test_window(solution, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    plotter = new_plotter(True, (640, 400))
    try:
        window = PlanWindow(solution, plotter, "above_terminal_mV")
        window.draw()
        keys = window.keys()
        keys["n"]()
        assert window.field == "current_mA_per_cm2"
        keys["b"]()
        assert window.field == "above_terminal_mV"
        assert "front finger" in plotter.actors
        keys["g"]()
        assert "front finger" not in plotter.actors
        window.tell((5.0, 8.0, 0.0))
        assert "(5, 8) mm" in plotter.actors["message"].GetInput()
        assert [keys["s"]().name for _ in range(2)] == ["plan-1.png", "plan-2.png"]
    finally:
        plotter.close()


def test_view(solution, tmp_path):
    path = fc.view(solution, picture=tmp_path / "view.png", size=(640, 400))
    assert path.stat().st_size > 5000
    with pytest.raises(InputError, match="field 'voltage'"):
        fc.view(solution, "voltage", picture=tmp_path / "no.png")


def test_refusals(solution):
    with pytest.raises(InputError, match="a GridSolution"):
        plot_plan(SILICON)
    with pytest.raises(InputError, match="one of front"):
        plot_plan(solution, grid="rear")
    with pytest.raises(InputError, match="a place within 12 × 16 mm"):
        plot_repeat_unit(solution, at_mm=(13, 1))
    with pytest.raises(InputError, match="GridLosses"):
        plot_grid_losses({"one": 3.0})
