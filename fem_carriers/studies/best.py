"""The best point of a sweep, and how flat the optimum is."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.uncertainty import with_bar
from ..errors import Complaints
from ..units import split_name

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray


@dataclass(frozen=True)
class Best:
    """The largest value along a sweep.

    Parameters
    ----------
    variable, quantity : str
        Columns of the table.
    location, value : float
        Top of the parabola through the best point and its neighbours; the best point itself at an end of the range.
    flat_from, flat_to : float
        Range around it in which the quantity stays within `within_percent` of the best.
    within_percent : float
    at_end : bool
        The best point is the first or last one: the true optimum may lie beyond.
    flat_from_is_end, flat_to_is_end : bool
        The flat range goes on to the end of what was swept, and perhaps beyond.
    location_bar, value_bar : float
        Half widths of the error bars: what the points' discretisation errors can do, and how far the parabola's top is
        from that of a polynomial through up to five points around it. NaN where the table has no error bars.
    tied : tuple of float
        Points whose value cannot be told from the best point's within the error bars, in the order of x.
    """

    variable: str
    quantity: str
    location: float
    value: float
    flat_from: float
    flat_to: float
    within_percent: float
    at_end: bool
    flat_from_is_end: bool
    flat_to_is_end: bool
    location_bar: float = math.nan
    value_bar: float = math.nan
    tied: tuple[float, ...] = ()

    def __str__(self) -> str:
        name, unit = split_name(self.variable)
        value_unit = split_name(self.quantity)[1]
        low = f"{self.flat_from:.4g}" + (" (end of the range)" if self.flat_from_is_end else "")
        high = f"{self.flat_to:.4g} {unit}".rstrip() + (" (end of the range)" if self.flat_to_is_end else "")
        text = (
            f"best {name.replace('_', ' ')} {with_bar(self.location, self.location_bar, 4)} {unit}".rstrip()
            + f": {with_bar(self.value, self.value_bar, 4)} {value_unit}".rstrip()
        )
        text += f"; within {self.within_percent:g} % from {low} to {high}"
        if len(self.tied) > 1:
            text += f"; {', '.join(f'{x:.4g}' for x in self.tied)} {unit} cannot be told apart within their error bars"
        return f"{text}; the best is at the end of the swept range and may lie beyond" if self.at_end else text


def best_point(table: pd.DataFrame, x: str, y: str, within_percent: float = 0.5) -> Best:
    """Largest `y` along `x`, by parabolas through three neighbouring points.

    Parameters
    ----------
    table : pandas.DataFrame
        Of a sweep; rows without a result are left out.
    x, y : str
        Columns.
    within_percent : float
        How much less than the best counts as equally good.

    Returns
    -------
    Best

    Raises
    ------
    InputError
        A column that is not there, several rows for one `x`, or no result.
    """
    at, value, bars = _curve(table, x, y, within_percent)
    k = int(np.argmax(value))
    tied = tuple(float(x) for x in at[value + bars >= value[k] - bars[k]])
    place_bar, value_bar = _place_bar(at, value, bars, k), float(bars[k])
    at_end = k in (0, at.size - 1)
    if not at_end:
        finer = _top_of_more(at, value, k)
        at, value, k = _with_top(at, value, k)
        place_bar, value_bar = place_bar + abs(at[k] - finer[0]), value_bar + abs(value[k] - finer[1])
    location, top = float(at[k]), float(value[k])
    level = top - abs(top) * within_percent / 100
    low, low_end = _reach(-at[::-1], value[::-1], at.size - 1 - k, level)
    high, high_end = _reach(at, value, k, level)
    return Best(x, y, location, top, -low, high, within_percent, at_end, low_end, high_end, place_bar, value_bar, tied)


def distinguishable(first: Mapping[str, float], second: Mapping[str, float], quantity: str) -> bool:
    """Whether two designs differ by more than their error bars allow.

    Parameters
    ----------
    first, second : mapping of str to float
        Rows of a table with the columns `quantity` and ``error_bar_<quantity>``.
    quantity : str

    Returns
    -------
    bool

    Raises
    ------
    InputError
        A column that is not there.
    """
    bar = f"error_bar_{quantity}"
    problems = Complaints("distinguishable")
    for row in (first, second):
        for column in (quantity, bar):
            problems.unless(column in row, f"no column {column!r}", "rows with values and error bars")
    problems.raise_if_any()
    return abs(first[quantity] - second[quantity]) > first[bar] + second[bar]


def _place_bar(x: Any, y: Any, bars: Any, k: int) -> float:
    """How far the top of the parabola moves if every value moves within its bar, to first order."""
    if k in (0, x.size - 1) or not np.isfinite(bars).all():
        return math.nan
    x, y, bars = (values[k - 1 : k + 2] for values in (x, y, bars))
    a, b = _parabola(x, y)
    moves = [_parabola(x, e) for e in np.eye(3)]  # dx = −db/(2a) + b da/(2a²)
    return float(
        sum(abs(-db / (2 * a) + b * da / (2 * a * a)) * bar for (da, db), bar in zip(moves, bars, strict=True))
    )


def _curve(
    table: pd.DataFrame, x: str, y: str, within_percent: float
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Points with a result, x rising, and their error bars (NaN where there are none)."""
    problems = Complaints("best_point")
    for column in (x, y):
        problems.unless(column in table, f"column {column!r}", f"one of {', '.join(map(str, table.columns))}")
    problems.unless(within_percent > 0, f"within_percent = {within_percent!r}", "a number above 0")
    problems.raise_if_any()
    bar = f"error_bar_{y}"
    rows = table[[x, y]].assign(bar=table.get(bar, math.nan)).astype(float)
    rows = rows.dropna(subset=[x, y]).sort_values(x)
    given = f"several rows of the same {x}"
    problems.unless(bool(rows[x].is_unique), given, "one row each", "select rows, e.g. table[table[...] == ...]")
    problems.unless(len(rows) > 0, f"no row with {x} and {y}", "one row or more with a result")
    problems.raise_if_any()
    return rows[x].to_numpy(), rows[y].to_numpy(), rows.bar.to_numpy()


