"""Plan view of straight and round outlines: a grid of stretched cells, bent onto the circles around each dot.

Grid lines beside a straight outline run along all of it, so the cells there are long and thin, and a few of them do.
A dot is a rectangle of grid lines whose outline is moved outwards onto the circle. In the sectors above and below the
dot's centre only y moves, beside it only x, so that straight outlines that cross the dot stay straight.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .islands import SAME_UM, Island, bulge
from .plan_view import PlanMesh, QuadPlan

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

CONVEX = 0.1
"""Smallest sine of a quad's corner; the corner of a dot's rectangle has 180° less a step of the polygon."""


def stretched_plan(
    x_um: NDArray[np.float64], y_um: NDArray[np.float64], islands: Sequence[Island], periodic: tuple[bool, bool]
) -> QuadPlan | PlanMesh | None:
    """Cells of the grid x × y, bent onto the islands' circles.

    Where a cell is no longer clearly convex, each is cut into two triangles along the diagonal that leaves the wider
    smallest angle; where both are alike, diagonals alternate.

    Parameters
    ----------
    x_um, y_um : (n,) float arrays
        Ascending; they contain the positions of `island_positions` within the piece.
    islands : sequence of Island
    periodic : (bool, bool)
        Whether opposite sides across x (across y) are one and the same.

    Returns
    -------
    QuadPlan, PlanMesh, or None
        None if a triangle would be folded, a side would bend, or periodic sides would differ.
    """
    points = np.stack(np.meshgrid(x_um, y_um, indexing="ij")).reshape(2, -1)
    moved = points + sum((_shift(points, island) for island in islands), np.zeros_like(points))
    kept = _sides_kept(points, moved, x_um, y_um, periodic)
    if np.abs(kept - moved).max() > SAME_UM:
        return None
    moved = kept
    quads = _quads(x_um.size, y_um.size)
    if _smallest_sine(moved[:, quads]) > CONVEX:
        return QuadPlan(moved, quads)
    plan = PlanMesh(moved, _triangles(moved, x_um.size, y_um.size))
    a, b, c = (moved[:, corner] for corner in plan.triangles)
    doubled = (b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0])
    return plan if doubled.min() > 0 else None


def _shift(points: NDArray[np.float64], island: Island) -> NDArray[np.float64]:
    """Displacement (2, n) of the points of an island's zone; the nested rectangles have levels 0 (centre), 1, 2, …"""
    radii = np.asarray(island.dots.radii_um)
    local = points - np.asarray(island.dots.center_um)[:, None]
    halves = np.array([island.half_sides(r) for r in radii])  # (n_circles, 2)
    sizes = [_sizes(local[i] > 0, halves[:, i], island.reach_um[i]) for i in (0, 1)]  # (n_circles + 2, n) each
    level = np.stack([_between(np.abs(local[i]), sizes[i]) for i in (0, 1)])
    top = level.max(axis=0)
    shift = np.zeros_like(points)
    for i in (0, 1):
        amount = _amount(top, radii, halves[:, i], island.straight_um[i])
        mine = (level[i] >= level[1 - i]) & (amount > 0)
        if not mine.any():
            continue
        there = _size_at(top[mine], sizes[1 - i][:, mine])
        along = np.abs(local[1 - i, mine]) / there * halves[0, 1 - i] / radii[0]  # on the circle of radius 1
        shift[i, mine] = np.sign(local[i, mine]) * amount[mine] * bulge(island, i, along)
    return shift


def _amount(
    level: NDArray[np.float64], radii: NDArray[np.float64], halves: NDArray[np.float64], straight: tuple[float, ...]
) -> NDArray[np.float64]:
    """Scale of the displacement at each level: the radius on a circle, 0 at straight lines, the centre and the rim."""
    lines = np.interp(straight, [0.0, *halves], np.arange(radii.size + 1.0))
    knots = np.concatenate([[0.0], np.arange(1.0, radii.size + 2), lines])
    values = np.concatenate([[0.0], radii, [0.0], np.zeros(len(straight))])
    order = np.argsort(knots, kind="stable")
    return np.asarray(np.interp(level, knots[order], values[order], right=0.0))


