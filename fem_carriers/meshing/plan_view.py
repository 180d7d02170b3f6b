"""Triangles in plan view, graded towards the outlines of layers and contacts on either face."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints, MeshError
from .outlines import SNAP, PlanarLines, distance_to_outlines, planar_lines, sharpest_corner_deg, split_outlines

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

SLOPES = (0.45, 0.47, 0.43, 0.4)
"""Growth of triangle size with distance, at most; tried in turn until the mesh is good, else the best one is taken."""
OVERLONG = 1.6
"""Longest edge of a good mesh, in units of the wanted length at its middle."""
SHARP_DEG = 20.0
"""Smallest angle of a good mesh, unless outlines meet at a sharper one."""


@dataclass(frozen=True, eq=False)
class PlanMesh:
    """Triangles in plan view.

    Parameters
    ----------
    points_um : (2, n_points) float array
        Coordinates x, y in µm.
    triangles : (3, n_triangles) int array
        Corners, counter-clockwise.
    """

    points_um: NDArray[np.float64]
    triangles: NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class QuadPlan:
    """Convex quads in plan view.

    Parameters
    ----------
    points_um : (2, n_points) float array
        Coordinates x, y in µm.
    quads : (4, n_quads) int array
        Corners, counter-clockwise.
    """

    points_um: NDArray[np.float64]
    quads: NDArray[np.int64]


def circle(center_um: tuple[float, float], radius_um: float, segments: int) -> Any:
    """Regular polygon with the area of a circle, π r², so that contact areas are exact.

    Its vertices lie at r √(2π / (n sin(2π/n))) from the centre (area of a regular n-gon: n/2 R² sin(2π/n)); four of
    them on the axes through the centre.

    Parameters
    ----------
    center_um : (x, y)
        Centre in µm.
    radius_um : float
        Radius of the circle in µm.
    segments : int
        Number of sides, a multiple of 4.

    Returns
    -------
    shapely.Polygon

    Raises
    ------
    InputError
        For a radius that is not positive or `segments` not a multiple of 4.
    """
    import shapely

    wrong = Complaints("circle")
    wrong.unless(0 < radius_um < math.inf, f"radius_um = {radius_um}", "a positive number")
    wrong.unless(segments >= 4 and segments % 4 == 0, f"segments = {segments}", "a multiple of 4", "64")
    wrong.raise_if_any()
    vertex_um = radius_um * math.sqrt(2 * math.pi / (segments * math.sin(2 * math.pi / segments)))
    angle = np.arange(1, segments // 4) * 2 * math.pi / segments
    quarter = np.vstack([[1.0, 0.0], np.column_stack([np.cos(angle), np.sin(angle)])])
    turned = quarter[:, ::-1] * [-1, 1]  # exact quarter turns keep the four vertices on the axes
    return shapely.Polygon(np.array(center_um) + vertex_um * np.vstack([quarter, turned, -quarter, -turned]))


def triangulate(
    shapes: Sequence[Any],
    domain: Any,
    *,
    first_step: float,
    growth: float,
    largest: float,
    coarse_lines: Sequence[Any] = (),
    periodic_x: bool = False,
    periodic_y: bool = False,
) -> PlanMesh:
    """Triangles of a rectangle whose edges cover every outline and grow away from the outlines.

    An edge that starts at distance d from the nearest outline is about min(largest, first_step + (growth − 1) d) long,
    measured from its nearer end, so that rows of triangles beside a straight outline form a geometric series with
    ratio `growth`. Nearly equilateral triangles cannot grow faster than about 1.6 per row; above that the mesh is finer
    than asked. Outlines on the sides of the domain are no edges (the pattern goes on beyond) and are not refined,
    except on a periodic side where the opposite side has none.

    Parameters
    ----------
    shapes : sequence of shapely.Polygon or MultiPolygon
        In µm; they may touch, nest, overlap and end at the sides of the domain; what lies outside is cut off.
    domain : shapely.Polygon
        Axis-parallel rectangle, in µm.
    first_step : float
        Length of triangle edges along outlines, in µm.
    growth : float
        Ratio of neighbouring rows, above 1.
    largest : float
        Largest edge length, in µm.
    coarse_lines : sequence of shapely.LineString
        Lines that triangle edges must cover, without refinement, in µm.
    periodic_x, periodic_y : bool
        Same points on the sides x_min and x_max (y_min and y_max); distances count across them too.

    Returns
    -------
    PlanMesh
        In µm. The same input gives the same mesh.

    Raises
    ------
    InputError
        For lengths that are not positive, growth not above 1, or a domain that is not an axis-parallel rectangle.
    MeshError
        When the outlines cannot be meshed.
    """
    _check(domain, first_step, growth, largest)
    periodic = (periodic_x, periodic_y)
    lines = planar_lines(shapes, domain, coarse_lines, periodic)
    bounds = np.reshape(domain.bounds, (2, 2))
    distance = distance_to_outlines(lines, bounds, periodic)
    first = min(first_step, largest)
    lines = split_outlines(lines, first)
    angle_deg = min(SHARP_DEG, sharpest_corner_deg(lines))
    best, best_score = None, -1.0
    for steepest in SLOPES:
        slope = min(steepest, 2 * (growth - 1) / (growth + 1))
        limits = _side_limits(distance, bounds, periodic, first, slope, largest)
        plan = _match_sides(_tidy(*_mesh(lines, first, slope, largest, limits), bounds), bounds, periodic)
        _confirm(plan, domain.area)
        excess = _edge_excess(plan, lambda xy: np.minimum(largest, first + (growth - 1) * distance(xy)))
        score = min(OVERLONG / excess, smallest_angle_deg(plan) / angle_deg)
        if score > best_score:
            best, best_score = plan, score
        if score >= 1:
            break
    assert best is not None
    return best


def smallest_angle_deg(plan: PlanMesh) -> float:
    """Smallest angle of all triangles in degrees."""
    corners = plan.points_um[:, plan.triangles]
    sides = [corners[:, (i + 1) % 3] - corners[:, i] for i in range(3)]
    cosines = [-(sides[i] * sides[i - 1]).sum(0) / np.hypot(*sides[i]) / np.hypot(*sides[i - 1]) for i in range(3)]
    return float(np.degrees(np.arccos(np.max(cosines))))


def _check(domain: Any, first_step: float, growth: float, largest: float) -> None:
    wrong = Complaints("plan-view triangulation")
    rectangle = domain.area > 0 and domain.equals(domain.envelope)
    wrong.unless(rectangle, f"domain {domain.wkt}", "an axis-parallel rectangle")
    wrong.unless(0 < first_step < math.inf, f"first_step = {first_step}", "a positive length in µm")
    wrong.unless(0 < largest < math.inf, f"largest = {largest}", "a positive length in µm")
    wrong.unless(1 < growth < math.inf, f"growth = {growth}", "a number above 1", "1.5 to 2")
    wrong.raise_if_any()


def _mesh(
    lines: PlanarLines, first_step: float, slope: float, largest: float, limits: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Points (2, n) and triangles (3, m) of the faces between the lines; `limits` are rows (x, y, size)."""
    from netgen.geom2d import SplineGeometry
    from netgen.meshing import MeshingParameters

    geometry = SplineGeometry()
    points = [geometry.AppendPoint(*map(float, vertex)) for vertex in lines.vertices]
    number: dict[int, int] = {}
    for i in np.argsort(lines.copy_of >= 0, kind="stable").tolist():  # originals before their periodic copies
        a, b = lines.pieces[i]
        more = {"maxh": first_step} if lines.fine[i] else {}
        if lines.copy_of[i] >= 0:
            more["copy"] = number[int(lines.copy_of[i])]
        left, right = map(int, lines.faces[i])
        number[i] = geometry.Append(["line", points[a], points[b]], leftdomain=left, rightdomain=right, **more)
    # more sweeps than usual, with more weight on shape: sizes change quickly here
    parameters = MeshingParameters(maxh=largest, grading=slope, optsteps2d=6, elsizeweight=0.1)
    for x, y, size in limits.tolist():
        parameters.RestrictH(x, y, 0.0, size)
    try:
        raw = geometry.GenerateMesh(parameters)
    except Exception as error:
        raise MeshError(
            f"the outlines cannot be meshed ({error}). Allowed are outlines whose gaps and corners are wide compared "
            "with the first step. Try a smaller first step, or move nearly touching outlines apart or together."
        ) from error
    corners = np.asarray(raw.Elements2D().NumPy()["nodes"][:, :3], dtype=np.int64).T - 1
    return np.array(raw.Coordinates()[:, :2], dtype=float).T, corners  # a copy: netgen frees its memory


