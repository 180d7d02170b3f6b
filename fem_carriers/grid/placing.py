"""Where every metal line of a layout lies, in cm; what lies wrong is refused with its place."""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

from ..units import MM, UM

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..errors import Complaints
    from .layout import Grid, GridLayout
    from .metal import MetalLine
    from .outline import CellOutline

SAME_CM = 1e-8
"""Places closer than this are one place (0.1 nm)."""
ACROSS = {0: "y", 1: "x"}


@dataclass(frozen=True, eq=False)
class PlacedLine:
    """One straight piece of metal.

    Parameters
    ----------
    grid, kind, name : str
        Kind is "finger", "busbar", "wire" or "perimeter".
    axis : {0, 1}
        The axis it runs along.
    at, low, high : float
        Centre line and extent, cm.
    metal : MetalLine
    share : float
        1, or ½ on a mirror plane.
    """

    grid: str
    kind: str
    name: str
    axis: int
    at: float
    low: float
    high: float
    metal: MetalLine
    share: float = 1.0

    @property
    def half_width(self) -> float:
        """Half of the width in cm."""
        return self.metal.width_um * UM / 2

    @property
    def box(self) -> tuple[float, float, float, float]:
        """x_min, x_max, y_min, y_max in cm."""
        across, along = (self.at - self.half_width, self.at + self.half_width), (self.low, self.high)
        return (*along, *across) if self.axis == 0 else (*across, *along)

    @property
    def band(self) -> float:
        """Half-width over which crossing lines are one with it; a wire touches at a point."""
        return 0.0 if self.kind in ("wire", "finger") else self.half_width


@dataclass(frozen=True)
class Window:
    """The part of the cell that is modelled, between mirror planes, and how often it repeats.

    Parameters
    ----------
    x, y : (float, float)
        Extent in cm.
    mirrors : frozenset of (axis, position)
        Sides that are mirror planes.
    repeats : int
    """

    x: tuple[float, float]
    y: tuple[float, float]
    mirrors: frozenset[tuple[int, float]] = frozenset()
    repeats: int = 1

    @property
    def spans(self) -> tuple[tuple[float, float], tuple[float, float]]:
        """Extents in x and y."""
        return self.x, self.y

    def share(self, axis: int, at: float) -> float:
        """½ for a line on a mirror plane perpendicular to `axis`, else 1."""
        return 0.5 if any(a == axis and abs(p - at) < SAME_CM for a, p in self.mirrors) else 1.0


def placed_lines(outline: CellOutline, name: str, grid: Grid) -> list[PlacedLine]:
    """All lines of a grid on the whole cell.

    Parameters
    ----------
    outline : CellOutline
    name : str
        Of the grid.
    grid : Grid
    """
    lines = _perimeter(outline, name, grid)
    inner = _inner_box(lines)
    lines += _rows(outline, name, grid, "busbar", grid.busbars, inner)
    lines += _rows(outline, name, grid, "wire", grid.wires, None)
    return lines + _fingers(outline, name, grid, inner)


def _perimeter(outline: CellOutline, name: str, grid: Grid) -> list[PlacedLine]:
    if grid.perimeter is None:
        return []
    inset = grid.perimeter.inset_um * UM + grid.perimeter.metal.width_um * UM / 2
    width, height = outline.size_cm
    sides = (("bottom", 0, inset), ("top", 0, height - inset), ("left", 1, inset), ("right", 1, width - inset))
    return [
        PlacedLine(name, "perimeter", f"perimeter {side}", axis, at, inset, (width, height)[axis] - inset,
                   grid.perimeter.metal)
        for side, axis, at in sides
    ]  # fmt: skip


def _inner_box(frame: list[PlacedLine]) -> tuple[float, float, float, float] | None:
    """Centre lines of a perimeter busbar: x_min, x_max, y_min, y_max."""
    if not frame:
        return None
    bottom, top, left, right = (line.at for line in frame)
    return left, right, bottom, top


