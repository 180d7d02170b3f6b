"""Plan-view triangles and their extrusion: geometric identities, and shapely as the independent measure of areas."""

from __future__ import annotations

import math

import numpy as np
import pytest
import shapely

from fem_carriers.errors import InputError, MeshError
from fem_carriers.meshing.extrude import extrude, periodic_rank, tensor_mesh
from fem_carriers.meshing.plan_view import circle, triangulate

DOMAIN = shapely.box(0, 0, 300, 300)
QUARTER = circle((0, 0), 30, 64).intersection(DOMAIN)
PATTERNS = {
    "quarter dot": [QUARTER],
    "uncut dot at a corner": [circle((0, 0), 30, 64)],
    "nested": [circle((150, 150), 60, 64), circle((150, 150), 30, 64)],
    "touching": [shapely.box(20, 20, 60, 60), shapely.box(60, 20, 100, 60), shapely.box(60, 60, 80, 80)],
    "strip over dots": [circle((0, 0), 50, 64), circle((150, 150), 50, 64), shapely.box(140, 0, 160, 300)],
    "oblique": [shapely.Polygon([(20, 20), (200, 80), (150, 250)])],
    "strip along a side": [shapely.box(0, 0, 37.3, 300)],
}
SETTING = {"first_step": 1.0, "growth": 1.8, "largest": 50.0}


@pytest.fixture(scope="module", params=PATTERNS)
def meshed(request):
    shapes = PATTERNS[request.param]
    return shapes, triangulate(shapes, DOMAIN, **SETTING)


def edges(plan):
    corners = np.hstack([plan.triangles[[i, (i + 1) % 3]] for i in range(3)])
    return np.unique(np.sort(corners, axis=0), axis=1)


def areas(plan):
    a, b, c = (plan.points_um[:, corner] for corner in plan.triangles)
    return 0.5 * ((b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0]))


def smallest_angle_deg(plan):
    corners = plan.points_um[:, plan.triangles]
    sides = [corners[:, (i + 1) % 3] - corners[:, i] for i in range(3)]
    cosines = [-(sides[i] * sides[i - 1]).sum(0) / np.hypot(*sides[i]) / np.hypot(*sides[i - 1]) for i in range(3)]
    return np.degrees(np.arccos(np.max(cosines)))


def covered_length(plan, line):
    """Length of the triangle edges that lie on a line."""
    pair = edges(plan)
    a, b = plan.points_um[:, pair[0]], plan.points_um[:, pair[1]]
    on = [shapely.distance(shapely.points(p.T), line) < 1e-6 for p in (a, b, (a + b) / 2)]
    return np.hypot(*(a - b))[np.all(on, axis=0)].sum()


def lengths_over_rule(plan, shapes, nearer_end=False):
    """Edge lengths over min(largest, first_step + (growth − 1) distance) of the edge's middle or nearer end."""
    pair = edges(plan)
    a, b = plan.points_um[:, pair[0]], plan.points_um[:, pair[1]]
    outlines = shapely.union_all([s.boundary for s in shapes]).difference(DOMAIN.boundary.buffer(1e-6))
    places = (a, b) if nearer_end else ((a + b) / 2,)
    distance = np.min([shapely.distance(shapely.points(place.T), outlines) for place in places], axis=0)
    return np.hypot(*(a - b)) / np.minimum(50.0, 1.0 + 0.8 * distance)


def test_every_outline_is_covered_by_edges(meshed):
    shapes, plan = meshed
    for shape in shapes:
        line = shape.boundary.intersection(DOMAIN)
        assert covered_length(plan, line) == pytest.approx(line.length, rel=1e-9)


def test_areas_of_shapes_are_sums_of_triangles(meshed):
    shapes, plan = meshed
    centres = shapely.points(plan.points_um[:, plan.triangles].mean(axis=1).T)
    size = areas(plan)
    assert size.min() > 0
    assert size.sum() == pytest.approx(DOMAIN.area, rel=1e-12)
    for shape in shapes:
        inside = shape.intersection(DOMAIN)
        assert size[shapely.contains(inside, centres)].sum() == pytest.approx(inside.area, rel=1e-9)


def test_sizes_follow_the_rule_and_angles_stay_wide(meshed):
    shapes, plan = meshed
    assert lengths_over_rule(plan, shapes).max() <= 1.6
    # a step of a geometric series is first_step + (growth − 1) distance long, with the distance of its nearer end
    assert 1 / 1.5 < np.median(lengths_over_rule(plan, shapes, nearer_end=True)) < 1.5
    assert smallest_angle_deg(plan) > 20