def _tidy(points: NDArray[np.float64], corners: NDArray[np.int64], bounds: NDArray[np.float64]) -> PlanMesh:
    """Used points only, exactly on the sides, and all triangles counter-clockwise."""
    used, corners = np.unique(corners, return_inverse=True)
    points, corners = points[:, used], corners.reshape(3, -1)
    near = SNAP * np.ptp(bounds, axis=0).max()
    for side in bounds:
        points = np.where(np.abs(points - side[:, None]) <= near, side[:, None], points)
    clockwise = _twice_area(points, corners) < 0
    corners[1:, clockwise] = corners[:0:-1, clockwise]
    return PlanMesh(points, corners)


def _twice_area(points: NDArray[np.float64], triangles: NDArray[np.int64]) -> NDArray[np.float64]:
    """Twice the signed area of each triangle, positive if counter-clockwise, shape (n_triangles,)."""
    a, b, c = points[:, triangles[0]], points[:, triangles[1]], points[:, triangles[2]]
    return np.asarray((b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0]))


def _confirm(plan: PlanMesh, area_um2: float) -> None:
    """Refuse folded triangles or a mesh that does not fill the domain."""
    doubled = _twice_area(plan.points_um, plan.triangles)
    if doubled.min() <= 0 or not math.isclose(doubled.sum() / 2, area_um2, rel_tol=1e-9):
        raise MeshError(
            f"the triangles cover {doubled.sum() / 2:.9g} µm² of a domain of {area_um2:.9g} µm². Try a smaller first "
            "step, or move nearly touching outlines apart or together."
        )