def _rows(
    outline: CellOutline, name: str, grid: Grid, kind: str, rows: Any, inner: tuple[float, float, float, float] | None
) -> list[PlacedLine]:
    """Busbars or wires along x."""
    if rows is None:
        return []
    centres, half = rows.centres_cm(outline.size_cm[1]), rows.metal.width_um * UM / 2
    low, high = _clear(outline, 1, centres, half, (rows.margin_um * UM,) * 2)
    if inner is not None:
        low, high = np.full_like(low, inner[0]), np.full_like(high, inner[1])
    return [
        PlacedLine(name, kind, f"{kind} {i}", 0, float(y), float(a), float(b), rows.metal)
        for i, (y, a, b) in enumerate(zip(centres, low, high, strict=True))
    ]


def _fingers(
    outline: CellOutline, name: str, grid: Grid, inner: tuple[float, float, float, float] | None
) -> list[PlacedLine]:
    fingers = grid.fingers
    if fingers is None:
        return []
    width = outline.size_cm[0]
    if inner is None:
        centres = fingers.centres_cm(width)
    else:
        assert grid.perimeter is not None
        edge = inner[0] + grid.perimeter.metal.width_um * UM / 2
        given = fingers.positions_mm is not None
        centres = fingers.centres_cm(width) if given else edge + fingers.centres_cm(width - 2 * edge)
    half = fingers.metal.width_um * UM / 2
    margins = tuple(m * UM for m in fingers.margins_um)
    low, high = _clear(outline, 0, centres, half, margins)
    if inner is not None and grid.perimeter is not None:
        frame = grid.perimeter.metal.width_um * UM / 2
        low, high = np.maximum(low, inner[2] + frame), np.minimum(high, inner[3] - frame)
    lines = [
        PlacedLine(name, "finger", f"finger {i}", 1, float(x), float(a), float(b), fingers.metal)
        for i, (x, a, b) in enumerate(zip(centres, low, high, strict=True))
    ]
    return lines if grid.breaks is None else _broken(lines, grid)