def test_edges_on_outlines_are_first_steps(meshed):
    shapes, plan = meshed
    pair = edges(plan)
    a, b = plan.points_um[:, pair[0]], plan.points_um[:, pair[1]]
    outlines = shapely.union_all([s.boundary for s in shapes]).difference(DOMAIN.boundary.buffer(1e-6))
    on = [shapely.distance(shapely.points(p.T), outlines) < 1e-6 for p in (a, b, (a + b) / 2)]
    assert np.hypot(*(a - b))[np.all(on, axis=0)].max() <= 1.0 + 1e-9


def test_quarter_dot_takes_few_triangles():
    plan = triangulate([QUARTER], DOMAIN, first_step=0.5, growth=1.8, largest=50)
    assert plan.triangles.shape[1] < 3000


def test_same_input_same_mesh():
    first, second = (triangulate(PATTERNS["strip over dots"], DOMAIN, **SETTING) for _ in range(2))
    np.testing.assert_array_equal(first.points_um, second.points_um)
    np.testing.assert_array_equal(first.triangles, second.triangles)


def test_coarse_lines_are_edges_without_refinement():
    lines = [
        shapely.LineString([(0, 150), (300, 150)]),
        shapely.LineString([(150, 100), (220, 290)]),  # ends inside a face
    ]
    plan = triangulate([], DOMAIN, first_step=0.5, growth=1.8, largest=50, coarse_lines=lines)
    for line in lines:
        assert covered_length(plan, line) == pytest.approx(line.length, rel=1e-9)
    assert plan.triangles.shape[1] < 500


@pytest.mark.parametrize(("periodic_x", "periodic_y"), [(True, False), (False, True), (True, True)])
def test_periodic_sides_carry_the_same_points(periodic_x, periodic_y):
    shapes = [circle((3, 80), 30, 64).intersection(DOMAIN), shapely.box(250, 100, 300, 130)]
    plan = triangulate(shapes, DOMAIN, **SETTING, periodic_x=periodic_x, periodic_y=periodic_y)
    for axis in np.flatnonzero([periodic_x, periodic_y]):
        low, high = (np.sort(plan.points_um[1 - axis, plan.points_um[axis] == end]) for end in (0, 300))
        np.testing.assert_array_equal(low, high)
    if periodic_x:  # the rectangle ends at x_max and nothing goes on at x_min: a true edge on both sides
        assert np.isin([100, 130], low if not periodic_y else plan.points_um[1, plan.points_um[0] == 0]).all()
        there = np.sort(plan.points_um[1, plan.points_um[0] == 0])
        assert np.diff(there[(there >= 110) & (there <= 120)]).max() <= 1.0 + 1e-9


def test_the_pattern_across_a_periodic_side_refines_this_side():
    shapes = [shapely.box(280, 100, 299, 200)]
    plan = triangulate(shapes, DOMAIN, **SETTING, periodic_x=True)
    near = np.sort(plan.points_um[1, plan.points_um[0] == 0])
    # 1 µm beyond the side runs an outline: steps of about first_step + 0.8 µm
    assert np.diff(near[(near > 120) & (near < 180)]).max() < 1.6 * 1.8


@pytest.mark.parametrize("segments", [4, 8, 64])
def test_circle_has_the_area_of_the_circle_and_vertices_on_the_axes(segments):
    dot = circle((3, -2), 7.5, segments)
    assert dot.area == pytest.approx(math.pi * 7.5**2, rel=1e-13)
    x, y = np.array(dot.exterior.coords[:-1]).T
    assert len(x) == segments
    assert (np.count_nonzero(x == 3), np.count_nonzero(y == -2)) == (2, 2)
    assert shapely.is_ccw(dot.exterior)


def test_refused_inputs():
    with pytest.raises(InputError, match="multiple of 4"):
        circle((0, 0), 1, 30)
    with pytest.raises(InputError, match="4 problems"):
        triangulate([], shapely.Polygon([(0, 0), (1, 0), (0, 1)]), first_step=0, growth=1, largest=-1)


def shared_facets(tets):
    """Facets, sorted corners, and how many tets have each."""
    facets = np.hstack([np.delete(tets, i, axis=0) for i in range(4)])
    return np.unique(np.sort(facets, axis=0), axis=1, return_counts=True)


