"""The variables of a study as data: ranges, samples, inputs that follow others, and all points they make."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from ..cell import checks
from ..errors import Complaints
from .sampling import METHODS

MOST_POINTS = 10_000_000
Values = tuple[float, ...]


@dataclass(frozen=True)
class Range:
    """Values from `lowest` to `highest`.

    Parameters
    ----------
    lowest, highest : float
    points : int, optional
        How many, both ends included.
    step : float, optional
        Distance of neighbours, instead.
    spacing : {"linear", "log"}
    round_to : float, optional
        Rounds to multiples of it.
    """

    lowest: float
    highest: float
    points: int | None = None
    step: float | None = None
    spacing: str = "linear"
    round_to: float | None = None

    def __post_init__(self) -> None:
        problems = Complaints("range")
        good = all(checks.finite(problems, name, getattr(self, name)) for name in ("lowest", "highest"))
        if good:
            given = f"lowest = {self.lowest!r}, highest = {self.highest!r}"
            problems.unless(self.lowest < self.highest, given, "lowest below highest")
        checks.exactly_one(problems, "range", {"points": self.points, "step": self.step})
        if self.points is not None:
            whole = (
                isinstance(self.points, int) and not isinstance(self.points, bool) and 2 <= self.points <= MOST_POINTS
            )
            problems.unless(whole, f"points = {self.points!r}", f"a whole number from 2 to {MOST_POINTS}")
        for name in ("step", "round_to"):
            if getattr(self, name) is not None:
                checks.positive(problems, name, getattr(self, name))
        checks.one_of(problems, "spacing", self.spacing, ("linear", "log"))
        if self.spacing == "log":
            problems.unless(self.step is None, "step with spacing 'log'", "points instead of step")
            problems.unless(not good or self.lowest > 0, f"lowest = {self.lowest!r} with spacing 'log'", "above 0")
        problems.raise_if_any()

    def values(self) -> list[float]:
        """The values, without repeats that rounding made."""
        if self.step is not None:
            count = math.floor((self.highest - self.lowest) / self.step * (1 + 1e-12)) + 1
            listed = self.lowest + self.step * np.arange(min(count, MOST_POINTS + 1))
        else:
            between = np.geomspace if self.spacing == "log" else np.linspace
            listed = between(self.lowest, self.highest, int(self.points or 2))
        if self.round_to:
            listed = np.round(listed / self.round_to) * self.round_to
        return list(dict.fromkeys(map(float, listed)))


@dataclass(frozen=True)
class Follow:
    """An input that follows a swept one: times × equals + plus."""

    equals: str
    times: float = 1.0
    plus: float = 0.0

    def __post_init__(self) -> None:
        problems = Complaints("follow")
        problems.unless(isinstance(self.equals, str), f"equals = {self.equals!r}", "the path of a swept input")
        checks.finite(problems, "times", self.times)
        checks.finite(problems, "plus", self.plus)
        problems.raise_if_any()


@dataclass(frozen=True)
class Sampled:
    """How many samples, and how they are drawn."""

    points: int
    method: str = "sobol"
    seed: int = 0

    def __post_init__(self) -> None:
        problems = Complaints("sampled")
        _whole(problems, "points", self.points, 1)
        _whole(problems, "seed", self.seed, 0)
        checks.one_of(problems, "method", self.method, METHODS)
        problems.raise_if_any()


@dataclass(frozen=True)
class Axes:
    """All variables of a study.

    Parameters
    ----------
    groups : tuple of (names, rows)
        Crossed with each other, the last one fastest; inputs of a group take their values together.
    follow : mapping of str to Follow
    """

    groups: tuple[tuple[tuple[str, ...], Sequence[Values]], ...] = ()
    follow: Mapping[str, Follow] = field(default_factory=dict)

    @property
    def names(self) -> tuple[str, ...]:
        """Paths of all variables."""
        swept = tuple(name for names, _ in self.groups for name in names)
        return swept + tuple(self.follow)

    def __len__(self) -> int:
        return math.prod(len(rows) for _, rows in self.groups)

    def points(self) -> list[Values]:
        """Values of every point, in the order of `names`."""
        return list(self._points())

    def _points(self) -> Iterator[Values]:
        swept = [name for names, _ in self.groups for name in names]
        rules = [(swept.index(f.equals), f.times, f.plus) for f in self.follow.values()]
        for rows in itertools.product(*(rows for _, rows in self.groups)):
            values = tuple(itertools.chain.from_iterable(rows))
            yield values + tuple(times * values[i] + plus for i, times, plus in rules)


def _whole(problems: Complaints, name: str, value: object, lowest: int) -> None:
    good = isinstance(value, int) and not isinstance(value, bool) and lowest <= value <= MOST_POINTS
    problems.unless(good, f"{name} = {value!r}", f"a whole number from {lowest} to {MOST_POINTS}")
