"""The best point of a sweep, and how flat the optimum is."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

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

    def __str__(self) -> str:
        name, unit = split_name(self.variable)
        value_unit = split_name(self.quantity)[1]
        low = f"{self.flat_from:.4g}" + (" (end of the range)" if self.flat_from_is_end else "")
        high = f"{self.flat_to:.4g} {unit}".rstrip() + (" (end of the range)" if self.flat_to_is_end else "")
        text = (
            f"best {name.replace('_', ' ')} {self.location:.4g} {unit}".rstrip()
            + f": {self.value:.4g} {value_unit}".rstrip()
        )
        text += f"; within {self.within_percent:g} % from {low} to {high}"
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
    at, value = _curve(table, x, y, within_percent)
    k = int(np.argmax(value))
    at_end = k in (0, at.size - 1)
    if not at_end:
        at, value, k = _with_top(at, value, k)
    location, top = float(at[k]), float(value[k])
    level = top - abs(top) * within_percent / 100
    low, low_end = _reach(-at[::-1], value[::-1], at.size - 1 - k, level)
    high, high_end = _reach(at, value, k, level)
    return Best(x, y, location, top, -low, high, within_percent, at_end, low_end, high_end)


def _curve(
    table: pd.DataFrame, x: str, y: str, within_percent: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Points with a result, x rising."""
    problems = Complaints("best_point")
    for column in (x, y):
        problems.unless(column in table, f"column {column!r}", f"one of {', '.join(map(str, table.columns))}")
    problems.unless(within_percent > 0, f"within_percent = {within_percent!r}", "a number above 0")
    problems.raise_if_any()
    rows = table[[x, y]].astype(float).dropna().sort_values(x)
    given = f"several rows of the same {x}"
    problems.unless(bool(rows[x].is_unique), given, "one row each", "select rows, e.g. table[table[...] == ...]")
    problems.unless(len(rows) > 0, f"no row with {x} and {y}", "one row or more with a result")
    problems.raise_if_any()
    return rows[x].to_numpy(), rows[y].to_numpy()


def _with_top(x: Any, y: Any, k: int) -> tuple[NDArray[np.float64], NDArray[np.float64], int]:
    """The curve with the top of the parabola through its highest point and the neighbours, and the top's index."""
    a, b = _parabola(x[k - 1 : k + 2], y[k - 1 : k + 2])
    step = -b / (2 * a) if a < 0 else 0.0  # three equal values have no top
    top = (x[k] + step, y[k] + b * step / 2)
    if abs(step) < 1e-6 * (x[-1] - x[0]):  # the point itself
        return np.where(np.arange(x.size) == k, top[0], x), np.where(np.arange(x.size) == k, top[1], y), k
    place = k + (step > 0)
    return np.insert(x, place, top[0]), np.insert(y, place, top[1]), place


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
