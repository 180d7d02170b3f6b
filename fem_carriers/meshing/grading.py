"""One-dimensional grids that are fine beside given positions and grow geometrically away from them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..errors import Complaints

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

SAME = 1e-12
"""Positions closer than this share of the whole length are one position."""
WHOLE = 1e-9
"""A number of steps this close above an integer counts as the integer: round-off splits no fitting series."""


def graded_axis(
    low: float,
    high: float,
    fine_points: Sequence[tuple[float, float]],
    growth: float,
    largest: float,
    fixed: Sequence[float] = (),
    largest_share: float = 1.0,
) -> NDArray[np.float64]:
    """Grid on [low, high] with geometric series of steps beside the fine points.

    A step that starts at distance d from a fine point with first step s is at most s + (growth − 1) d, which makes the
    steps s, s·growth, s·growth², …; no step exceeds `largest`. Where series of two fine points meet, the smaller step
    holds. Between neighbouring prescribed positions the steps are placed at equal values of the integral
    ∫ (growth − 1) / (ln growth · (s + (growth − 1) d)) dx, which counts the steps of the series, so that they all
    shrink together until they fit.

    Parameters
    ----------
    low, high : float
        Ends; any length unit, the same for all lengths here.
    fine_points : sequence of (position, first step)
        Positions in [low, high]; both sides are graded. Of equal positions the smallest first step counts.
    growth : float
        Ratio of neighbouring steps, above 1.
    largest : float
        Largest step.
    fixed : sequence of float
        Further positions in [low, high] that must be nodes, without grading.
    largest_share : float
        Largest step as a share of the distance between the prescribed positions on its two sides.

    Returns
    -------
    (n,) float array
        Strictly increasing; starts at `low`, ends at `high`. A mirrored input gives the mirrored grid up to round-off.

    Raises
    ------
    InputError
        For positions outside [low, high], steps that are not positive, or growth not above 1.

    Notes
    -----
    A prescribed position next to another one, closer than the local step, forces one short step. Every other step is
    longer than half of what the rule allows.
    """
    _check(low, high, fine_points, growth, largest, fixed)
    nodes = _prescribed(low, high, [p for p, _ in fine_points], fixed)
    steps = _step_at(nodes, fine_points, growth, largest)
    parts = [
        _Interval.between(a, b, h_a, h_b, growth, min(largest, largest_share * (b - a))).nodes()
        for a, b, h_a, h_b in zip(nodes[:-1], nodes[1:], steps[:-1], steps[1:], strict=True)
    ]
    return np.concatenate([*(part[:-1] for part in parts), nodes[-1:]])


def _check(
    low: float,
    high: float,
    fine_points: Sequence[tuple[float, float]],
    growth: float,
    largest: float,
    fixed: Sequence[float],
) -> None:
    wrong = Complaints("graded axis")
    wrong.unless(math.isfinite(low) and math.isfinite(high) and low < high, f"[{low}, {high}]", "low below high")
    wrong.unless(1 < growth < math.inf, f"growth = {growth}", "a number above 1", "1.5 to 2.5")
    wrong.unless(largest > 0, f"largest = {largest}", "a positive step")
    for position, step in fine_points:
        wrong.unless(0 < step < math.inf, f"first step {step} at {position}", "a positive step")
    for position in [*(p for p, _ in fine_points), *fixed]:
        wrong.unless(low <= position <= high, f"position {position}", f"a position in [{low}, {high}]")
    wrong.raise_if_any()


def _prescribed(low: float, high: float, fine: list[float], fixed: Sequence[float]) -> NDArray[np.float64]:
    """Sorted positions that must be nodes; of positions equal within round-off the ends win, then the fine ones."""
    kept: list[float] = []
    for position in [low, high, *sorted(fine), *sorted(fixed)]:
        if all(abs(position - other) > SAME * (high - low) for other in kept):
            kept.append(position)
    return np.array(sorted(kept), dtype=float)


def _step_at(
    x: NDArray[np.float64], fine_points: Sequence[tuple[float, float]], growth: float, largest: float
) -> NDArray[np.float64]:
    """Largest step allowed to start at each x: min over fine points of first step + (growth − 1) distance, capped."""
    allowed = [step + (growth - 1) * np.abs(x - position) for position, step in fine_points]
    return np.asarray(np.min([*allowed, np.full_like(x, _cap(growth, largest))], axis=0))


def _cap(growth: float, largest: float) -> float:
    """End of the ramp: the mean (logarithmic, as in a geometric series) over one step is `largest` there."""
    return largest * (growth - 1) / math.log(growth)


@dataclass(frozen=True)
class _Interval:
    """[a, b] with allowed steps h_a and h_b at its ends; between them min(h_a + k (x − a), h_b + k (b − x), cap)."""

    a: float
    b: float
    h_a: float
    h_b: float
    growth: float
    largest: float

    @classmethod
    def between(cls, a: float, b: float, h_a: float, h_b: float, growth: float, largest: float) -> _Interval:
        """With the steps at the ends not above the largest one."""
        cap = _cap(growth, largest)
        return cls(a, b, min(h_a, cap), min(h_b, cap), growth, largest)

    @property
    def slope(self) -> float:
        """Rise of the allowed step with the distance from an end."""
        return self.growth - 1

    @property
    def top(self) -> float:
        """Value where the ramps end: they meet, or the (logarithmic) mean over one step reaches `largest`."""
        return min(_cap(self.growth, self.largest), (self.h_a + self.h_b + self.slope * (self.b - self.a)) / 2)

    def nodes(self) -> NDArray[np.float64]:
        """Nodes including both ends, at equal shares of the number of steps."""
        log_growth, top = math.log(self.growth), self.top
        ramp_a, ramp_b = (max(0.0, math.log(top / h)) / log_growth for h in (self.h_a, self.h_b))
        flat = max(0.0, self.b - self.a - (2 * top - self.h_a - self.h_b) / self.slope)
        flat_step = top * log_growth / self.slope
        total = ramp_a + ramp_b + flat / flat_step
        n = max(1, math.ceil(total - WHOLE))
        share = np.arange(n + 1) / n * total
        from_a = self.a + self._advance(share, self.h_a, ramp_a, flat_step)
        from_b = self.b - self._advance(share[::-1], self.h_b, ramp_b, flat_step)
        # each half counts from its own end: accurate beside tiny first steps, and mirror symmetric
        x = np.where(share <= ramp_a + flat / flat_step / 2, from_a, from_b)
        x[0], x[-1] = self.a, self.b
        return x

    def _advance(self, count: NDArray[np.float64], first: float, ramp: float, flat_step: float) -> NDArray[np.float64]:
        """Distance covered by `count` steps of the series, then of equal steps."""
        series = first * np.expm1(np.minimum(count, ramp) * math.log(self.growth)) / self.slope
        return np.asarray(series + np.maximum(0.0, count - ramp) * flat_step)