def volumes(mesh):
    a, b, c, d = (mesh.p[:, corner] for corner in mesh.t)
    return np.einsum("in,in->n", np.cross(b - a, c - a, axis=0), d - a) / 6


@pytest.mark.parametrize("shuffled", [False, True])
def test_extrusion_fills_the_slab_and_conforms(shuffled):
    plan = triangulate([QUARTER], DOMAIN, **SETTING)
    depths = np.array([0.0, 1.0, 3.0, 10.0, 180.0])
    rank = np.random.default_rng(5).permutation(plan.points_um.shape[1]) if shuffled else None
    mesh = extrude(plan, depths, rank)
    volume = volumes(mesh)
    assert volume.min() > 0
    assert volume.sum() == pytest.approx(300 * 300 * 180 * 1e-12, rel=1e-12)
    assert mesh.t.shape[1] == 3 * plan.triangles.shape[1] * 4
    facets, count = shared_facets(mesh.t)
    assert count.max() == 2
    corners = mesh.p[:, facets[:, count == 1]]  # (3, 3 corners, n)
    sides = np.column_stack([mesh.p.min(axis=1), mesh.p.max(axis=1)])
    on_side = [(corners[i] == end).all(axis=0) for i in range(3) for end in sides[i]]
    assert np.any(on_side, axis=0).all()  # an unshared facet inside would be a non-conforming face


def test_numbering_of_levels_and_layers():
    plan = triangulate([], DOMAIN, **SETTING)
    mesh = extrude(plan, np.array([0.0, 5.0, 7.0]))
    n, m = plan.points_um.shape[1], plan.triangles.shape[1]
    np.testing.assert_allclose(mesh.p[:2, n : 2 * n] * 1e4, plan.points_um, rtol=1e-14)
    centre = mesh.p[:, mesh.t].mean(axis=1)
    assert (centre[2, : 3 * m] < 5e-4).all()
    owner = [shapely.Polygon(plan.points_um[:, plan.triangles[:, j]].T) for j in np.repeat(np.arange(m), 3)]
    assert shapely.contains(owner, shapely.points(centre[:2, 3 * m :].T * 1e4)).all()


@pytest.mark.parametrize("periodic", [(True, False), (True, True)])
def test_faces_of_tets_match_across_periodic_sides(periodic):
    plan = triangulate(
        [circle((3, 80), 30, 32).intersection(DOMAIN)],
        DOMAIN,
        **SETTING,
        **dict(zip(("periodic_x", "periodic_y"), periodic, strict=True)),
    )
    mesh = extrude(plan, np.array([0.0, 2.0, 10.0]), periodic_rank(plan, *periodic))
    facets, count = shared_facets(mesh.t)
    corners = mesh.p[:, facets[:, count == 1]]
    for axis in np.flatnonzero(periodic):
        rest = [i for i in range(3) if i != axis]
        low, high = (
            {frozenset(map(tuple, tri.T.tolist())) for tri in np.moveaxis(corners[rest][:, :, on], 2, 0)}
            for on in ((corners[axis] == end).all(axis=0) for end in (0.0, mesh.p[axis].max()))
        )
        assert low
        assert low == high


def test_extrusion_refuses_equal_ranks_and_unsorted_depths():
    plan = triangulate([], DOMAIN, **SETTING)
    with pytest.raises(MeshError, match="same rank"):
        extrude(plan, np.array([0.0, 1.0]), np.zeros(plan.points_um.shape[1], dtype=int))
    with pytest.raises(MeshError, match="ascending"):
        extrude(plan, np.array([0.0, 2.0, 1.0]))


def test_tensor_meshes_are_in_cm():
    x, y, z = np.array([0.0, 1.0, 5.0]), np.array([0.0, 2.0]), np.array([-1.0, 0.0, 4.0])
    quads, bricks = tensor_mesh(x, z), tensor_mesh(x, y, z)
    assert (quads.t.shape, bricks.t.shape) == ((4, 4), (8, 4))
    np.testing.assert_allclose(np.ptp(quads.p, axis=1), [5e-4, 5e-4])
    np.testing.assert_allclose(np.ptp(bricks.p, axis=1), [5e-4, 2e-4, 5e-4])
    with pytest.raises(MeshError, match="z_um"):
        tensor_mesh(x, -z)
