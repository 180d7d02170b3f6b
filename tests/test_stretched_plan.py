"""Grids bent onto circles: geometric identities, shapely as the independent measure, and a spreading resistance."""

from __future__ import annotations

import math

import numpy as np
import pytest
import shapely

from fem_carriers.cell.base import Base
from fem_carriers.cell.face import Face
from fem_carriers.cell.outlines import disc
from fem_carriers.cell.patches import Dot, Polygon, Rectangle, Strip
from fem_carriers.cell.surface import Contact, DopedLayer, Surface
from fem_carriers.cell.unit_cell import UnitCell
from fem_carriers.meshing.fineness import circle_corners
from fem_carriers.meshing.islands import Dots, find_dots, fit_islands, island_positions
from fem_carriers.meshing.stretched_plan import stretched_plan
from fem_carriers.meshing.unit_cell_mesh import mesh_unit_cell
from fem_carriers.transport.linear import Factorization

SINK = {"srv_cm_per_s": math.inf}
FINGER = Strip("finger", 40, layer=DopedLayer("n", 100), contact=Contact("front"))


def unit_cell(rear, front=FINGER, pitch=600, pitch_y=400, thickness=180, **more):
    return UnitCell(
        Base("p", resistivity_ohm_cm=1, thickness_um=thickness, lifetime_us=1000),
        pitch,
        pitch_y,
        front=Face(Surface(), [front] if front else []),
        rear=Face(Surface(srv_cm_per_s=10), rear),
        **more,
    )


CELLS = {
    "finger over a quarter dot": lambda: unit_cell([Dot("d", 60, **SINK)]),
    "dot inside a dot": lambda: unit_cell([Dot("o", 100, J0_fA_per_cm2=100), Dot("d", 60, **SINK)]),
    "finger between two circles": lambda: unit_cell([Dot("o", 42, J0_fA_per_cm2=100), Dot("d", 30, **SINK)]),
    "finger almost along a dot": lambda: unit_cell([Dot("d", 40, spacing_x_um=300, spacing_y_um=200, **SINK)]),
    "finger just beside a dot": lambda: unit_cell([Dot("d", 39, **SINK)]),
    "half and whole dots": lambda: unit_cell(
        [Dot("d", 60, (0, 100), spacing_x_um=150, spacing_y_um=200, **SINK), Rectangle("r", 40, 30, (150, 0), **SINK)]
    ),
    "periodic, staggered, off the centre": lambda: unit_cell(
        [Dot("d", 60, (75, 20), spacing_x_um=300, spacing_y_um=200, staggered=True, **SINK)], symmetry="periodic"
    ),
    "periodic, side between two circles": lambda: unit_cell(
        [Dot("o", 42, (0, 120), J0_fA_per_cm2=100, spacing_x_um=300), Dot("d", 30, (0, 120), spacing_x_um=300, **SINK)],
        Strip("finger", 40, 160, layer=DopedLayer("n", 100), contact=Contact("front")),
        pitch_y=275,
        symmetry="periodic",
    ),
    "periodic, across a corner": lambda: unit_cell([Dot("d", 60, (285, 190), **SINK)], symmetry="periodic"),
}
STEP_UM = 1.0


@pytest.fixture(scope="module", params=CELLS)
def meshed(request):
    cell = CELLS[request.param]()
    return cell, mesh_unit_cell(cell, STEP_UM)


def plan_of(mesh):
    """Points and triangles on the rear of an extruded mesh, µm."""
    cells = mesh.cells
    facets = cells.facets[:, cells.boundary_facets()]
    return cells.p[:2] * 1e4, facets[:, (cells.p[2, facets] == 0).all(axis=0)]


def edge_ends(mesh):
    points, triangles = plan_of(mesh)
    pairs = np.unique(np.sort(np.hstack([triangles[[i, (i + 1) % 3]] for i in range(3)]), axis=0), axis=1)
    return points[:, pairs[0]], points[:, pairs[1]]


def corners_used(cell):
    """Corners of a full circle in the mesh."""
    return circle_corners(STEP_UM, cell)


