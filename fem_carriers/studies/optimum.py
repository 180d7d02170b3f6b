"""The best design over several inputs, from few evaluations."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.curve import current_voltage
from ..analysis.uncertainty import with_bar
from ..errors import Complaints
from ..units import split_name
from .limits import Constraint, Region, check_limits
from .optimum_bars import as_good, possible_tops
from .places import spread_points
from .scales import Scales, scales_of
from .search import Found, Goal, bars_of, evaluator, found_in, search

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from ..cell.unit_cell import UnitCell

MOST_POINTS = {1: 15, 2: 25}
"""Evaluations by number of variables; beyond, 15 for each variable."""


@dataclass(frozen=True, eq=False, repr=False)
class Optimum:
    """The best design.

    Parameters
    ----------
    quantity : str
    maximized : bool
        Else minimized.
    location, location_bar : mapping of str to float
        By variable; the bar is the half width of where the best may lie, given the error bars of the points and the
        surrogate's error.
    value, value_bar : float
    within : float
        Loss that counts as equally good, in the unit of the quantity.
    ranges : mapping of str to (float, float)
        From where to where each variable loses no more than that, the others at their best.
    binding : tuple of str
        Constraints and ends of ranges at which the best lies.
    surrogate_bar, discretisation_bar : float
        The two parts of `value_bar`; the second is NaN where the points have no error bars.
    reached : bool
        Whether the surrogate's error is below what the error bars of the points allow to tell.
    table : pandas.DataFrame
        All evaluations.
    goal, found
        What was searched, and the surrogate.
    """

    quantity: str
    maximized: bool
    location: Mapping[str, float]
    location_bar: Mapping[str, float]
    value: float
    value_bar: float
    within: float
    ranges: Mapping[str, tuple[float, float]]
    binding: tuple[str, ...]
    surrogate_bar: float
    discretisation_bar: float
    reached: bool
    table: pd.DataFrame
    goal: Goal = field()
    found: Found = field()

    def predicted(self, points: Mapping[str, Any]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Values of the surrogate and their half widths (two standard deviations), for arrays of equal length."""
        scales = self.goal.region.scales
        at = scales.unit(np.array([np.asarray(points[n], dtype=float) for n in scales.names]).T)
        return self.goal.sign * self.found.surrogate.mean(at), 2 * self.found.surrogate.deviation(at)

    def _ends(self, path: str) -> tuple[float, float]:
        scales = self.goal.region.scales
        k = scales.names.index(path)
        return scales.lowest[k], scales.highest[k]

    @property
    def outcome(self) -> str:
        """How the search ended, in words."""
        failed = int(self.table[self.quantity].isna().sum())
        text = f"{len(self.table)} evaluations" + (f", {failed} without a result" if failed else "")
        unit = split_name(self.quantity)[1]
        text += "" if math.isfinite(self.discretisation_bar) else ", without error bars"
        found = f"the surrogate's error there is {self.surrogate_bar:.2g} {unit}".rstrip()
        if self.reached:
            return f"{text}; {found}"
        wanted = self.found.limit(self.goal)
        return f"{text}; {found}, above the {wanted:.2g} aimed at: allow more points, or narrow the ranges"

    def __str__(self) -> str:
        name, unit = split_name(self.quantity)
        best = f"{with_bar(self.value, self.value_bar, 4)} {unit}".rstrip()
        lines = [f"{'largest' if self.maximized else 'smallest'} {name.replace('_', ' ')} {best}"]
        for path, at in self.location.items():
            plain, unit = split_name(path)
            ends = [_end(v, e) for v, e in zip(self.ranges[path], self._ends(path), strict=True)]
            place = f"{place_text(at, self.location_bar[path])} {unit}".rstrip()
            lines.append(f"  {plain.replace('_', ' ')}: {place}; as good from {ends[0]} to {ends[1]} {unit}".rstrip())
        loss = split_name(self.quantity)[1]
        lines.append(f"  as good: loses at most {self.within:g} {loss} (absolute), the others at their best".rstrip())
        lines += [f"  bound by {what}" for what in self.binding]
        return "\n".join([*lines, f"  {self.outcome}"])

    def __repr__(self) -> str:
        return f"Optimum\n{self}"


def place_text(at: float, bar: float) -> str:
    """A place with its bar; without one where it lies at the end of a range."""
    return with_bar(at, bar, 4) if bar > 1e-6 * abs(at) else f"{at:.4g}"


def _end(value: float, end: float) -> str:
    return f"{value:.4g} (end of the range)" if value == end else f"{value:.4g}"