def _clear(
    outline: CellOutline, axis: int, at: NDArray[np.float64], half: float, margins: tuple[float, ...]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Extent of lines within the outline, over their whole width; low > high for a line outside."""
    one, two = outline.chord(axis, at - half), outline.chord(axis, at + half)
    return np.maximum(one[0], two[0]) + margins[0], np.minimum(one[1], two[1]) - margins[1]


def break_places(lines: list[PlacedLine], grid: Grid) -> list[tuple[int, float]]:
    """Finger number and y in cm of every break, the random ones included."""
    assert grid.breaks is not None
    places = [(int(i), float(y) * MM) for i, y in grid.breaks.places]
    numbers = np.random.default_rng(grid.breaks.seed)
    for _ in range(grid.breaks.random):
        i = int(numbers.integers(len(lines)))
        places.append((i, float(numbers.uniform(lines[i].low, lines[i].high))))
    return places


def _broken(lines: list[PlacedLine], grid: Grid) -> list[PlacedLine]:
    """Fingers with the gaps taken out."""
    assert grid.breaks is not None
    gap = grid.breaks.gap_um * UM / 2
    cuts: dict[int, list[float]] = {}
    for i, y in break_places(lines, grid):
        cuts.setdefault(i, []).append(y)
    pieces = []
    for i, line in enumerate(lines):
        stops = sorted(cuts.get(i, []))
        edges = [line.low, *(e for y in stops for e in (y - gap, y + gap)), line.high]
        pieces += [replace(line, low=a, high=b) for a, b in zip(edges[::2], edges[1::2], strict=True) if b > a]
    return pieces


def in_window(lines: list[PlacedLine], window: Window) -> list[PlacedLine]:
    """Lines clipped to a window; those on a mirror plane count half."""
    kept = []
    for line in lines:
        along, across = window.spans[line.axis], window.spans[1 - line.axis]
        low, high = max(line.low, along[0]), min(line.high, along[1])
        if high - low > SAME_CM and across[0] - SAME_CM <= line.at <= across[1] + SAME_CM:
            kept.append(replace(line, low=low, high=high, share=window.share(1 - line.axis, line.at)))
    return kept


def check_places(problems: Complaints, layout: GridLayout) -> None:
    """Complain of lines outside the outline, lines that overlap, and lines of two terminals that touch."""
    placed = {}
    for name, grid in layout.grids.items():
        if grid.perimeter is not None and not layout.outline.is_rectangle:
            problems.add(f"{name}: a perimeter busbar on a pseudo-square", "a perimeter busbar on a rectangle")
            continue
        lines = placed[name] = placed_lines(layout.outline, name, grid)
        outside = [line for line in lines if not _inside(line, layout.outline)]
        for line in outside[:3]:
            given = f"{name}: {line.name} at {ACROSS[line.axis]} = {line.at / MM:.4g} mm lies outside the outline"
            size = " × ".join(f"{s / MM:.4g}" for s in layout.outline.size_cm)
            problems.add(given, f"lines inside the outline of {size} mm, margins included")
        _check_gaps(problems, name, [line for line in lines if line not in outside])
        _check_breaks(problems, name, grid, lines)
    if layout.interdigitated and not problems.items:
        _check_nets(problems, *placed.values())


def _inside(line: PlacedLine, outline: CellOutline) -> bool:
    size = outline.size_cm[1 - line.axis]
    within = line.at - line.half_width >= -SAME_CM and line.at + line.half_width <= size + SAME_CM
    return bool(np.isfinite([line.low, line.high]).all()) and within and line.high - line.low > SAME_CM


def _check_gaps(problems: Complaints, name: str, lines: list[PlacedLine]) -> None:
    """Neighbours of one kind that overlap."""
    for kind in ("finger", "busbar", "wire"):
        same = sorted((line for line in lines if line.kind == kind), key=lambda line: line.at)
        for a, b in pairwise(same):
            if a.name != b.name and b.at - b.half_width < a.at + a.half_width - SAME_CM:
                given = f"{name}: {a.name} and {b.name} overlap at {ACROSS[a.axis]} = {a.at / MM:.4g} mm"
                problems.add(given, "centre lines further apart than the width")
                break


def _check_breaks(problems: Complaints, name: str, grid: Grid, lines: list[PlacedLine]) -> None:
    if grid.breaks is None:
        return
    numbers = {line.name for line in lines if line.kind == "finger"}
    for i, y in grid.breaks.places:
        given = f"{name}: a break in finger {i} at y = {y:g} mm"
        problems.unless(
            float(i).is_integer() and f"finger {int(i)}" in numbers, given, f"one of the {len(numbers)} lines"
        )
        low_high = [(line.low, line.high) for line in lines if line.name == f"finger {int(i)}"]
        if low_high and not min(low_high)[0] <= y * MM <= max(h for _, h in low_high):
            problems.add(given, f"y from {min(low_high)[0] / MM:.4g} to {max(h for _, h in low_high) / MM:.4g} mm")


def _check_nets(problems: Complaints, one: list[PlacedLine], two: list[PlacedLine]) -> None:
    """Metal of two terminals on one face must not touch."""
    a, b = (np.array([line.box for line in lines]).T[:, :, None] for lines in (one, two))
    b = b.transpose(0, 2, 1)
    touch = (a[0] <= b[1]) & (b[0] <= a[1]) & (a[2] <= b[3]) & (b[2] <= a[3])
    if touch.any():
        i, j = (int(k) for k in np.argwhere(touch)[0])
        x, y = max(one[i].box[0], two[j].box[0]) / MM, max(one[i].box[2], two[j].box[2]) / MM
        given = f"{one[i].grid} {one[i].name} touches {two[j].grid} {two[j].name} at ({x:.4g}, {y:.4g}) mm"
        problems.add(given, "a gap between metal of different terminals", "wider margins or narrower lines")