def _sizes(positive: NDArray[np.bool_], halves: NDArray[np.float64], reach: tuple[float, float]) -> NDArray[np.float64]:
    """Distances from the centre of the nested rectangles' sides on each point's side of the centre."""
    inner = np.broadcast_to(np.array([0.0, *halves])[:, None], (halves.size + 1, positive.size))
    return np.vstack([inner, np.where(positive, reach[1], reach[0])])


def _between(distance: NDArray[np.float64], sizes: NDArray[np.float64]) -> NDArray[np.float64]:
    """Level of a distance among ascending sizes, linear between them; beyond the last one the number of sizes."""
    below = np.clip((distance >= sizes).sum(axis=0) - 1, 0, len(sizes) - 2)
    low, high = np.take_along_axis(sizes, np.stack([below, below + 1]), axis=0)
    share = (distance - low) / (high - low)
    return np.where(share > 1 + 1e-12, float(len(sizes)), below + share)


def _size_at(level: NDArray[np.float64], sizes: NDArray[np.float64]) -> NDArray[np.float64]:
    """The distance that has a level; the inverse of `_between`."""
    below = np.minimum(level.astype(int), len(sizes) - 2)
    low, high = np.take_along_axis(sizes, np.stack([below, below + 1]), axis=0)
    return np.asarray(low + (high - low) * (level - below))


def _sides_kept(
    points: NDArray[np.float64],
    moved: NDArray[np.float64],
    x_um: NDArray[np.float64],
    y_um: NDArray[np.float64],
    periodic: tuple[bool, bool],
) -> NDArray[np.float64]:
    """Sides exactly where they were, and opposite periodic sides alike to the last digit."""
    moved = moved.copy()
    for axis, positions in enumerate((x_um, y_um)):
        low, high = points[axis] == positions[0], points[axis] == positions[-1]
        moved[axis, low], moved[axis, high] = positions[0], positions[-1]
        if periodic[axis]:
            moved[1 - axis, high] = moved[1 - axis, low]
    return moved


def _quads(nx: int, ny: int) -> NDArray[np.int64]:
    """Corners of the cells, counter-clockwise; point (i, j) has number i·ny + j."""
    i, j = (index.ravel() for index in np.meshgrid(np.arange(nx - 1), np.arange(ny - 1), indexing="ij"))
    a = i * ny + j
    return np.stack([a, a + ny, a + ny + 1, a + 1])


def _smallest_sine(corners: NDArray[np.float64]) -> float:
    """Smallest sine of an inner angle of quads with corners (2, 4, n); negative if one is not convex."""
    ahead, back = np.roll(corners, -1, axis=1) - corners, np.roll(corners, 1, axis=1) - corners
    turn = ahead[0] * back[1] - ahead[1] * back[0]
    return float((turn / (np.hypot(*ahead) * np.hypot(*back))).min())


def _triangles(points: NDArray[np.float64], nx: int, ny: int) -> NDArray[np.int64]:
    """Corners, counter-clockwise, of two triangles per cell."""
    quad = _quads(nx, ny)
    i, j = quad[0] // ny, quad[0] % ny
    rising = quad[[[0, 1, 2], [0, 2, 3]]]  # along the diagonal 0-2
    falling = quad[[[0, 1, 3], [1, 2, 3]]]
    gain = _shape(points, rising) - _shape(points, falling)
    take = np.where(np.abs(gain) > 1e-6, gain > 0, (i + j) % 2 == 0)
    chosen = np.where(take, rising, falling)  # (2 triangles, 3 corners, n)
    return np.asarray(chosen.transpose(1, 2, 0).reshape(3, -1))


def _shape(points: NDArray[np.float64], pair: NDArray[np.int64]) -> NDArray[np.float64]:
    """Smallest sine-like measure, twice the area over the two longest sides, of each pair of triangles."""
    corners = points[:, pair]  # (2, 2 triangles, 3 corners, n)
    sides = np.roll(corners, -1, axis=2) - corners
    doubled = sides[0, :, 0] * sides[1, :, 1] - sides[1, :, 0] * sides[0, :, 1]
    length = np.sort(np.hypot(*sides), axis=1)
    return np.asarray((doubled / (length[:, 1] * length[:, 2])).min(axis=0))
