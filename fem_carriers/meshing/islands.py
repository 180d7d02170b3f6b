"""Zones around dots in which grid lines bend onto circles, and what the grid's axes need for them."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from numpy.typing import NDArray

    from ..cell.unit_cell import UnitCell

REACH = 2.2
"""Half width of the zone in which grid lines bend, in radii of the outermost circle."""
TANGENT = 0.001
"""Straight outlines that come this close to touching a circle, in radii, cannot be told from tangents."""
ROOMY = 0.15
"""Enough distance between a straight outline that crosses a dot and the corner of the dot's rectangle, in radii."""
SAME_UM = 1e-6
"""Lengths below are round-off."""


@dataclass(frozen=True)
class Dots:
    """Concentric regular polygons that stand for circles.

    Parameters
    ----------
    center_um : (x, y)
    radii_um : tuple of float
        Of the corners, ascending.
    segments : int
        Corners of a full circle, a multiple of 8, four of them on the axes through the centre.
    """

    center_um: tuple[float, float]
    radii_um: tuple[float, ...]
    segments: int

    def outline(self, radius_um: float) -> Any:
        """One of the polygons, as a closed shapely line in µm."""
        from shapely import LinearRing

        angles = 2 * math.pi * np.arange(self.segments) / self.segments
        return LinearRing(np.asarray(self.center_um) + radius_um * np.column_stack([np.cos(angles), np.sin(angles)]))

    def follows(self, lines: Sequence[Any], radius_um: float) -> bool:
        """Whether any of the lines runs along one of the polygons."""
        band = self.outline(radius_um).buffer(SAME_UM)
        return any(line.intersection(band).length > 0.01 * radius_um / self.segments for line in lines)


@dataclass(frozen=True)
class Island:
    """Dots, and the zone around them in which grid lines bend.

    Parameters
    ----------
    dots : Dots
    corner : (x, y)
        Corner of the rectangle of grid lines that becomes a circle, on the polygon of radius 1.
    straight_um : ((x, …), (y, …))
        Distances from the centre, along each axis, of the straight outlines at right angles to it that cross the dots.
    reach_um : ((left, right), (below, above))
        Distances from the centre beyond which nothing moves.
    """

    dots: Dots
    corner: tuple[float, float]
    straight_um: tuple[tuple[float, ...], tuple[float, ...]]
    reach_um: tuple[tuple[float, float], tuple[float, float]]

    def half_sides(self, radius_um: float) -> tuple[float, float]:
        """Half width and half height of the rectangle that becomes a circle, µm."""
        return radius_um * self.corner[0], radius_um * self.corner[1]


def find_dots(cell: UnitCell, segments: int) -> list[Dots]:
    """All dots, and round shades, of the modelled piece and around it.

    Parameters
    ----------
    cell : UnitCell
    segments : int
        Corners of a full circle.

    Returns
    -------
    list of Dots
        Ordered by centre.
    """
    from ..cell.outlines import patch_outlines
    from ..cell.patches import Dot

    frame = cell.frame
    found: dict[tuple[float, float], tuple[tuple[float, float], set[float]]] = {}
    far = 2 * frame.period_x, 2 * (frame.period_y or 0.0)  # holds every copy whole, so that its centroid is its centre
    wide = replace(frame, x=_wider(frame.x, far[0]), y=_wider(frame.y, far[1]))
    for patch in (p for face in (cell.front, cell.rear) for p in face.patches if isinstance(p, Dot)):  # type: ignore[union-attr]
        for shape in patch_outlines(patch, wide, segments) + patch_outlines(patch, wide, segments, opaque=True):
            x, y = shape.centroid.coords[0]
            center, radii = found.setdefault((round(x, 6) + 0.0, round(y, 6) + 0.0), ((x, y), set()))
            radii.add(round(shape.bounds[2] - center[0], 9))
    return [Dots(center, _distinct(radii), segments) for _, (center, radii) in sorted(found.items())]


def _wider(span: tuple[float, float], by: float) -> tuple[float, float]:
    return span[0] - by, span[1] + by


def _distinct(radii: set[float]) -> tuple[float, ...]:
    ordered = sorted(radii)
    return tuple(r for i, r in enumerate(ordered) if i == 0 or r - ordered[i - 1] > SAME_UM)


def on_dots(ends_um: NDArray[np.float64], dots: Sequence[Dots]) -> bool:
    """Whether all pieces of line, (n, 2 ends, 2 coordinates), lie on outlines of dots."""
    from shapely import contains, linestrings, prepare, union_all

    band = union_all([d.outline(r).buffer(10 * SAME_UM) for d in dots for r in d.radii_um])
    prepare(band)
    return bool(np.all(contains(band, linestrings(ends_um)))) if len(ends_um) else True


def fit_islands(
    dots: Sequence[Dots], straight_um: NDArray[np.float64], box: Any, periodic: tuple[bool, bool]
) -> list[Island] | None:
    """Zones around all dots that reach into the piece, which leave every straight outline straight.

    Parameters
    ----------
    dots : sequence of Dots
        Those around the piece too.
    straight_um : (n, 2 ends, 2 coordinates) float array
        Axis-parallel outlines in the piece.
    box : shapely.Polygon
        The modelled piece; its sides stay straight too.
    periodic : (bool, bool)
        Whether the pattern in the piece repeats across x (across y).

    Returns
    -------
    list of Island, or None
        None if a straight outline touches a circle, straight outlines along x and y cross a dot both far from its
        centre, or dots overlap.
    """
    corners = np.array(box.exterior.coords)
    lines = np.concatenate([straight_um, np.stack([corners[:-1], corners[1:]], axis=1)])
    period = np.ptp(corners, axis=0)
    for axis in np.flatnonzero(periodic):  # copies of one dot across a side then see the same lines
        step = np.where(np.arange(2) == axis, period, 0.0)
        lines = np.concatenate([lines - step, lines, lines + step])
    inside = [dot for dot in dots if _reaches(dot, box)]
    islands = [_island(dot, lines, _limits(dot, dots)) for dot in inside]
    return None if any(i is None for i in islands) else [i for i in islands if i is not None]


