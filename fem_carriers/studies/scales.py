"""Ranges of several inputs as a unit cube, logarithmic where they are positive."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..errors import Complaints

if TYPE_CHECKING:
    from numpy.typing import NDArray

DIGITS = 4
"""Of proposed values: nobody needs a pitch of 1203.7164 µm."""


@dataclass(frozen=True)
class Scales:
    """Lowest and highest value of every input.

    Parameters
    ----------
    names : tuple of str
    lowest, highest : tuple of float
    """

    names: tuple[str, ...]
    lowest: tuple[float, ...]
    highest: tuple[float, ...]

    @property
    def _log(self) -> NDArray[np.bool_]:
        return np.array(self.lowest) > 0

    def _ends(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        return self._curved(np.array(self.lowest)), self._curved(np.array(self.highest))

    def _curved(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.where(self._log, np.log(np.where(self._log & (values > 0), values, 1.0)), values)

    def unit(self, values: Any) -> NDArray[np.float64]:
        """Values (n, d) as points; lowest is 0, highest is 1."""
        low, high = self._ends()
        return np.asarray((self._curved(np.asarray(values, dtype=float)) - low) / (high - low))

    def values(self, points: NDArray[np.float64]) -> NDArray[np.float64]:
        """Points (n, d) as values."""
        low, high = self._ends()
        curved = low + points * (high - low)
        plain = np.where(self._log, np.exp(np.where(self._log, curved, 0.0)), curved)
        ends = np.where(points == 0, self.lowest, np.where(points == 1, self.highest, plain))
        return np.asarray(ends)  # the ends themselves, without round-off

    def columns(self, points: NDArray[np.float64]) -> dict[str, NDArray[np.float64]]:
        """Values by name."""
        return dict(zip(self.names, self.values(points).T, strict=True))


def rounded(value: float, digits: int = DIGITS) -> float:
    """A value with so many digits."""
    return float(f"{value:.{digits}g}")


def scales_of(what: str, ranges: Any, example: str = '{"pitch_um": (500, 3000)}') -> Scales:
    """Scales from ranges by name.

    Raises
    ------
    InputError
        No range, or one that is no pair of two rising finite numbers.
    """
    problems = Complaints(what)
    if not problems.unless(isinstance(ranges, Mapping) and bool(ranges), f"ranges {ranges!r}", f"e.g. {example}"):
        problems.raise_if_any()
    for name, ends in ranges.items():
        pair = isinstance(ends, Sequence) and not isinstance(ends, str) and len(ends) == 2
        good = pair and all(checks.is_number(v) and np.isfinite(v) for v in ends) and ends[0] < ends[1]
        problems.unless(good, f"{name} = {ends!r}", "(lowest, highest), two finite numbers", "(500, 3000)")
    problems.raise_if_any()
    lowest, highest = zip(*((float(a), float(b)) for a, b in ranges.values()), strict=True)
    return Scales(tuple(ranges), lowest, highest)