def test_every_outline_is_covered_by_edges(meshed):
    cell, mesh = meshed
    a, b = edge_ends(mesh)
    box = cell.frame.box
    for side in ("front", "rear"):
        for region in cell.layout(side, corners_used(cell)).regions:
            line = region.shape.boundary.difference(box.boundary.buffer(1e-7))
            band = line.buffer(1e-6)
            on = [shapely.contains_xy(band, *p) for p in (a, b, (a + b) / 2)]
            covered = np.hypot(*(a - b))[np.all(on, axis=0)].sum()
            assert covered == pytest.approx(line.length, rel=1e-6)


def test_named_surfaces_have_their_areas(meshed):
    cell, mesh = meshed
    for side in ("front", "rear"):
        regions = cell.layout(side, corners_used(cell)).regions
        for region in regions:
            assert mesh.surface_area_cm2(region.name) == pytest.approx(region.shape.area * 1e-8, rel=1e-9)
        assert sum(mesh.surface_area_cm2(r.name) for r in regions) == pytest.approx(cell.area_cm2, rel=1e-12)


def test_cells_fill_the_piece_and_conform(meshed):
    cell, mesh = meshed
    assert mesh.volume_cm3() == pytest.approx(cell.area_cm2 * cell.thickness_um * 1e-4, rel=1e-11)
    corners = mesh.cells.refdom.p if mesh.kind == "hexahedron" else mesh.cells.refdom.p[:, :1]
    assert mesh.cells.mapping().detDF(corners).min() > 0  # no cell is folded
    facets = mesh.cells.facets[:, mesh.cells.boundary_facets()]
    corners = mesh.cells.p[:, facets]
    ends = [(corners[i] == end).all(axis=0) for i in range(3) for end in (corners[i].min(), corners[i].max())]
    assert np.any(ends, axis=0).all()  # a facet of one tet inside the piece would not conform


def test_periodic_sides_carry_the_same_points(meshed):
    cell, mesh = meshed
    points = mesh.cells.p
    for axis in ("xy".index(name) for name in cell.periodic_axes):
        rest = [i for i in range(3) if i != axis]
        low, high = (
            sorted(map(tuple, points[rest][:, points[axis] == end].T.tolist()))
            for end in (points[axis].min(), points[axis].max())
        )
        assert low == high


def test_same_input_same_mesh():
    first, second = (mesh_unit_cell(CELLS["half and whole dots"](), STEP_UM).cells for _ in range(2))
    np.testing.assert_array_equal(first.p, second.p)
    np.testing.assert_array_equal(first.t, second.t)


def test_grid_lines_keep_their_number_around_a_dot():
    # stretched cells: nodes of the plan are a product of two short axes, not a length over the first step
    mesh = mesh_unit_cell(unit_cell([Dot("d", 60, **SINK)], pitch_y=600), level=-1)
    assert 8 * mesh.cells.p.shape[1] < 100_000  # quadratic hexahedra


def test_bending_reflects():
    # mirror images in x = y: the same pattern turned gives the turned points
    dots = [Dots((10.0, 20.0), (30.0,), 24)]
    straight = np.array([[[20.0, -100.0], [20.0, 100.0]]])
    turned = [Dots((20.0, 10.0), (30.0,), 24)]
    box = shapely.box(-100, -100, 100, 100)
    axis = np.linspace(-100, 100, 101)
    plans = []
    for d, lines in ((dots, straight), (turned, straight[:, :, ::-1])):
        islands = fit_islands(d, lines, box, (False, False))
        xy = [
            np.unique(
                np.round(np.concatenate([axis, *(p for _, s, c in island_positions(islands[0], n) for p in (s, c))]), 9)
            )
            for n in "xy"
        ]
        plans.append(stretched_plan(*xy, islands, (False, False)))
    first, second = (np.round(p, 6) for p in (plans[0].points_um, plans[1].points_um[::-1]))
    assert {tuple(p) for p in (first + 0.0).T} == {tuple(p) for p in (second + 0.0).T}


def test_dots_found_with_shades_and_copies():
    cell = unit_cell([Dot("d", 40, (0, 0), spacing_x_um=300, contact=Contact("rear"), opaque_diameter_um=60)])
    dots = find_dots(cell, 32)
    centers = np.array([d.center_um for d in dots])
    inside = centers[(np.abs(centers - [150, 100]) < [151, 101]).all(axis=1)]
    np.testing.assert_allclose(inside, [(0, 0), (300, 0)], atol=1e-9)
    corner = disc((0, 0), 1, 32).bounds[2]
    np.testing.assert_allclose(dots[0].radii_um, [20 * corner, 30 * corner], rtol=1e-9)


