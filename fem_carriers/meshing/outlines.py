"""All outlines of a plan view cut into straight pieces, and the faces between them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

SNAP = 2.0**-32
"""Vertices closer than about this share of the domain's size become one (0.1 pm in 0.4 mm)."""


@dataclass(frozen=True, eq=False)
class PlanarLines:
    """Straight pieces between vertices, none crossing another, that cut the domain into faces."""

    vertices: NDArray[np.float64]
    """(n, 2), sorted"""
    pieces: NDArray[np.int64]
    """(m, 2) vertices, the lower number first"""
    faces: NDArray[np.int64]
    """(m, 2) face to the left and to the right, counted from 1; 0 is outside"""
    fine: NDArray[np.bool_]
    """(m,) whether the mesh is refined towards the piece"""
    copy_of: NDArray[np.int64]
    """(m,) the same piece on the opposite periodic side, or -1"""


def planar_lines(
    shapes: Sequence[Any], domain: Any, coarse_lines: Sequence[Any], periodic: tuple[bool, bool]
) -> PlanarLines:
    """Cut all outlines, lines and sides at their common points and find the faces between them."""
    import shapely

    grid = 2.0 ** math.floor(math.log2(SNAP * max(np.ptp(np.reshape(domain.bounds, (2, 2)), axis=0))))
    outlines = shapely.unary_union([_line_parts(shape.boundary, domain) for shape in shapes], grid_size=grid)
    coarse = [_line_parts(line, domain) for line in coarse_lines]
    noded = _noded([outlines, *coarse, domain.boundary], periodic, grid)
    parts = [shapely.get_coordinates(part) for part in shapely.get_parts(noded)]
    ends = np.vstack([np.stack([part[:-1], part[1:]], axis=1) for part in parts])
    vertices, index = np.unique(ends.reshape(-1, 2), axis=0, return_inverse=True)
    pieces = np.unique(np.sort(index.reshape(-1, 2), axis=1), axis=0)
    outlined = np.asarray(shapely.distance(shapely.points(vertices[pieces].mean(axis=1)), outlines) <= 2 * grid)
    copy_of, on_side = _opposite(vertices, pieces, periodic)
    given = shapely.get_coordinates([domain, *shapes, *coarse_lines])
    faces = _faces(vertices, pieces)
    return PlanarLines(
        _restored(vertices, given, 4 * grid), pieces, faces, _refined(outlined, copy_of, on_side), copy_of
    )


def sharpest_corner_deg(lines: PlanarLines) -> float:
    """Smallest angle between two pieces that meet, in degrees; 360 if none do."""
    start = np.concatenate([lines.pieces[:, 0], lines.pieces[:, 1]])
    along = lines.vertices[np.concatenate([lines.pieces[:, 1], lines.pieces[:, 0]])] - lines.vertices[start]
    direction = np.degrees(np.arctan2(along[:, 1], along[:, 0])) % 360
    order = np.lexsort([direction, start])
    start, direction = start[order], direction[order]
    first, last = (np.unique(s, return_index=True)[1] for s in (start, start[::-1]))
    around = direction[first] + 360 - direction[len(start) - 1 - last]  # from the last piece on to the first
    between = np.diff(direction)[start[1:] == start[:-1]]
    return float(np.concatenate([between, around]).min())


def split_outlines(lines: PlanarLines, longest: float) -> PlanarLines:
    """Cut refined pieces into equal parts of at most `longest`; pieces on periodic sides stay."""
    length = np.hypot(*(lines.vertices[lines.pieces[:, 1]] - lines.vertices[lines.pieces[:, 0]]).T)
    paired = np.isin(np.arange(len(length)), lines.copy_of) | (lines.copy_of >= 0)
    parts = np.where(lines.fine & ~paired, np.ceil(length / longest * (1 - 1e-9)), 1).astype(int)
    vertices, pieces, total = [lines.vertices], [], len(lines.vertices)
    for (a, b), n in zip(lines.pieces.tolist(), parts.tolist(), strict=True):
        vertices.append(np.linspace(lines.vertices[a], lines.vertices[b], n + 1)[1:-1])
        pieces += list(pairwise([a, *range(total, total + n - 1), b]))
        total += n - 1
    owner = np.repeat(np.arange(len(parts)), parts)
    first = np.append(np.cumsum(parts) - parts, -1)  # new number of an uncut piece; -1 stays -1
    return PlanarLines(
        np.vstack(vertices), np.array(pieces), lines.faces[owner], lines.fine[owner], first[lines.copy_of[owner]]
    )


