"""Plan drawings with named lines."""

import numpy as np
import pytest
from simple_cells import box_mesh

from fem_carriers.errors import InputError
from fem_carriers.grid.cell_curve import cell_curve
from fem_carriers.grid.diodes import diode_current
from fem_carriers.grid.drawing import PlanDrawing
from fem_carriers.grid.drawing_curve import drawing_at, drawing_curve
from fem_carriers.grid.layout import Grid, GridLayout
from fem_carriers.grid.metal import MetalLine
from fem_carriers.grid.outline import CellOutline
from fem_carriers.grid.parts import Busbars, CollectionPoints, Fingers
from fem_carriers.meshing.mesh import Mesh

SILICON = diode_current(39.0, 25.0)
IDEAL = MetalLine(100, line_resistance_ohm_per_cm=0)


def drawn(kind="triangle", nx=13, ny=21) -> Mesh:
    """13 × 20 mm with fingers at x = 3.25 and 9.75 mm and a busbar along the lower side."""
    mesh = box_mesh(kind, np.linspace(0, 13000, 4 * nx + 1), np.linspace(0, 20000, ny))
    cells = mesh.cells
    middle = cells.p[:, cells.facets].mean(axis=1)
    along = np.ptp(cells.p[0, cells.facets], axis=0) < 1e-9
    fingers = np.flatnonzero(along & (np.isclose(middle[0], 0.325) | np.isclose(middle[0], 0.975)))
    surfaces = {"busbar": mesh.surfaces["z_min"], "fingers": fingers, "top": mesh.surfaces["z_max"]}
    return Mesh(cells, surfaces, mesh.volumes)


@pytest.mark.parametrize("kind", ["triangle", "quad"])
def test_square_held_at_zero(kind):
    # 2 × 2 cm square of sheet at zero on its sides: power c J² R_sh s⁴, c = 0.03514425374 (Fourier series)
    mesh = box_mesh(kind, np.linspace(0, 20000, 17), np.linspace(0, 20000, 17))
    sides = dict.fromkeys(mesh.surfaces, MetalLine(1e-3, line_resistance_ohm_per_cm=0))
    drawing = PlanDrawing(mesh, sides, 80.0, 0.0, terminals=dict.fromkeys(mesh.surfaces, 0))
    losses = drawing_at(drawing, diode_current(35.0, 0.0), 0.4).losses
    expected = 0.03514425374 * 0.035**2 * 80.0 * 2.0**4 * 1e3
    assert losses.rows["resistance", "drawing: sheet"] == pytest.approx(expected, rel=1e-3)
    assert abs(losses.misclosure_mW) < 1e-9 * losses.output_mW


def test_drawing_against_layout():
    finger = MetalLine(60, line_resistance_ohm_per_cm=1.5)
    drawing = PlanDrawing(drawn(), {"fingers": finger, "busbar": IDEAL}, 60.0, 1.0, terminals={"busbar": 0})
    curve = drawing_curve(drawing, SILICON)
    bar = Busbars(MetalLine(0.1, line_resistance_ohm_per_cm=0), positions_mm=[0.0001])
    grid = Grid(
        Fingers(finger, 6500), bar, collection=CollectionPoints(per_busbar=1), sheet_resistance_ohm_per_sq=60.0,
        contact_resistivity_mohm_cm2=1.0,
    )  # fmt: skip
    layout = cell_curve(GridLayout(CellOutline(13, 20), front=grid), SILICON, mode="resolved")
    # the drawing's busbar touches the sheet and shades, so compare the fingers' share and the whole to a few percent
    assert curve.maximum_power.power_mW == pytest.approx(layout.maximum_power.power_mW, rel=0.03)
    assert curve.losses.rows["resistance", "fingers: finger"] == pytest.approx(
        layout.losses.rows["resistance", "front: finger"], rel=0.15
    )
    assert abs(curve.losses.misclosure_mW) < 1e-8 * curve.losses.available_mW
    assert set(curve.maximum_power.metal["name"]) == {"fingers", "busbar"}


