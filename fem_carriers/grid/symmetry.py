"""The smallest piece of a layout that mirror planes make into the whole cell."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .joints import wiring
from .placing import SAME_CM, Window

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .joints import Wiring
    from .layout import Grid, GridLayout
    from .local_laws import LocalLaws

Key = tuple[str, str, int, float, float, float]


def whole_cell(layout: GridLayout) -> Window:
    """The whole cell."""
    width, height = layout.outline.size_cm
    return Window((0.0, width), (0.0, height))


def repeat_unit(layout: GridLayout, laws: LocalLaws) -> Window:
    """The smallest piece between mirror planes: half in x, and half or one repeat of the busbars in y.

    Parameters
    ----------
    layout : GridLayout
    laws : LocalLaws
        Laws that vary over the cell have no symmetry.
    """
    full = whole_cell(layout)
    if not laws.uniform:
        return full
    wirings = [wiring(layout.outline, name, grid, full) for name, grid in layout.grids.items()]
    x, y, repeats = full.x, full.y, 1
    mirrors: set[tuple[int, float]] = set()
    if _mirrored(layout, wirings, 0) and _edges_alike(laws, "left", "right"):
        x, repeats = (0.0, full.x[1] / 2), 2 * repeats
        mirrors.add((0, full.x[1] / 2))
    n = _rows_alike(layout, laws)
    if n > 0:
        y, repeats = (full.y[1] / (2 * n), full.y[1] / n), 2 * n * repeats
        mirrors |= {(1, y[0]), (1, y[1])}
    elif _mirrored(layout, wirings, 1) and _edges_alike(laws, "bottom", "top"):
        y, repeats = (0.0, full.y[1] / 2), 2 * repeats
        mirrors.add((1, full.y[1] / 2))
    return Window(x, y, frozenset(mirrors), repeats)


def images(window: Window, layout: GridLayout) -> list[tuple[float, float, float, float]]:
    """All places of the piece in the whole cell: (a, b, c, d) with x′ = a + b x and y′ = c + d y.

    Parameters
    ----------
    window : Window
    layout : GridLayout
    """
    return [(*across, *along) for across in _tiles(window, layout, 0) for along in _tiles(window, layout, 1)]


def _tiles(window: Window, layout: GridLayout, axis: int) -> list[tuple[float, float]]:
    low, high = window.spans[axis]
    step = high - low
    count, own = round(layout.outline.size_cm[axis] / step), round(low / step)
    return [((k - own) * step, 1.0) if (k - own) % 2 == 0 else (k * step + high, -1.0) for k in range(count)]


def _edges_alike(laws: LocalLaws, one: str, other: str) -> bool:
    edge = laws.edge
    return edge is None or (not callable(edge.sides) and (one in edge.sides) == (other in edge.sides))


def _mirrored(layout: GridLayout, wirings: list[Wiring], axis: int) -> bool:
    """Whether the layout is its own mirror image across the middle of an axis."""
    size = layout.outline.size_cm[axis]
    corners = layout.outline.corners.copy()
    corners[:, axis] = size - corners[:, axis]
    if not np.allclose(_ordered(corners), _ordered(layout.outline.corners), atol=SAME_CM):
        return False
    return all(_ends_alike(w.grid, axis) and _same(_places(w, axis, None), _places(w, axis, size)) for w in wirings)


def _ordered(points: NDArray[np.float64]) -> NDArray[np.float64]:
    keys = np.round(points / (10 * SAME_CM))
    return np.asarray(points[np.lexsort(keys.T)])


def _ends_alike(grid: Grid, axis: int) -> bool:
    return axis == 1 or grid.wires is None or grid.wires.ends == "both"


def _places(wiring: Wiring, axis: int, size: float | None) -> list[Key]:
    """Lines, pads and joints as comparable rows; mirrored across the middle of `size` if that is given."""

    def flip(v: float) -> float:
        return v if size is None else size - v

    rows: list[Key] = []
    for line in wiring.lines:
        at = flip(line.at) if line.axis != axis else line.at
        ends = sorted((flip(line.low), flip(line.high))) if line.axis == axis else [line.low, line.high]
        rows.append((line.kind, "line", line.axis, at, ends[0], ends[1]))
        marks = [("pad", p) for p in wiring.pads.get(line.name, [])]
        marks += [("joint", p) for p in wiring.contacts.get(line.name, [])]
        rows += [(line.kind, m, line.axis, at, flip(p) if line.axis == axis else p, 0.0) for m, p in marks]
    return rows


def _same(one: list[Key], other: list[Key]) -> bool:
    return len(one) == len(other) and _tidy(one) == _tidy(other)


def _tidy(rows: list[Key]) -> list[tuple[str | int, ...]]:
    """Sorted, with lengths rounded."""
    return sorted((*row[:3], *(round(v / (100 * SAME_CM)) for v in row[3:])) for row in rows)


def _rows_alike(layout: GridLayout, laws: LocalLaws) -> int:
    """Number of busbars or wires if every repeat of them in y is the same; else 0."""
    counts = set()
    if not layout.outline.is_rectangle or laws.edge is not None:
        return 0
    for grid in layout.grids.values():
        plain = grid.fingers is not None and grid.fingers.margins_um == (0.0, 0.0)
        points = grid.collection is not None and grid.collection.points_mm is not None
        if not plain or points or grid.perimeter is not None or grid.breaks is not None:
            return 0
        for rows in (grid.busbars, grid.wires):
            if rows is not None:
                counts.add(rows.number or 0)
    return counts.pop() if len(counts) == 1 else 0