@pytest.mark.parametrize(
    ("others", "line"), [([], [[30.0, 0.0], [30.0, 200.0]]), ([Dots((80.0, 100.0), (30.0,), 24)], None)]
)
def test_tangents_and_overlapping_dots_are_declined(others, line):
    dots = [Dots((0.0, 100.0), (30.0,), 24)] if not others else [Dots((50.0, 100.0), (30.0,), 24), *others]
    lines = np.array([line] if line else np.zeros((0, 2, 2)))
    assert fit_islands(dots, lines, shapely.box(0, 0, 300, 200), (False, False)) is None


def test_oblique_outlines_get_equilateral_triangles():
    cell = unit_cell([Polygon("tilted", [(150, 50), (200, 80), (150, 120)], **SINK)], front=None)
    mesh = mesh_unit_cell(cell, 5.0)
    assert mesh.surface_area_cm2("rear.tilted") == pytest.approx(50 * 70 / 2 * 1e-8, rel=1e-9)


def disc_on_slab(a_over_h, order=40):
    """R a/ρ of an equipotential disc on a slab with an ideal back plane.

    Dual integral equations for the potential ∫ A(k) J0(kr) sinh(k(h − z))/cosh(kh) dk, A(k) = ∫₀^a φ(t) cos(kt) dt,
    become the Fredholm equation φ(t) − (2/π) ∫₀^a φ(s) ∫₀^∞ (1 − tanh kh) cos(ks) cos(kt) dk ds = 2/π; the current is
    2π/ρ ∫₀^a φ dt (method: I. N. Sneddon, Mixed Boundary Value Problems in Potential Theory, 1966, from memory;
    h → ∞ gives 4a/ρ).
    """
    x, w = np.polynomial.legendre.leggauss(order)
    t, wt = (x + 1) / 2, w / 2  # a = 1
    h = 1 / a_over_h
    y, wy = np.polynomial.legendre.leggauss(200)
    k, wk = (y + 1) * 10 / h, wy * 10 / h  # to k h = 20
    c = np.cos(np.outer(t, k))
    kernel = 2 / math.pi * (c * (wk * 2 / (np.exp(2 * k * h) + 1))) @ c.T
    phi = np.linalg.solve(np.eye(order) - kernel * wt, np.full(order, 2 / math.pi))
    return 1 / (2 * math.pi * float(wt @ phi))


def test_fredholm_solution():
    assert disc_on_slab(1e-4) == pytest.approx(1 / 4, rel=1e-4)  # half space: Maxwell's ρ/(4a)
    # values of an independent solution of the same equation
    assert [disc_on_slab(r) for r in (0.25, 0.5, 1)] == pytest.approx(
        [0.2227843658, 0.1975412163, 0.1566630921], rel=1e-9
    )


@pytest.mark.parametrize(("a_over_h", "finer", "allowed"), [(1.0, 1, 5e-3), (1.0, 4, 2e-3), (0.25, 1, 5e-3)])
def test_spreading_resistance_of_a_disc(a_over_h, finer, allowed):
    import skfem
    from skfem.models.poisson import laplace

    radius = 30.0
    h = radius / a_over_h
    size = 2 * (radius + 12 * h)
    cell = unit_cell([Dot("disc", 2 * radius, **SINK)], front=None, pitch=size, pitch_y=size, thickness=h)
    mesh = mesh_unit_cell(cell, None, None, np.log(finer) / np.log(5) - 1)
    basis = skfem.Basis(mesh.cells, skfem.ElementHex2())
    matrix = laplace.assemble(basis)
    disc_nodes, back = (basis.get_dofs(mesh.surfaces[name]).all() for name in ("rear.disc", "front"))
    u = np.zeros(basis.N)
    u[disc_nodes] = 1
    free = np.setdiff1d(np.arange(basis.N), np.concatenate([disc_nodes, back]))
    with Factorization(matrix[free][:, free]) as factors:
        u[free] = factors.solve(-(matrix @ u)[free])
    current = 4 * (matrix @ u)[disc_nodes].sum()  # four quarters; ρ = 1 Ω·cm
    assert radius * 1e-4 / current == pytest.approx(disc_on_slab(a_over_h), rel=allowed)