def test_terminal_resistance_and_areas():
    drawing = PlanDrawing(
        drawn("quad"), {"fingers": IDEAL, "busbar": IDEAL}, 60.0, 1.0, terminals={"busbar": 50.0},
        currents={"base": SILICON.with_light(0.5)},
    )  # fmt: skip
    solution = drawing_at(drawing, SILICON, 0.3)
    lost = solution.losses.rows["resistance", "terminal: busbar"]
    assert lost == pytest.approx(1e3 * 0.05 * solution.current_A**2, rel=1e-6)
    assert solution.current_mA_per_cm2 < 0.5 * 39


def test_drawing_refusals():
    mesh = drawn()
    with pytest.raises(InputError, match="line 'finger'"):
        PlanDrawing(mesh, {"finger": IDEAL}, 60.0, 1.0, terminals={"busbar": 0})
    with pytest.raises(InputError, match="without terminals"):
        PlanDrawing(mesh, {"fingers": IDEAL}, 60.0, 1.0)
    with pytest.raises(InputError, match="sheet_resistance_ohm_per_sq = -1"):
        PlanDrawing(mesh, {"fingers": IDEAL}, -1, 1.0, terminals={"busbar": 0})


def test_drawing_from_a_file(tmp_path):
    """A file with named lines, read, solved, and compared with the layout it draws: three fingers held at their ends.

    All metal is ideal and the sheet has no contact resistance, so that −∇²x = R_sh J between lines at distance S loses
    J² R_sh S²/12 per area (elementary), and R_sh S²/3 over the half pitches at the sides.
    """
    import meshio

    import fem_carriers as fc

    x, y = np.linspace(0, 6, 61), np.linspace(0, 9, 31)
    points = np.array([(a, b, 0.0) for b in y for a in x])
    at = np.arange(points.shape[0]).reshape(y.size, x.size)
    corners = np.stack([at[:-1, :-1], at[:-1, 1:], at[1:, 1:], at[1:, :-1]], axis=-1).reshape(-1, 4)
    triangles = np.concatenate([corners[:, [0, 1, 2]], corners[:, [0, 2, 3]]])
    lines = np.concatenate([np.stack([at[:-1, k], at[1:, k]], axis=1) for k in (10, 30, 50)])
    cells = [("triangle", triangles), ("line", lines)]
    tags = [np.full(len(triangles), 1), np.full(len(lines), 2)]
    drawing = meshio.Mesh(
        points, cells, cell_data={"gmsh:physical": tags, "gmsh:geometrical": tags},
        field_data={"cell": np.array([1, 2]), "fingers": np.array([2, 1])},
    )  # fmt: skip
    meshio.write(tmp_path / "plan.msh", drawing, file_format="gmsh22", binary=False)
    mesh = fc.read_mesh(tmp_path / "plan.msh", length_unit="mm")
    assert list(mesh.surfaces) == ["fingers"]
    ideal = MetalLine(1e-3, line_resistance_ohm_per_cm=0)
    plan = PlanDrawing(mesh, {"fingers": ideal}, 90.0, 0.0, terminals={"fingers": 0})
    solution = drawing_at(plan, diode_current(35.0, 0.0), 0.4)
    between = 2 * 0.2 * 0.9 * 0.2**2 / 12
    sides = 2 * 0.1 * 0.9 * 0.1**2 / 3
    expected = 1e3 * 0.035**2 * 90.0 * (between + sides)
    assert solution.losses.rows["resistance", "drawing: sheet"] == pytest.approx(expected, rel=1e-3)
    assert solution.area_cm2 == pytest.approx(0.54)
    from fem_carriers.output.plan import plot_plan

    plot_plan(solution, tmp_path / "plan.png")
    assert (tmp_path / "plan.png").stat().st_size > 5000
