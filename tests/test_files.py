"""Exported files, read back by meshio and by VTK (through pyvista): neither shares code with the writer."""

from __future__ import annotations

import json
import math

import meshio
import numpy as np
import pandas as pd
import pytest
import pyvista as pv
from vtkmodules.vtkCommonCore import reference

import fem_carriers as fc
from fem_carriers.files.atomic import write_atomically
from fem_carriers.files.vtk_cells import VtkCells, node_positions, vtk_cells, vtk_facets

THICKNESS_CM, WIDTH_CM, DEPTH_CM = 0.016, 0.03, 0.02
TYPES = {
    ("triangle", 1): ("triangle", 5), ("triangle", 2): ("triangle6", 22),
    ("quad", 1): ("quad", 9), ("quad", 2): ("quad9", 28),
    ("tetra", 1): ("tetra", 10), ("tetra", 2): ("tetra10", 24),
    ("hexahedron", 1): ("hexahedron", 12), ("hexahedron", 2): ("hexahedron27", 29),
}  # fmt: skip
"""meshio's names and VTK's numbers (vtkCellType.h), typed from their documentation."""


def sheared_mesh(kind):
    """Cells that are neither axis-parallel nor alike, so that a wrong node order cannot hide."""
    import skfem

    maker = {"triangle": "MeshTri", "quad": "MeshQuad", "tetra": "MeshTet", "hexahedron": "MeshHex"}[kind]
    x, y, z = (np.linspace(0, 1, n) ** 1.3 for n in (5, 3, 4))
    cells = getattr(skfem, maker).init_tensor(*((x, z) if kind in ("triangle", "quad") else (x, y, z)))
    p = cells.p * np.array([[WIDTH_CM], [DEPTH_CM], [THICKNESS_CM]])[[0, 2] if cells.dim() == 2 else [0, 1, 2]]
    p[0] *= 1 + 0.2 * p[-1] / THICKNESS_CM * (1 - p[0] / WIDTH_CM)
    cells = type(cells)(p, cells.t)
    front = cells.facets_satisfying(lambda q: np.isclose(q[-1], THICKNESS_CM), boundaries_only=True)
    rear = cells.facets_satisfying(lambda q: np.isclose(q[-1], 0), boundaries_only=True)
    half = np.arange(cells.t.shape[1]) % 2 == 0
    volumes = {"even": np.flatnonzero(half), "odd": np.flatnonzero(~half)}
    return fc.Mesh(cells, {"front": front, "rear": rear}, volumes)


@pytest.fixture(scope="module", params=TYPES, ids=lambda p: f"{p[0]}{p[1]}")
def solved(request):
    kind, order = request.param
    mesh = sheared_mesh(kind)
    base = fc.Base("p", doping_per_cm3=1e16, lifetime_us=20)
    surfaces = {"front": fc.Surface(srv_cm_per_s=math.inf), "rear": fc.Surface(srv_cm_per_s=1e3)}
    area = WIDTH_CM * (DEPTH_CM if mesh.dimension == 3 else 1)
    problem = fc.Problem(
        mesh, {"even": base, "odd": base}, surfaces, fc.Light.monochromatic(absorption_per_cm=100, flux_per_cm2_s=1e17),
        "front", area, order,
    )  # fmt: skip
    return kind, order, fc.solve_excess(problem)


@pytest.fixture(scope="module")
def written(solved, tmp_path_factory):
    folder = tmp_path_factory.mktemp("fields")
    return [fc.write_fields(solved[2], folder / f"fields.{suffix}") for suffix in ("vtu", "xdmf")]


def read_with_vtk(path):
    if path.suffix == ".vtu":
        return pv.read(path)
    from vtkmodules.vtkIOXdmf2 import vtkXdmfReader  # pyvista's own reader insists on time steps

    reader = vtkXdmfReader()
    reader.SetFileName(str(path))
    reader.Update()
    return pv.wrap(reader.GetOutputDataObject(0))


def random_points(problem, count=150):
    """Inside the box that the sheared mesh contains, (dimension, count) in µm."""
    high = problem.mesh.points_um.max(axis=1)[:, None]
    return high * np.random.default_rng(3).uniform(0.01, 0.99, (problem.mesh.dimension, count))


def three_axes(points):
    return np.stack([points[0], points[1] if len(points) == 3 else 0 * points[0], points[-1]], axis=1)


def interpolated_by_vtk(grid, problem, points):
    """VTK's map and shape functions in the cell that holds each point (VTK's search may settle for a neighbour)."""
    holders = problem.mesh.cells.element_finder()(*(points * 1e-4))
    values, found = np.asarray(grid["excess_density_per_cm3"]), []
    for point, holder in zip(three_axes(points), holders, strict=True):
        cell = grid.GetCell(int(holder))
        weights = [0.0] * cell.GetNumberOfPoints()
        nearest, where, number, distance = [0.0] * 3, [0.0] * 3, reference(0), reference(0.0)
        assert cell.EvaluatePosition(point, nearest, number, where, distance, weights) >= 0
        nodes = [cell.GetPointId(i) for i in range(len(weights))]
        found.append(np.dot(weights, values[nodes]))
    return np.array(found)