def optimum(
    source: UnitCell | Callable[..., UnitCell] | pd.DataFrame,
    variables: Mapping[str, Sequence[float]] | Sequence[str],
    *,
    maximize: str | None = None,
    minimize: str | None = None,
    constraints: Constraint | Sequence[Constraint] = (),
    within: float = 0.05,
    compute: Callable[..., Any] = current_voltage,
    most_points: int | None = None,
    processes: int | None = None,
    first_step_um: float | None = None,
    growth: float | None = None,
    target_error_percent: float | None = None,
    progress: bool = True,
    store: str | Path | None = None,
    scheduler: str | None = None,
) -> Optimum:
    """Find the best values of one or more inputs with few evaluations.

    Points all over the ranges are computed, a smooth surrogate is fitted (Gaussian-process regression in the logarithms
    of positive inputs), and further points are placed at its top and where it is least known among designs that may be
    as good. The search ends when the surrogate's error is below the error bars of the points, or below a tenth of
    `within`: it does not chase what cannot be told apart.

    Parameters
    ----------
    source : UnitCell, function that returns one, or table
        As for `sweep`; of a table (of a sweep, say) the points that are there are used, and none is computed.
    variables : mapping of str to (lowest, highest)
        By path or argument; for a table names of columns are enough.
    maximize, minimize : str, optional
        Quantity; default is to maximize ``efficiency_percent``.
    constraints : Limit or function, or a sequence of them
        A function takes a mapping of the variables and returns what is left: not negative where allowed.
    within : float
        Loss that counts as equally good, in the unit of the quantity (absolute).
    compute : callable
        As for `sweep`; default is `current_voltage`.
    most_points : int, optional
        Most evaluations; default is 15 for one variable, 25 for two, then 15 for each.
    processes, first_step_um, growth, target_error_percent, progress, store, scheduler
        As for `sweep`. With a store an interrupted search goes on where it ended.

    Returns
    -------
    Optimum

    Raises
    ------
    InputError
        Unknown variables or ranges that do not rise, constraints that cannot be evaluated.
    SolverError
        Too few points have a result, or the constraints leave no room.
    StoreError, SweepInterrupted
        As for `sweep`.
    """
    import pandas as pd

    if isinstance(source, pd.DataFrame):
        scales = _scales_in(source, variables)
        goal = goal_of(scales, maximize, minimize, constraints, within, max(len(source), 3))
        _check_column(source, goal.quantity)
        return optimum_of(goal, source.dropna(subset=list(scales.names)).reset_index(drop=True))
    scales = scales_of("optimum", variables)
    goal = goal_of(scales, maximize, minimize, constraints, within, most_points)
    options: dict[str, Any] = {
        "compute": compute, "processes": processes, "first_step_um": first_step_um, "growth": growth,
        "target_error_percent": target_error_percent, "progress": progress, "store": store, "scheduler": scheduler,
    }  # fmt: skip
    return optimum_of(goal, search(goal, evaluator(source, scales.names, options)))


def goal_of(
    scales: Scales, maximize: str | None, minimize: str | None, constraints: Any, within: float, most_points: int | None
) -> Goal:
    """What is searched for, checked.

    Raises
    ------
    InputError
    """
    problems = Complaints("optimum")
    if minimize is None:
        maximize = "efficiency_percent" if maximize is None else maximize
    if problems.unless(maximize is None or minimize is None, "maximize and minimize", "one of them"):
        quantity = maximize if minimize is None else minimize
        problems.unless(isinstance(quantity, str), f"quantity {quantity!r}", "the name of a result")
    good = isinstance(within, int | float) and not isinstance(within, bool) and 0 < within < math.inf
    problems.unless(good, f"within = {within!r}", "a number above 0")
    d = len(scales.names)
    most = MOST_POINTS.get(d, 15 * d) if most_points is None else most_points
    whole = isinstance(most, int) and not isinstance(most, bool) and most >= 3
    problems.unless(whole, f"most_points = {most!r}", "a whole number from 3")
    problems.raise_if_any()
    limits = check_limits("optimum", constraints, scales)
    sign = -1 if maximize is None else 1
    return Goal(str(minimize if maximize is None else maximize), sign, float(within), Region(scales, limits), most)


def optimum_of(goal: Goal, table: pd.DataFrame) -> Optimum:
    """What the points of a table say.

    Parameters
    ----------
    goal : Goal
    table : pandas.DataFrame
        With the variables, the quantity and, where known, its error bars.

    Returns
    -------
    Optimum
    """
    found = found_in(goal, table)
    scales, surrogate = goal.region.scales, found.surrogate
    location = scales.values(found.top[None])[0]
    places, heights = possible_tops(goal, found)
    height = surrogate.mean(found.top[None])[0]
    rival = found_in(goal, table, rough=True)  # what another kind of surrogate makes of the same points
    off = np.abs(scales.values(rival.top[None])[0] - location)
    miss = off + np.quantile(np.abs(scales.values(places) - location), 0.95, axis=0)
    off_height = abs(rival.surrogate.mean(rival.top[None])[0] - height)
    surrogate_bar = max(found.miss, float(np.quantile(np.abs(heights - height), 0.95)), float(off_height))
    bars = bars_of(table, goal.quantity)
    bar = found.bar if np.isfinite(bars).any() else math.nan
    return Optimum(
        goal.quantity, goal.sign > 0, dict(zip(scales.names, location.tolist(), strict=True)),
        dict(zip(scales.names, miss.tolist(), strict=True)), float(goal.sign * height), surrogate_bar + found.bar,
        goal.within, as_good(goal, found), goal.region.binding(found.top, spread_points(goal.region)), surrogate_bar,
        bar, found.reached(goal), table, goal, found,
    )  # fmt: skip


def _scales_in(table: pd.DataFrame, variables: Any) -> Scales:
    """Ranges of columns: as stated, or from the lowest to the highest value that is there."""
    problems = Complaints("optimum")
    names = [variables] if isinstance(variables, str) else list(variables)
    for name in names:
        _column(problems, table, name)
    problems.raise_if_any()
    if isinstance(variables, Mapping):
        return scales_of("optimum", variables)
    return scales_of("optimum", {n: (float(table[n].min()), float(table[n].max())) for n in names})


def _check_column(table: pd.DataFrame, name: str) -> None:
    problems = Complaints("optimum")
    _column(problems, table, name)
    problems.raise_if_any()


def _column(problems: Complaints, table: pd.DataFrame, name: Any) -> None:
    problems.unless(name in table, f"column {name!r}", f"one of {', '.join(map(str, table.columns))}")