def _with_top(x: Any, y: Any, k: int) -> tuple[NDArray[np.float64], NDArray[np.float64], int]:
    """The curve with the top of the parabola through its highest point and the neighbours, and the top's index."""
    a, b = _parabola(x[k - 1 : k + 2], y[k - 1 : k + 2])
    step = -b / (2 * a) if a < 0 else 0.0  # three equal values have no top
    top = (x[k] + step, y[k] + b * step / 2)
    if abs(step) < 1e-6 * (x[-1] - x[0]):  # the point itself
        return np.where(np.arange(x.size) == k, top[0], x), np.where(np.arange(x.size) == k, top[1], y), k
    place = k + (step > 0)
    return np.insert(x, place, top[0]), np.insert(y, place, top[1]), place


def _top_of_more(x: Any, y: Any, k: int) -> tuple[float, float]:
    """Top of the polynomial through up to five points around the highest one; NaN with fewer than four points."""
    if x.size < 4:
        return math.nan, math.nan
    first = min(max(k - 2, 0), max(x.size - 5, 0))
    near = slice(first, first + 5)
    width = x[k + 1] - x[k - 1]
    polynomial = np.poly1d(np.polyfit((x[near] - x[k]) / width, y[near], x[near].size - 1))
    low, high = (x[k - 1] - x[k]) / width, (x[k + 1] - x[k]) / width
    tops = [r.real for r in polynomial.deriv().roots if abs(r.imag) < 1e-9 and low < r.real < high]
    top = max(tops, key=polynomial, default=math.nan)
    return float(x[k] + top * width), float(polynomial(top))


def _parabola(x: Any, y: Any) -> tuple[float, float]:
    """(a, b) of y = y1 + b (x − x1) + a (x − x1)²."""
    left, right = (y[1] - y[0]) / (x[1] - x[0]), (y[2] - y[1]) / (x[2] - x[1])
    a = (right - left) / (x[2] - x[0])
    return a, left + a * (x[1] - x[0])


def _reach(x: Any, y: Any, best: int, level: float) -> tuple[float, bool]:
    """Where y falls below `level` to the right of the best point; the last x, and True, if it does not.

    Between points by the parabola through both and the one before; without such a point by a straight line.
    """
    j = next((j for j in range(best + 1, x.size) if y[j] < level), None)
    if j is None:
        return float(x[-1]), True
    if j >= 2:
        a, b = _parabola(x[j - 2 : j + 1], y[j - 2 : j + 1])
        roots = [x[j - 1] + root.real for root in np.roots([a, b, y[j - 1] - level]) if root.imag == 0]
        inside = [float(r) for r in roots if x[j - 1] <= r <= x[j]]
        if inside:
            return min(inside), False
    share = (y[j - 1] - level) / (y[j - 1] - y[j])
    return float(x[j - 1] + share * (x[j] - x[j - 1])), False