def _refined(outlined: NDArray[np.bool_], copy_of: NDArray[np.int64], on_side: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Pieces of outlines where a pattern ends.

    It goes on beyond a plain side, and beyond a periodic side if the opposite side has an outline too.
    """
    fine = outlined & ~on_side
    copies = np.flatnonzero(copy_of >= 0)
    originals = copy_of[copies]
    fine[copies], fine[originals] = outlined[copies] & ~outlined[originals], outlined[originals] & ~outlined[copies]
    return fine


def _line_parts(lines: Any, domain: Any) -> Any:
    """The part of lines inside the closed domain, without isolated points."""
    import shapely

    parts = shapely.get_parts(shapely.intersection(lines, domain))
    return shapely.multilinestrings([part for part in parts if part.geom_type == "LineString"])


def _noded(lines: list[Any], periodic: tuple[bool, bool], grid: float) -> Any:
    """Lines cut wherever they meet; opposite periodic sides are cut at the same places."""
    import shapely

    noded = shapely.unary_union(lines, grid_size=grid)
    xy = shapely.get_coordinates(noded)
    sides = []
    for axis in np.flatnonzero(periodic):
        ends = xy[:, axis].min(), xy[:, axis].max()
        along = np.unique(xy[np.isin(xy[:, axis], ends), 1 - axis])
        for end in ends:
            across = np.full_like(along, end)
            sides.append(shapely.linestrings(*((across, along) if axis == 0 else (along, across))))
    return shapely.unary_union([noded, *sides], grid_size=grid)


def _opposite(
    vertices: NDArray[np.float64], pieces: NDArray[np.int64], periodic: tuple[bool, bool]
) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    """For each piece its partner on the lower opposite periodic side (or -1), and whether it lies on a side."""
    copy_of = np.full(len(pieces), -1)
    on_side = np.zeros(len(pieces), dtype=bool)
    for axis in (0, 1):
        ends = vertices[:, axis].min(), vertices[:, axis].max()
        low, high = (np.flatnonzero((vertices[pieces, axis] == end).all(axis=1)) for end in ends)
        on_side[low] = on_side[high] = True
        if periodic[axis]:
            order = [side[np.argsort(vertices[pieces[side, 0], 1 - axis])] for side in (low, high)]
            copy_of[order[1]] = order[0]
    return copy_of, on_side


def _restored(vertices: NDArray[np.float64], given: NDArray[np.float64], near: float) -> NDArray[np.float64]:
    """Vertices that rounding moved take their given coordinates again."""
    from scipy.spatial import KDTree

    distance, nearest = KDTree(given).query(vertices)
    return np.asarray(np.where(np.asarray(distance <= near)[:, None], given[nearest], vertices))


def _faces(vertices: NDArray[np.float64], pieces: NDArray[np.int64]) -> NDArray[np.int64]:
    """Face to the left and to the right of each piece; a line that ends inside a face has it on both sides."""
    import shapely

    lines = shapely.linestrings(vertices[pieces])
    polygons = shapely.get_parts(shapely.polygonize(lines))
    rank = {vertex: i for i, vertex in enumerate(map(tuple, vertices.tolist()))}
    left_of: dict[tuple[int, int], int] = {}
    for number, polygon in enumerate(polygons, 1):
        oriented = shapely.orient_polygons(polygon)
        for ring in [oriented.exterior, *oriented.interiors]:
            turn = [rank[vertex] for vertex in ring.coords]
            left_of.update(dict.fromkeys(pairwise(turn), number))
    faces = np.array([[left_of.get((a, b), 0), left_of.get((b, a), 0)] for a, b in pieces.tolist()])
    loose = np.flatnonzero((faces == 0).all(axis=1))
    inside = shapely.points(vertices[pieces[loose]].mean(axis=1))
    which, where = shapely.STRtree(polygons).query(inside, predicate="within")
    faces[loose[which]] = where[:, None] + 1
    return faces


def distance_to_outlines(
    lines: PlanarLines, bounds: NDArray[np.float64], periodic: tuple[bool, bool]
) -> Callable[[NDArray[np.float64]], NDArray[np.float64]]:
    """Function of (n, 2) places: distance to the nearest refined outline, across periodic sides too."""
    import shapely

    period, own = np.ptp(bounds, axis=0), lines.vertices[lines.pieces[lines.fine]]
    shifts = [(i, j) for i in (-1, 0, 1) for j in (-1, 0, 1) if (periodic[0] or not i) and (periodic[1] or not j)]
    tree = shapely.STRtree(shapely.linestrings(np.concatenate([own + period * shift for shift in shifts])))
    if not len(own):
        return lambda xy: np.full(len(xy), math.inf)
    return lambda xy: tree.query_nearest(shapely.points(xy), return_distance=True, all_matches=False)[1]
