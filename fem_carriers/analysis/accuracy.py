"""Error bars from a family of meshes, and refinement until they are small enough.

On meshes in which everything is refined together the error e of a number Q falls by a nearly constant factor ρ per
level, so that e_k = (Q_k − Q_{k−1}) ρ/(1 − ρ) (L. F. Richardson, Phil. Trans. R. Soc. A 226, 299 (1927)). The bar is
that with a safety factor, ρ as observed from three levels and never better than the theory's (P. J. Roache, J. Fluids
Eng. 116, 405 (1994), who takes a factor of 1.25 where three meshes agree with the theory).
"""

from __future__ import annotations

import math
import warnings
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING, Any, TypeVar

from ..cell import checks
from ..errors import Complaints, ModelWarning
from ..units import split_name
from .uncertainty import Level, Uncertainty, with_bar

if TYPE_CHECKING:
    from ..transport.problem import Problem

Result = TypeVar("Result")

BEST_RATIO, WORST_RATIO = 0.25, 0.8
"""Fall of the error per level: of the theory for the family, and the slowest that can be told from none."""
TOO_GOOD, IRREGULAR_RATIO = 0.1, 0.5
"""A fall below the first is a coincidence; the second is then assumed."""
SAFETY = 2.5
ESTIMATE_SAFETY = 3.5
"""On an error estimated on the mesh itself, by recovered fluxes, which is 0.35 to 1.5 times the error; what the values
on the last meshes say then needs no safety of its own."""
LEFT_OUT = 1e-5
"""Share of a number that such an estimate does not see: quadrature of the light where the mesh does not follow it."""
ERROR_POWER = {2: 2.0, 3: 4 / 3}
"""The error falls with this power of the number of unknowns, in two and in three dimensions: h⁴."""
PER_LEVEL, REGULAR = {2: 2.3, 3: 3.2}, (0.75, 1.4)
"""Factor of the unknowns from one level to the next; growth between these shares of it is regular."""
FEWEST_LEVELS = {2: 4, 3: 3}
"""Meshes in two and in three dimensions; on three the fall of the error is hardly known, and the bar is wider."""
EARLY = 2.5
ROUND_OFF = 3e-9
"""Smallest bar relative to the number's scale."""


@dataclass(frozen=True)
class Target:
    """What error is asked for.

    Parameters
    ----------
    percent : float
        Of every number.
    absolute : mapping of str to float
        For the numbers named, in their own unit; these numbers then need not reach `percent`.
    """

    percent: float = math.inf
    absolute: Mapping[str, float] | None = None

    def met(self, name: str, bar: float, scale: float) -> bool:
        """Whether a bar is small enough."""
        return bar <= self.limit(name, scale)

    def limit(self, name: str, scale: float) -> float:
        """The largest bar that is small enough."""
        limit = (self.absolute or {}).get(name)
        return self.percent / 100 * scale if limit is None else limit


def check_target(what: str, percent: Any, absolute: Any) -> Target | None:
    """The target of two arguments; None if neither is given.

    Raises
    ------
    InputError
        Not a positive number, or no mapping of names to positive numbers.
    """
    problems = Complaints(what)
    if percent is not None:
        good = isinstance(percent, int | float) and not isinstance(percent, bool) and percent > 0
        problems.unless(good, f"target_error_percent = {percent!r}", "a number above 0", "0.1")
    if absolute is not None:
        good = isinstance(absolute, Mapping) and all(checks.is_number(v) and v > 0 for v in absolute.values())
        problems.unless(good, f"target_error = {absolute!r}", "names with errors above 0", '{"voc_V": 1e-4}')
    problems.raise_if_any()
    if percent is None and absolute is None:
        return None
    return Target(math.inf if percent is None else float(percent), absolute)


def error_bar(
    values: Sequence[float], shares: Sequence[float], scale: float, steps: tuple[float, float] = (1.0, 1.0)
) -> float:
    """Half width for the last of a number's values on ever finer meshes; infinite for fewer than three.

    A difference far below the theory's share of the one before says that two errors cancel, not that both are small.

    Parameters
    ----------
    values : sequence of float
    shares : sequence of float
        Fall of the error from each mesh to the next, by the theory; one less than `values`.
    scale : float
    steps : tuple of float
        Levels from the third last mesh to the one before the last, and from there to the last.
    """
    if len(values) < 3:
        return math.inf
    last, before = abs(values[-1] - values[-2]), abs(values[-2] - values[-3])
    step = steps[1]
    theory = max(BEST_RATIO**step, shares[-1])
    observed = _fall(last / before, steps) if before > 0 else WORST_RATIO**step
    ratio = min(max(theory, IRREGULAR_RATIO**step if observed < TOO_GOOD**step else observed), WORST_RATIO**step)
    safety = SAFETY * (EARLY if len(values) == 3 else 1.0)
    expected = before * _change(float(theory ** (1 / step)), steps)
    return float(max(safety * max(last, expected) * ratio / (1 - ratio), ROUND_OFF * scale))


def _change(fall: float, steps: tuple[float, float]) -> float:
    """The last change of a number over the one before, where its error falls by `fall` per level."""
    first, second = steps
    return second / first if fall == 1 else float(fall**first * (1 - fall**second) / (1 - fall**first))


def _fall(change: float, steps: tuple[float, float]) -> float:
    """The fall of the error over the last step that goes with such a change; 1 where the error does not fall."""
    if steps[0] == steps[1]:
        return change
    low, high = 0.0, 1.0
    if change >= _change(high, steps):
        return 1.0
    for _ in range(50):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if _change(middle, steps) < change else (low, middle)
    return float(high ** steps[1])