def _side_limits(
    distance: Callable[[NDArray[np.float64]], NDArray[np.float64]],
    bounds: NDArray[np.float64],
    periodic: tuple[bool, bool],
    first_step: float,
    slope: float,
    largest: float,
) -> NDArray[np.float64]:
    """Sizes along periodic sides, so that outlines just across them count: rows (x, y, size)."""
    rows = []
    for axis in np.flatnonzero(periodic):
        place = bounds[0].copy()
        while place[1 - axis] < bounds[1, 1 - axis]:
            wanted = min(largest, first_step + slope * float(distance(place[None])[0]))
            opposite = np.where(np.arange(2) == axis, bounds[1], place)
            rows += [[*place, wanted], [*opposite, wanted]]
            place[1 - axis] += wanted / 2
    return np.array(rows, dtype=float).reshape(-1, 3)


def _match_sides(plan: PlanMesh, bounds: NDArray[np.float64], periodic: tuple[bool, bool]) -> PlanMesh:
    """Give opposite periodic sides the same coordinates to the last digit."""
    points = plan.points_um.copy()
    for axis in np.flatnonzero(periodic):
        low, high = (np.flatnonzero(points[axis] == bounds[end, axis]) for end in (0, 1))
        low, high = (side[np.argsort(points[1 - axis, side])] for side in (low, high))
        near = 8 * SNAP * np.ptp(bounds, axis=0).max()
        if low.size != high.size or np.abs(points[1 - axis, low] - points[1 - axis, high]).max() > near:
            raise MeshError(
                f"the periodic sides across {'xy'[axis]} carry different points ({low.size} and {high.size}). Try a "
                "smaller first step, or move outlines that nearly touch these sides onto them."
            )
        points[1 - axis, high] = points[1 - axis, low]
    return PlanMesh(points, plan.triangles)


def _edge_excess(plan: PlanMesh, wanted: Callable[[NDArray[np.float64]], NDArray[np.float64]]) -> float:
    """Largest ratio of an edge's length to the wanted length at its middle."""
    edges = np.hstack([plan.triangles[[i, (i + 1) % 3]] for i in range(3)])
    a, b = plan.points_um[:, edges[0]], plan.points_um[:, edges[1]]
    return float(np.max(np.hypot(*(a - b)) / wanted((a + b).T / 2)))
