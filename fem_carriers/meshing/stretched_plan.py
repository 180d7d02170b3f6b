"""Plan view of straight and round outlines: a grid of stretched cells, bent onto the circles around each dot.

Grid lines beside a straight outline run along the whole outline, so the cells there are long and thin, and a few of them
do. A dot is a rectangle of grid lines whose outline is moved outwards onto the circle. In the sectors above and below the
dot's centre only y moves, beside it only x, so that straight outlines that cross the dot stay straight.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from .plan_view import PlanMesh

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from numpy.typing import NDArray

    from ..cell.unit_cell import UnitCell

REACH = 2.2
"""Half width of the zone in which grid lines bend, in radii of the outermost circle."""
NARROW = 1.08
"""The same at least."""
CLEAR = 0.03
"""Least distance between a straight outline that crosses a dot and the corner of the dot's rectangle, in radii."""
ROOMY = 0.25
"""A distance that needs no better."""
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


@dataclass(frozen=True)
class Island:
    """Dots, and the zone around them in which grid lines bend.

    Parameters
    ----------
    dots : Dots
    corner : int
        The polygon's corner (counted from the x axis) that is the corner of the rectangle of grid lines.
    core : float
        Share of the innermost rectangle that stays as it is.
    reach_um : ((left, right), (below, above))
        Distances from the centre beyond which nothing moves.
    """

    dots: Dots
    corner: int
    core: float
    reach_um: tuple[tuple[float, float], tuple[float, float]]

    def half_sides(self, radius_um: float) -> tuple[float, float]:
        """Half width and half height of the rectangle that becomes a circle, µm."""
        angle = 2 * math.pi * self.corner / self.dots.segments
        return radius_um * math.cos(angle), radius_um * math.sin(angle)


def find_dots(cell: UnitCell, segments: int) -> list[Dots]:
    """All dots, and round shades, that reach into the modelled piece.

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
    from ..cell.outlines import patch_outlines, shade_size
    from ..cell.patches import Dot

    frame, found = cell.frame, {}
    wide = replace(frame, x=_wider(frame.x, frame.period_x), y=_wider(frame.y, frame.period_y or 0.0))
    for patch in (p for face in (cell.front, cell.rear) for p in face.patches if isinstance(p, Dot)):  # type: ignore[union-attr]
        shapes = patch_outlines(patch, wide, segments)
        if shade_size(patch, has_contact=True):
            shapes += patch_outlines(patch, wide, segments, opaque=True)
        for shape in shapes:
            if shape.intersection(frame.box).area > SAME_UM:
                x, y = shape.centroid.coords[0]
                key = (round(x, 6) + 0.0, round(y, 6) + 0.0)
                found.setdefault(key, set()).add(round(shape.bounds[2] - x, 9))
    return [Dots(center, _distinct(radii), segments) for center, radii in sorted(found.items())]


def _wider(span: tuple[float, float], by: float) -> tuple[float, float]:
    return span[0] - by, span[1] + by


def _distinct(radii: set[float]) -> tuple[float, ...]:
    ordered = sorted(radii)
    return tuple(r for i, r in enumerate(ordered) if i == 0 or r - ordered[i - 1] > SAME_UM)