Numbers = tuple[Mapping[str, float], Mapping[str, float]]
"""Values by name, and what a percentage of each refers to."""


def refine(
    first: Problem,
    solve: Callable[[Problem, Any], Result],
    numbers: Callable[[Result], Numbers],
    finer: Callable[[Result, Problem, float], Problem | None],
    target: Target,
    *,
    estimates: Callable[[Result, Problem], Mapping[str, float]] | None = None,
    progress: bool = True,
) -> tuple[Result, Uncertainty]:
    """Solve on ever finer meshes until every bar is small enough; at least on four meshes in 2-D, three in 3-D.

    Parameters
    ----------
    first : Problem
    solve : callable
        Takes a problem and the result on the mesh before, or None.
    numbers : callable
    finer : callable
        The next problem, from how far the widest bar is above its target; None if no finer mesh is allowed.
    target : Target
    estimates : callable, optional
        Errors estimated on the mesh itself, by name; numbers without one get the bar of the family of meshes.
    progress : bool
        Show value ± bar of every mesh on a terminal.

    Returns
    -------
    result, Uncertainty
        On the last mesh.

    Warns
    -----
    ModelWarning
        The meshes ended before the target was reached; the bars hold all the same.
    """
    problem: Problem | None = first
    result: Any = None
    levels: list[Level] = []
    while problem is not None:
        result = solve(problem, result)
        levels.append(_level(problem, numbers(result), levels, estimates(result, problem) if estimates else {}))
        _check_names(target, levels[-1].values)
        if progress:
            _show(levels[-1])
        if len(levels) >= FEWEST_LEVELS[problem.mesh.dimension] and not _missed(levels[-1], target):
            return result, Uncertainty(tuple(levels))
        early = EARLY if len(levels) == 3 else 1.0
        problem = finer(result, problem, max(_excess(levels[-1], target) / early, 1.0))
    _warn_missed(levels[-1], target)
    return result, Uncertainty(tuple(levels), reached=False)


def _level(problem: Problem, numbers: Numbers, before: list[Level], known: Mapping[str, float]) -> Level:
    """Bars of a mesh's numbers, from those on the meshes before."""
    (values, scales), unknowns, dimension = numbers, problem.space.size, problem.mesh.dimension
    seen = {name: [*(level.values[name] for level in before), value] for name, value in values.items()}
    sizes = [*(level.unknowns for level in before), unknowns]
    shares = [(coarse / fine) ** ERROR_POWER[dimension] for coarse, fine in pairwise(sizes)]
    level = problem.steps.level if problem.steps is not None else float(len(before))
    steps = _steps([*(one.level for one in before), level], sizes, dimension if problem.steps is not None else None)
    bars = {name: error_bar(history, shares, scales[name], steps) for name, history in seen.items()}
    for name in bars.keys() & known.keys():
        bars[name] = max(ESTIMATE_SAFETY * known[name], bars[name] / SAFETY, LEFT_OUT * scales[name])
    return Level(unknowns, values, bars, scales, level)


def _steps(levels: list[float], sizes: list[int], dimension: int | None) -> tuple[float, float]:
    """The last two steps in levels: as the unknowns say where they grow regularly, else as the levels say."""
    if len(levels) < 3:
        return 1.0, 1.0
    stated = [b - a for a, b in pairwise(levels[-3:])]
    if dimension is None:
        return stated[0], stated[1]
    counted = [math.log(b / a, PER_LEVEL[dimension]) for a, b in pairwise(sizes[-3:])]
    regular = all(REGULAR[0] <= c / s <= REGULAR[1] for c, s in zip(counted, stated, strict=True))
    return (counted[0], counted[1]) if regular else (stated[0], stated[1])


def _warn_missed(level: Level, target: Target) -> None:
    missed = _missed(level, target) or list(level.values)
    worst = max(missed, key=lambda name: level.bars[name] / level.scales[name])
    warnings.warn(
        f"the error asked for was not reached with {level.unknowns} unknowns: "
        f"{worst} = {with_bar(level.values[worst], level.bars[worst])}. "
        "Ask for less, model a smaller piece, or raise largest_unknowns.",
        ModelWarning,
        stacklevel=4,
    )


def _missed(level: Level, target: Target) -> list[str]:
    return [name for name, bar in level.bars.items() if not target.met(name, bar, level.scales[name])]


def _excess(level: Level, target: Target) -> float:
    """The widest bar over what is asked for."""
    return max((bar / max(target.limit(n, level.scales[n]), 1e-300) for n, bar in level.bars.items()), default=1.0)


def _check_names(target: Target, values: Mapping[str, float]) -> None:
    problems = Complaints("target_error")
    for name in target.absolute or {}:
        problems.unless(name in values, f"target_error of {name!r}", f"one of {', '.join(values)}")
    problems.raise_if_any()


def _show(level: Level) -> None:
    """One line per mesh on the error stream, if that is a terminal."""
    from rich.console import Console

    console = Console(stderr=True)
    if not console.is_terminal:
        return
    shown = [
        f"{split_name(name)[0].replace('_', ' ')} {with_bar(value, level.bars[name])} {split_name(name)[1]}"
        for name, value in level.values.items()
    ]
    console.print(f"{level.unknowns:>9,} unknowns: {'; '.join(shown)}", highlight=False, style="dim")
