"""Which metal lies above a place: how much light it takes, and whether it touches the cell."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..units import UM

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .joints import Wiring
    from .layout import Grid, GridLayout
    from .placing import PlacedLine


@dataclass(frozen=True)
class MetalKind:
    """Metal of one kind.

    Parameters
    ----------
    kind : str
    shaded : float
        Share of the light it takes on its band.
    touches : bool
        Whether it touches the cell.
    """

    kind: str
    shaded: float
    touches: bool


@dataclass(frozen=True, eq=False)
class Bands:
    """Rectangles of metal.

    Parameters
    ----------
    boxes : (n, 4) float array
        x_min, x_max, y_min, y_max, cm.
    number : (n,) int array
        Kind of each.
    kinds : list of MetalKind
    """

    boxes: NDArray[np.float64]
    number: NDArray[np.int64]
    kinds: list[MetalKind]

    def cover(self, places: NDArray[np.float64]) -> NDArray[np.int64]:
        """Kind of the metal over places (2, n); −1 for none. Later kinds lie on earlier ones."""
        found = np.full(places.shape[1], -1)
        order = np.argsort(places[1])
        y = places[1, order]
        for box, kind in zip(self.boxes, self.number, strict=True):
            rows = order[np.searchsorted(y, box[2]) : np.searchsorted(y, box[3], side="right")]
            inside = (places[0, rows] >= box[0]) & (places[0, rows] <= box[1])
            found[rows[inside]] = np.maximum(found[rows[inside]], kind)
        return found

    def edges(self, axis: int) -> NDArray[np.float64]:
        """Borders of the rectangles along an axis."""
        return np.unique(self.boxes[:, 2 * axis : 2 * axis + 2])


def shading_bands(layout: GridLayout, wirings: Sequence[Wiring], fingers: bool) -> Bands:
    """Metal that shades or touches the cell: of the front grid, or of a rear grid alone.

    Parameters
    ----------
    layout : GridLayout
    wirings : sequence of Wiring
    fingers : bool
        Whether fingers count (the unit cell's curve contains their shading already).
    """
    boxes: list[tuple[float, ...]] = []
    number: list[int] = []
    kinds: list[MetalKind] = []
    for wiring in wirings:
        front = layout.front is wiring.grid
        if not front and (len(wirings) == 2 or not fingers):
            continue
        for kind in ("finger", "busbar", "perimeter", "wire"):
            lines = wiring.of(kind)
            if lines and (fingers or kind != "finger"):
                kinds.append(_kind(kind, lines[0], wiring.grid, front))
                boxes += [_box(line, kind) for line in lines]
                number += [len(kinds) - 1] * len(lines)
    return Bands(np.array(boxes, dtype=float).reshape(-1, 4), np.array(number, dtype=np.int64), kinds)


def _kind(kind: str, line: PlacedLine, grid: Grid, front: bool) -> MetalKind:
    """A wire's band is as wide as the light it takes; other metal's as wide as the metal."""
    shaded = 1.0 if kind == "wire" else min(1.0, line.metal.shaded_um / line.metal.width_um)
    rows = {"busbar": grid.busbars, "perimeter": grid.perimeter}.get(kind)
    touches = kind == "finger" or bool(getattr(rows, "touches_sheet", False))
    return MetalKind("perimeter busbar" if kind == "perimeter" else kind, shaded if front else 0.0, touches)


def _box(line: PlacedLine, kind: str) -> tuple[float, ...]:
    half = line.metal.shaded_um * UM / 2 if kind == "wire" else line.half_width
    along = line.low, line.high
    if kind == "perimeter":  # the corners belong to both sides
        along = line.low - half, line.high + half
    across = line.at - half, line.at + half
    return (*along, *across) if line.axis == 0 else (*across, *along)
