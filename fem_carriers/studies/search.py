"""Search for the largest value with few evaluations: points all over the region, then where the best may lie.

A surrogate (Gaussian-process regression, logarithmic inputs) is fitted after every round. New points are the top of the
surrogate, and points where it is least known among those that may lie within the loss that counts as equally good; so
the search closes in on the optimum and on the range around it, and ends when the surrogate's error is below what the
error bars of the points allow to tell.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import SolverError
from .limits import Region
from .places import CLOUD, cloud_around, sound, spread_points, top_of
from .scales import rounded
from .surrogate import Surrogate, fitted

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

Evaluate = Callable[[list[tuple[float, ...]]], "pd.DataFrame"]
"""Takes all points asked for so far, in order; returns a row for each with its variables and results."""
KEPT = 300
TWINS = 0.01
"""No new point closer than this to another, in the unit cube."""
OF_WITHIN = 0.1
"""The surrogate need not know better than this share of the loss that counts as equally good."""


@dataclass(frozen=True)
class Goal:
    """What is searched for.

    Parameters
    ----------
    quantity : str
    sign : {1, -1}
        1 for the largest value.
    within : float
        Loss that counts as equally good.
    region : Region
    most_points : int
    """

    quantity: str
    sign: int
    within: float
    region: Region
    most_points: int


@dataclass(frozen=True, eq=False)
class Found:
    """What the points say.

    Parameters
    ----------
    surrogate : Surrogate
        Of sign × quantity.
    top : (d,) array
        Its largest value's place.
    bar : float
        Error bar of the points near the top; 0 where they have none.
    miss : float
        Two standard deviations of the surrogate at the top.
    miss_around : float
        The same where the value is within the loss that counts as equally good, at worst.
    failed : (n, d) array
        Points without a result.
    """

    surrogate: Surrogate
    top: NDArray[np.float64]
    bar: float
    miss: float
    miss_around: float
    failed: NDArray[np.float64]

    def limit(self, goal: Goal) -> float:
        """Error of the surrogate that is small enough."""
        return max(self.bar, OF_WITHIN * goal.within)

    def reached(self, goal: Goal) -> bool:
        """Whether it is."""
        return self.miss <= self.limit(goal) and self.miss_around <= 2 * self.limit(goal)


def search(goal: Goal, evaluate: Evaluate) -> pd.DataFrame:
    """Evaluate points until the optimum is known, or no more points are allowed.

    Parameters
    ----------
    goal : Goal
    evaluate : callable

    Returns
    -------
    pandas.DataFrame
        All evaluations, in order.

    Raises
    ------
    SolverError
        Too few points have a result.
    """
    region = goal.region
    points = _values(region, first_points(region))[: goal.most_points]
    table = evaluate(points)
    before = np.inf
    while len(points) < goal.most_points:
        found = found_in(goal, table)
        if found.reached(goal) and before <= 2 * found.limit(goal):
            break
        wanted = _proposals(goal, found, region.scales.unit(points))
        new = _values(region, wanted[: goal.most_points - len(points)])
        if not new:
            break
        points += new
        table = evaluate(points)
        before = _largest_miss(goal, found, table, new)
    return table


def evaluator(source: Any, names: Sequence[str], options: Mapping[str, Any]) -> Evaluate:
    """Evaluations by `sweep`, with its options; with a store all points so far are named, and it knows the rest.

    Parameters
    ----------
    source : UnitCell or function
    names : sequence of str
    options : mapping

    Returns
    -------
    callable
    """
    import pandas as pd

    from .sweep import sweep

    done: list[pd.DataFrame] = []

    def evaluate(points: list[tuple[float, ...]]) -> pd.DataFrame:
        if options.get("store") is not None:
            done.clear()
        columns = map(list, zip(*points[sum(map(len, done)) :], strict=True))
        done.append(sweep(source, dict(zip(names, columns, strict=True)), paired=True, **options))
        return pd.concat(done, ignore_index=True)

    return evaluate


def first_points(region: Region) -> NDArray[np.float64]:
    """Points all over the region, each as far as possible from the others: 5 of one variable, 9 of two, 14 of three."""
    d = len(region.scales.names)
    count = 5 if d == 1 else (d + 1) * (d + 2) // 2 + d + 1
    pool = spread_points(region)
    chosen = [pool[np.argmin(np.linalg.norm(pool - 0.5, axis=1))]]
    distance = np.linalg.norm(pool - chosen[0], axis=1)
    while len(chosen) < count:
        chosen.append(pool[np.argmax(distance)])
        distance = np.minimum(distance, np.linalg.norm(pool - chosen[-1], axis=1))
    return np.array(chosen)


def found_in(goal: Goal, table: pd.DataFrame, rough: bool = False) -> Found:
    """Fit the surrogate (smooth, or for comparison a rougher one) to the points so far, and find its top.

    Raises
    ------
    SolverError
        Fewer than three points have a result.
    """
    scales, quantity = goal.region.scales, goal.quantity
    points = scales.unit(table[list(scales.names)].to_numpy(dtype=float))
    values = table[quantity].to_numpy(dtype=float) if quantity in table else np.full(len(table), np.nan)
    good = np.isfinite(values)
    if good.sum() < 3:
        reasons = "; ".join(dict.fromkeys(r for r in table.get("failure", []) if r)) or f"no column {quantity!r}"
        raise SolverError(
            "no results", f"{good.sum()} of {len(table)} points have a result, at least 3 needed: {reasons}"
        )
    bars = bars_of(table, quantity)[good]
    surrogate = fitted(points[good], goal.sign * values[good], bars, rough)
    top = top_of(goal.region, surrogate, points[~good])
    nearest = np.argsort(np.linalg.norm(points[good] - top, axis=1))[:3]
    bar = float(np.nanmax(bars[nearest])) if np.isfinite(bars[nearest]).any() else 0.0
    around = _contenders(goal, surrogate, top, points[~good], sure=True)
    miss, all_around = 2 * surrogate.deviation(top[None])[0], 2 * surrogate.deviation(around)
    return Found(surrogate, top, bar, float(miss), float(all_around.max(initial=miss)), points[~good])


def bars_of(table: pd.DataFrame, quantity: str) -> NDArray[np.float64]:
    """Error bars of a quantity; NaN where there are none."""
    column = table.get(f"error_bar_{quantity}")
    return np.full(len(table), np.nan) if column is None else column.to_numpy(dtype=float)


def _contenders(
    goal: Goal, surrogate: Surrogate, top: NDArray[np.float64], failed: NDArray[np.float64], sure: bool
) -> NDArray[np.float64]:
    """Points that lie within the loss that counts as equally good: surely, or perhaps."""
    pool = np.concatenate([spread_points(goal.region), _around(goal.region, top)])
    pool = pool[sound(pool, surrogate.points, failed)]
    slack = 0.0 if sure else 2 * surrogate.deviation(pool)
    level = surrogate.mean(top[None])[0] - goal.within
    return np.asarray(pool[surrogate.mean(pool) + slack >= level])


def _around(region: Region, top: NDArray[np.float64]) -> NDArray[np.float64]:
    generator = np.random.default_rng(1)
    return np.concatenate([cloud_around(region, top, size, CLOUD, generator) for size in (0.15, 0.05, 0.015)])


def _proposals(goal: Goal, found: Found, known: NDArray[np.float64]) -> NDArray[np.float64]:
    """The top, and the least known of the points that may be as good, one after another; two per variable."""
    pool = _contenders(goal, found.surrogate, found.top, found.failed, sure=False)
    pool = np.concatenate([found.top[None], pool])
    pool = pool[: 1 + KEPT] if len(pool) <= KEPT else pool[np.r_[0, np.linspace(1, len(pool) - 1, KEPT).astype(int)]]
    covariance = found.surrogate.covariance(pool)
    picked: list[int] = []
    for turn in range(2 * known.shape[1]):
        free = np.min(np.linalg.norm(pool[:, None] - known[None], axis=2), axis=1) > TWINS
        score = np.where(free, np.diag(covariance), -1.0)
        chosen = 0 if turn == 0 and free[0] else int(np.argmax(score))
        if not free[chosen]:
            break
        picked.append(chosen)
        known = np.concatenate([known, pool[chosen][None]])
        column = covariance[:, chosen] / np.sqrt(max(covariance[chosen, chosen], 1e-300))
        covariance = covariance - np.outer(column, column)
    return np.asarray(pool[picked])


def _values(region: Region, points: NDArray[np.float64]) -> list[tuple[float, ...]]:
    """Points as values with few digits, where that breaks no limit."""
    exact = region.scales.values(points)
    short = np.array([[rounded(v) for v in row] for row in exact.tolist()]).reshape(exact.shape)
    short = np.clip(short, region.scales.lowest, region.scales.highest)
    kept = np.where(region.allowed(region.scales.unit(short))[:, None], short, exact) if len(points) else exact
    return [tuple(row) for row in kept.tolist()]


def _largest_miss(goal: Goal, found: Found, table: pd.DataFrame, new: list[Any]) -> float:
    """How far the surrogate was from the new points that turned out to count, at worst."""
    values = goal.sign * table[goal.quantity].to_numpy(dtype=float)[-len(new) :]
    expected = found.surrogate.mean(goal.region.scales.unit(new))
    counts = np.isfinite(values) & (values >= found.surrogate.mean(found.top[None])[0] - 2 * goal.within)
    return float(np.max(np.abs(values - expected)[counts], initial=0.0))