def test_meshio_reads_back_every_number(solved, written):
    kind, order, solution = solved
    for path in written:
        mesh = meshio.read(path)
        assert [c.type for c in mesh.cells] == [TYPES[kind, order][0]]
        assert np.allclose(mesh.points, three_axes(np.asarray(solution.problem.space.points_cm) * 1e4), rtol=1e-14)
        for name, values in solution.nodal_fields.items():
            assert np.array_equal(mesh.point_data[name], values, equal_nan=True)
        flux = mesh.cell_data["carrier_flux_mA_per_cm2"][0]
        assert np.array_equal(flux, three_axes(solution.carrier_flux_mA_per_cm2))
        assert np.array_equal(mesh.cell_data["diffusion_length_um"][0], solution.diffusion_length_um)
        number = mesh.cell_data["volume_number"][0]
        assert np.array_equal(np.flatnonzero(number == 2), solution.problem.mesh.volumes["odd"])


def test_vtk_sees_the_same_function(solved, written):
    """VTK's own shape functions at random points; it inverts its cell maps to about 1e-6."""
    kind, order, solution = solved
    points = random_points(solution.problem)
    expected = solution.at(points)
    for path in written:
        grid = read_with_vtk(path)
        assert set(grid.celltypes) == {TYPES[kind, order][1]}
        sampled = interpolated_by_vtk(grid, solution.problem, points)
        assert np.abs(sampled - expected).max() < 1e-5 * np.abs(expected).max()


def test_cells_fill_the_volume_right_way_round(solved, written):
    """VTK integrates signed volumes of hexahedra and tets by their corners."""
    _, _, solution = solved
    sizes = pv.read(written[0]).compute_cell_sizes()
    if solution.problem.mesh.dimension == 3:
        total = solution.problem.mesh.volume_cm3() * 1e12
        assert sizes["Volume"].min() > 0
        assert sizes["Volume"].sum() == pytest.approx(total, rel=1e-9)
    else:
        normals = pv.read(written[0]).extract_surface(nonlinear_subdivision=0, algorithm="dataset_surface")
        normals = normals.compute_normals(consistent_normals=False, auto_orient_normals=False, point_normals=False)
        assert (normals["Normals"][:, 1] < -0.99).all()  # x towards z turns about −y
        assert sizes["Area"].sum() == pytest.approx(solution.problem.mesh.volume_cm3() * 1e8, rel=1e-9)


def test_surfaces_file(solved, written):
    _, _, solution = solved
    path = written[0].with_name("fields_surfaces.vtu")
    grid, mesh = pv.read(path), solution.problem.mesh
    sizes = grid.compute_cell_sizes()["Area" if mesh.dimension == 3 else "Length"]
    for number, name in enumerate(mesh.surfaces, 1):
        mine = grid["surface_number"] == number
        assert np.array_equal(grid[f"is_{name}"] == 1, mine)
        assert sizes[mine].sum() == pytest.approx(mesh.surface_area_cm2(name) * 1e4 ** (mesh.dimension - 1), rel=1e-9)
    on_front = grid.extract_cells(np.flatnonzero(grid["is_front"] == 1))
    assert np.allclose(on_front["excess_density_per_cm3"], 0)
    assert np.allclose(on_front.points[:, 2], THICKNESS_CM * 1e4)


def test_provenance(solved, written):
    _, _, solution = solved
    facts = json.loads(written[0].with_suffix(".json").read_text())
    assert facts["version"] == fc.__version__
    assert facts["length_unit"] == "um"
    assert facts["ledger_relative_residual"] == solution.ledger.relative_residual
    assert facts["surface_numbers"] == {"1": "front", "2": "rear"}
    assert facts["volume_numbers"] == {"1": "even", "2": "odd"}
    assert sum(v for _, _, v in facts["ledger_mA_per_cm2"]) == pytest.approx(facts["generated_mA_per_cm2"], rel=1e-9)


def test_nothing_else_is_left_behind(written):
    assert {p.name for p in written[0].parent.iterdir()} == {
        "fields.vtu", "fields.xdmf", "fields.h5", "fields.json", "fields_surfaces.vtu",
    }  # fmt: skip


def small_solution(lifetime_us=20.0):
    mesh = sheared_mesh("quad")
    base = fc.Base("p", doping_per_cm3=1e16, lifetime_us=lifetime_us, auger=None, radiative_cm3_per_s=0)
    surfaces = {"front": fc.Surface(srv_cm_per_s=math.inf)}
    light = fc.Light.uniform(rate_per_cm3_s=1e18)
    return fc.solve_excess(fc.Problem(mesh, {"even": base, "odd": base}, surfaces, light, "front", WIDTH_CM))