def _reaches(dot: Dots, box: Any) -> bool:
    from shapely import Polygon

    return bool(Polygon(dot.outline(dot.radii_um[-1])).intersection(box).area > SAME_UM)


def _limits(dot: Dots, others: Iterable[Dots]) -> tuple[float, float]:
    """Half width and half height of the zone that other dots leave; half of each gap."""
    largest = dot.radii_um[-1]
    limit = [REACH * largest, REACH * largest]
    for other in others:
        apart = np.abs(np.subtract(other.center_um, dot.center_um))
        if other is not dot:
            axis = int(np.argmax(apart))
            limit[axis] = min(limit[axis], largest + (apart[axis] - largest - other.radii_um[-1]) / 2)
    return limit[0], limit[1]


def _island(dots: Dots, lines: NDArray[np.float64], limits: tuple[float, float]) -> Island | None:
    largest = dots.radii_um[-1]
    straight, reach = [], []
    for axis in (0, 1):
        offsets = _offsets(lines, dots.center_um, axis, limits)
        straight.append(tuple(sorted({abs(o) for o in offsets if abs(o) < largest - SAME_UM})))
        outside = [o for o in offsets if abs(o) >= largest - SAME_UM]
        below = min([limits[axis], *(-o for o in outside if o < 0)])
        reach.append((below, min([limits[axis], *(o for o in outside if o > 0)])))
    touching = any(r <= o < (1 + TANGENT) * r for r in dots.radii_um for group in straight for o in group)
    corner = _best_corner(dots.segments, np.array([_outermost(group, dots.radii_um) for group in straight]))
    if corner is None or touching or np.min(reach) < (1 + TANGENT) * largest:
        return None
    return Island(dots, corner, (straight[0], straight[1]), (reach[0], reach[1]))


def _outermost(offsets: tuple[float, ...], radii: tuple[float, ...]) -> float:
    """Largest distance of a crossing line in units of the next larger circle's radius."""
    return max((o / min(r for r in radii if r > o) for o in offsets), default=0.0)


def _offsets(
    lines: NDArray[np.float64], center: tuple[float, float], axis: int, limits: tuple[float, float]
) -> list[float]:
    """Distances from the centre, along `axis`, of the lines at right angles to it that pass through the zone."""
    local = lines - np.asarray(center)
    across = np.abs(local[:, 0, axis] - local[:, 1, axis]) < SAME_UM
    along = np.sort(local[:, :, 1 - axis], axis=1)
    near = (along[:, 0] < limits[1 - axis] - SAME_UM) & (along[:, 1] > -limits[1 - axis] + SAME_UM)
    return [float(o) for o in np.unique(np.round(local[across & near, 0, axis], 9))]


def _best_corner(segments: int, crossing: NDArray[np.float64]) -> tuple[float, float] | None:
    """Corner of the rectangle, on the polygon of radius 1, that holds the lines crossing at most at these distances.

    The polygon's corner nearest to 45° that leaves enough room, else what leaves most; near a tangent that is halfway
    between the outermost line and the circle.
    """
    x, y = _quarter(segments)
    inner = sorted(range(1, len(x) - 1), key=lambda k: (abs(x[k] - y[k]), k))
    far = (1 + crossing) / 2
    near = np.interp(far, x[::-1], y[::-1])
    candidates = [*((x[k], y[k]) for k in inner), (far[0], near[0]), (near[1], far[1])]
    room = [min(cx - crossing[0], cy - crossing[1], ROOMY) for cx, cy in candidates]
    best = int(np.argmax(np.round(room, 9)))
    return (float(candidates[best][0]), float(candidates[best][1])) if room[best] > TANGENT / 2 else None


def _quarter(segments: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Corners of the polygon of radius 1 from the x axis to the y axis."""
    angles = 2 * math.pi * np.arange(segments // 4 + 1) / segments
    x = np.cos(angles)
    x[-1] = 0.0
    return x, x[::-1].copy()


def bulge(island: Island, axis: int, along: NDArray[np.float64]) -> NDArray[np.float64]:
    """Distance along `axis` from the side of the rectangle to the polygon of radius 1, at each place along the side."""
    x, y = _quarter(island.dots.segments)
    return np.asarray(np.interp(along, x[::-1], y[::-1]) - island.corner[axis])


def island_positions(island: Island, axis: str) -> list[tuple[float, list[float], list[float]]]:
    """What an axis needs for each circle of an island.

    Parameters
    ----------
    island : Island
    axis : {"x", "y"}

    Returns
    -------
    list of (radius, rectangle's sides, corners)
        Positions in µm: sides become the circle and want a small step; the other corners must be nodes.
    """
    i = "xy".index(axis)
    center, (x, _) = island.dots.center_um[i], _quarter(island.dots.segments)
    found = []
    for radius in island.dots.radii_um:
        side = island.half_sides(radius)[i]
        inner = radius * x[x < island.corner[i] - 1e-9]
        found.append((radius, [center - side, center + side], (center + np.append(inner, -inner)).tolist()))
    return found
