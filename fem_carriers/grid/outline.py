"""Outline of a cell in plan: rectangles, pseudo-squares and pieces cut from them, in cm inside."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..errors import Complaints
from ..units import MM

if TYPE_CHECKING:
    from numpy.typing import NDArray

ARC_SEGMENTS = 24
"""Straight pieces of a rounded corner."""


@dataclass(frozen=True, repr=False)
class CellOutline:
    """Outline of a cell; x across the fingers, y along them, the origin at the lower left of its bounding box.

    Parameters
    ----------
    width_mm, height_mm : float
        Size in x and in y of the whole wafer.
    diameter_mm : float, optional
        Of the ingot, for a pseudo-square with rounded corners.
    corner_mm : float, optional
        Leg of the corners cut off at 45°, for a pseudo-square with straight corners.
    cut_across : {"x", "y"}
        Axis the wafer is divided along: "y" gives pieces of less height, so that fingers get shorter.
    pieces : int
        Number of equal pieces; 1 is the whole wafer.
    piece : int
        Which one, from 0 at the low end.
    """

    width_mm: float
    height_mm: float
    diameter_mm: float | None = None
    corner_mm: float | None = None
    cut_across: str = "y"
    pieces: int = 1
    piece: int = 0

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("CellOutline")
        sound = checks.positive(problems, "width_mm", self.width_mm)
        sound &= checks.positive(problems, "height_mm", self.height_mm)
        checks.one_of(problems, "cut_across", self.cut_across, ("x", "y"))
        whole = isinstance(self.pieces, int) and self.pieces >= 1
        problems.unless(whole, f"pieces = {self.pieces!r}", "a whole number of at least 1")
        inside = whole and isinstance(self.piece, int) and 0 <= self.piece < self.pieces
        problems.unless(inside or not whole, f"piece = {self.piece!r}", f"0 … {self.pieces} − 1")
        if self.diameter_mm is not None and self.corner_mm is not None:
            problems.add("diameter_mm and corner_mm", "one of them")
        if sound:
            self._check_corners(problems)
        problems.raise_if_any()

    def _check_corners(self, problems: Complaints) -> None:
        w, h = self.width_mm, self.height_mm
        if self.diameter_mm is not None and checks.positive(problems, "diameter_mm", self.diameter_mm):
            given = f"diameter_mm = {self.diameter_mm:g} with {w:g} × {h:g} mm"
            fits = max(w, h) < self.diameter_mm <= math.hypot(w, h) * (1 + 1e-12)
            problems.unless(fits, given, f"above {max(w, h):g} and at most the diagonal, {math.hypot(w, h):g}")
        if self.corner_mm is not None and checks.positive(problems, "corner_mm", self.corner_mm, zero=True):
            given = f"corner_mm = {self.corner_mm:g} with {w:g} × {h:g} mm"
            problems.unless(2 * self.corner_mm < min(w, h), given, "less than half of the shorter side")

    @cached_property
    def corners(self) -> NDArray[np.float64]:
        """Corners of the convex outline in cm, counter-clockwise, shape (n, 2)."""
        points = _whole(self.width_mm * MM, self.height_mm * MM, self.diameter_mm, self.corner_mm)
        axis = 0 if self.cut_across == "x" else 1
        step = (self.width_mm, self.height_mm)[axis] * MM / self.pieces
        points = clip_box(points, axis, self.piece * step, (self.piece + 1) * step)
        return np.asarray(points - points.min(axis=0))

    @property
    def size_cm(self) -> tuple[float, float]:
        """Width and height of the bounding box."""
        width, height = self.corners.max(axis=0)
        return float(width), float(height)

    @cached_property
    def area_cm2(self) -> float:
        """Area."""
        return polygon_area(self.corners)

    @property
    def is_rectangle(self) -> bool:
        """Whether the piece is a plain rectangle."""
        return len(self.corners) == 4

    def chord(self, axis: int, at: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Ends, in the other coordinate, of the cut through the outline where coordinate `axis` equals `at`.

        Parameters
        ----------
        axis : {0, 1}
        at : (n,) float array
            In cm.

        Returns
        -------
        (low, high) : two (n,) float arrays
            In cm; low > high outside the outline.
        """
        at = np.asarray(at, dtype=float)
        a, b = self.corners[:, axis], np.roll(self.corners[:, axis], -1)
        p, q = self.corners[:, 1 - axis], np.roll(self.corners[:, 1 - axis], -1)
        near = 1e-10 * max(self.size_cm)
        hit = (at[..., None] >= np.minimum(a, b) - near) & (at[..., None] <= np.maximum(a, b) + near)
        level = np.abs(b - a) <= near
        share = np.clip((at[..., None] - a) / np.where(level, 1.0, b - a), 0.0, 1.0)
        first, second = np.where(level, p, p + share * (q - p)), np.where(level, q, p + share * (q - p))
        low = np.where(hit, np.minimum(first, second), np.inf).min(axis=-1)
        high = np.where(hit, np.maximum(first, second), -np.inf).max(axis=-1)
        return low, high


def _whole(w: float, h: float, diameter_mm: float | None, corner_mm: float | None) -> NDArray[np.float64]:
    """Corners of the uncut wafer; each rounded corner becomes a chain of chords."""
    if corner_mm:
        c = corner_mm * MM
        return np.array([[c, 0], [w - c, 0], [w, c], [w, h - c], [w - c, h], [c, h], [0, h - c], [0, c]], dtype=float)
    if diameter_mm is None or diameter_mm * MM >= math.hypot(w, h) * (1 - 1e-12):
        return np.array([[0, 0], [w, 0], [w, h], [0, h]], dtype=float)
    r = diameter_mm * MM / 2
    start, end = math.acos(w / 2 / r), math.asin(h / 2 / r)
    angle = np.linspace(start, end, ARC_SEGMENTS + 1)
    x, y = r * np.cos(angle), r * np.sin(angle)
    x[0], y[-1] = w / 2, h / 2
    quarter = np.column_stack([x, y])
    turned = quarter[::-1] * [-1, 1]
    middle = np.array([w / 2, h / 2])
    return np.asarray(np.vstack([quarter, turned, -quarter, -turned]) + middle)


def clip(points: NDArray[np.float64], axis: int, at: float, keep_above: bool) -> NDArray[np.float64]:
    """A convex polygon (n, 2) cut by an axis-parallel line; may be empty."""
    side = (points[:, axis] - at) * (1 if keep_above else -1) if len(points) else np.zeros(0)
    kept = []
    for i in range(len(points)):
        j = (i + 1) % len(points)
        if side[i] >= 0:
            kept.append(points[i])
        if side[i] * side[j] < 0:
            cut = points[i] + side[i] / (side[i] - side[j]) * (points[j] - points[i])
            cut[axis] = at
            kept.append(cut)
    return np.array(kept).reshape(-1, 2)


def clip_box(points: NDArray[np.float64], axis: int, low: float, high: float) -> NDArray[np.float64]:
    """A convex polygon between two axis-parallel lines."""
    return clip(clip(points, axis, low, True), axis, high, False)


def polygon_area(points: NDArray[np.float64]) -> float:
    """Area of a polygon with corners (n, 2), counter-clockwise positive."""
    x, y = points.T
    return float(0.5 * (x * np.roll(y, -1) - np.roll(x, -1) * y).sum())