def test_infinite_diffusion_length_becomes_nan(tmp_path):
    from dataclasses import replace

    solution = small_solution()
    solution = replace(solution)  # a fresh cache
    length = solution.diffusion_length_um.copy()
    length[::2] = math.inf
    solution.__dict__["diffusion_length_um"] = length
    grid = pv.read(fc.write_fields(solution, tmp_path / "a.vtu"))
    assert np.isnan(grid["diffusion_length_um"][::2]).all()
    assert np.array_equal(grid["diffusion_length_um"][1::2], length[1::2])


def test_some_fields_only(tmp_path):
    grid = pv.read(fc.write_fields(small_solution(), tmp_path / "a.vtu", fields=["hole_density_per_cm3"]))
    assert grid.point_data.keys() == ["hole_density_per_cm3"]
    assert grid.cell_data.keys() == ["volume_number"]


@pytest.mark.parametrize(
    ("name", "fields", "words"),
    [
        ("a.vtk", None, [".vtu or .xdmf", "a.vtu"]),
        ("absent/a.vtu", None, ["existing folder"]),
        ("a.vtu", ["temperature_K"], ["temperature_K", "excess_density_per_cm3"]),
    ],
)
def test_refused_exports(tmp_path, name, fields, words):
    with pytest.raises(fc.InputError) as error:
        fc.write_fields(small_solution(), tmp_path / name, fields=fields)
    assert all(word in str(error.value) for word in words)
    assert not list(tmp_path.iterdir())


def test_interrupted_writing_keeps_the_old_file(tmp_path):
    path = tmp_path / "a.csv"
    path.write_text("old")

    def break_off(temporary):
        temporary.write_text("half")
        raise RuntimeError("power cut")

    with pytest.raises(RuntimeError, match="power cut"):
        write_atomically(path, break_off)
    assert path.read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["a.csv"]


def test_node_order_of_the_27_node_hexahedron():
    """A few positions from VTK's class documentation of vtkTriQuadraticHexahedron."""
    p = node_positions("hexahedron", 2)
    assert np.array_equal(p[16], [0, 0, 0.5])
    assert np.array_equal(p[20], [0, 0.5, 0.5])
    assert np.array_equal(p[23], [0.5, 1, 0.5])
    assert np.array_equal(p[24], [0.5, 0.5, 0])
    assert np.array_equal(p[26], [0.5, 0.5, 0.5])


def test_node_positions_agree_with_vtk(solved):
    kind, order, solution = solved
    cell = pv.UnstructuredGrid({TYPES[kind, order][1]: vtk_cells(solution.problem.space).nodes[:1]},
                               vtk_cells(solution.problem.space).points_um).GetCell(0)  # fmt: skip
    theirs = np.array([cell.GetParametricCoords()[i] for i in range(3 * cell.GetNumberOfPoints())]).reshape(-1, 3)
    ours = node_positions(kind, order)
    assert np.array_equal(theirs[:, : ours.shape[1]], ours)


def test_indices_out_of_range_never_reach_vtk():
    with pytest.raises(IndexError):
        VtkCells(np.zeros((3, 3)), np.array([[0, 1, 3]]), "triangle", 1)
    with pytest.raises(ValueError, match="finite"):
        VtkCells(np.full((3, 3), np.nan), np.array([[0, 1, 2]]), "triangle", 1)


def test_facet_nodes_are_those_of_the_facet(solved):
    _, _, solution = solved
    space = solution.problem.space
    for facets in space.mesh.surfaces.values():
        assert np.array_equal(np.unique(vtk_facets(space, facets).nodes), np.sort(space.facet_dofs(facets)))


def table():
    return pd.DataFrame({"pitch_um": [600.0, 0.1 + 0.2], "jsc_mA_per_cm2": [math.nan, 1 / 3], "note": ["a, b", ""]})


def test_tables_keep_names_and_digits(tmp_path):
    path = fc.write_table(table(), tmp_path / "t.csv")
    back = pd.read_csv(path, keep_default_na=True)
    assert list(back) == ["pitch_um", "jsc_mA_per_cm2", "note"]
    assert np.array_equal(back["pitch_um"], table()["pitch_um"])
    assert back["jsc_mA_per_cm2"][1] == 1 / 3
    rows = json.loads(fc.write_table(table(), tmp_path / "t.json").read_text())
    assert rows[1]["jsc_mA_per_cm2"] == pytest.approx(1 / 3, rel=1e-14)
    assert rows[0]["jsc_mA_per_cm2"] is None


def test_a_named_index_is_kept(tmp_path):
    ledger = small_solution().ledger.table
    back = pd.read_csv(fc.write_table(ledger, tmp_path / "t.csv"))
    assert list(back)[:2] == ["kind", "name"]
    assert len(back) == len(ledger)


@pytest.mark.parametrize("name", ["t.xlsx", "t", "absent/t.csv"])
def test_refused_tables(tmp_path, name):
    with pytest.raises(fc.InputError, match="write_table"):
        fc.write_table(table(), tmp_path / name)


def test_only_tables_are_written(tmp_path):
    with pytest.raises(fc.InputError, match="DataFrame"):
        fc.write_table([1, 2], tmp_path / "t.csv")
