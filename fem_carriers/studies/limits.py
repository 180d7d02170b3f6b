"""Limits on combinations of inputs, such as a smallest gap."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..errors import Complaints
from .scales import Scales

if TYPE_CHECKING:
    from numpy.typing import NDArray

NEAR = 0.01
"""A limit binds if what is left is below this share of what there is over the whole range."""


@dataclass(frozen=True)
class Limit:
    """A limit on a weighted sum of inputs.

    Parameters
    ----------
    terms : mapping of str to float
        Factors by input: ``{"pitch_um": 0.5, "front.finger.width_um": -0.5}``.
    at_least, at_most : float, optional
        One of them.
    name : str
        For messages.
    """

    terms: Mapping[str, float]
    at_least: float | None = None
    at_most: float | None = None
    name: str = ""

    def __post_init__(self) -> None:
        problems = Complaints(f"limit {self.name!r}" if self.name else "limit")
        sound = isinstance(self.terms, Mapping) and bool(self.terms)
        problems.unless(sound, f"terms = {self.terms!r}", "factors by input", '{"pitch_um": 1}')
        for name, factor in self.terms.items() if sound else ():
            checks.finite(problems, f"terms[{name!r}]", factor)
        if checks.exactly_one(problems, "given", {"at_least": self.at_least, "at_most": self.at_most}):
            side = "at_least" if self.at_most is None else "at_most"
            checks.finite(problems, side, getattr(self, side))
        problems.unless(isinstance(self.name, str), f"name = {self.name!r}", "a text")
        problems.raise_if_any()

    def __call__(self, values: Mapping[str, float]) -> float:
        """What is left; negative where the limit is broken."""
        total = sum(factor * values[name] for name, factor in self.terms.items())
        return total - self.at_least if self.at_least is not None else float(self.at_most or 0.0) - total

    def __str__(self) -> str:
        if self.name:
            return self.name
        text = " ".join(f"{factor:+g} {name}" for name, factor in self.terms.items()).removeprefix("+")
        return f"{text} ≥ {self.at_least:g}" if self.at_least is not None else f"{text} ≤ {self.at_most:g}"


Constraint = Limit | Callable[[Mapping[str, float]], float]


@dataclass(frozen=True)
class Region:
    """Where a search may go.

    Parameters
    ----------
    scales : Scales
    limits : sequence of callable
        Each takes values by name and returns what is left; not negative where allowed.
    """

    scales: Scales
    limits: Sequence[Constraint] = ()

    def left(self, points: NDArray[np.float64]) -> NDArray[np.float64]:
        """What every limit leaves, (limits, n)."""
        columns = self.scales.columns(points)
        rows = [dict(zip(columns, row, strict=True)) for row in zip(*columns.values(), strict=True)]
        return np.array([[float(limit(row)) for row in rows] for limit in self.limits]).reshape(-1, len(points))

    def allowed(self, points: NDArray[np.float64]) -> NDArray[np.bool_]:
        """Which points are in the cube and break no limit."""
        inside = np.asarray(((points >= 0) & (points <= 1)).all(axis=1))
        return np.asarray(inside & (self.left(points) >= 0).all(axis=0)) if self.limits else inside

    def binding(self, point: NDArray[np.float64], spread: NDArray[np.float64]) -> tuple[str, ...]:
        """Ends of ranges and limits at which a point (d,) lies; `spread` (n, d) are points all over the region."""
        found = []
        for k, name in enumerate(self.scales.names):
            for end, value, ends in ((0, "lower", self.scales.lowest), (1, "upper", self.scales.highest)):
                if abs(point[k] - end) < NEAR / 2:
                    found.append(f"{name} at the {value} end of its range ({ends[k]:g})")
        if self.limits:
            here, all_over = self.left(point[None])[:, 0], self.left(spread)
            for limit, rest, values in zip(self.limits, here, all_over, strict=True):
                if rest < NEAR * float(np.ptp(values)):
                    found.append(limit_name(limit))
        return tuple(found)


def limit_name(limit: Constraint) -> str:
    """How a limit is called in messages."""
    return str(limit) if isinstance(limit, Limit) else getattr(limit, "__name__", "a limit").replace("_", " ")


def check_limits(what: str, limits: Any, scales: Scales) -> tuple[Constraint, ...]:
    """Limits that can be evaluated.

    Raises
    ------
    InputError
        Not callable, inputs that do not vary, or a result that is no number.
    """
    problems = Complaints(what)
    listed = (limits,) if callable(limits) else tuple(limits) if isinstance(limits, Sequence) else None
    allowed = "a list of Limit, or of functions of a mapping of the variables that return what is left"
    if not problems.unless(listed is not None, f"constraints = {limits!r}", allowed):
        problems.raise_if_any()
    middle = dict(zip(scales.names, scales.values(np.full((1, len(scales.names)), 0.5))[0].tolist(), strict=True))
    for limit in listed or ():
        if not problems.unless(callable(limit), f"constraint {limit!r}", allowed):
            continue
        unknown = [n for n in limit.terms if n not in scales.names] if isinstance(limit, Limit) else []
        given = f"constraint {limit_name(limit)} with {', '.join(map(repr, unknown))}"
        if problems.unless(not unknown, given, f"variables: {', '.join(scales.names)}"):
            _try(problems, limit, middle)
    problems.raise_if_any()
    return listed or ()


def _try(problems: Complaints, limit: Constraint, values: Mapping[str, float]) -> None:
    try:
        result = limit(values)
        good, text = checks.is_number(result) and math.isfinite(result), f"{result!r}"
    except Exception as error:  # whatever a function of the user raises
        good, text = False, f"{type(error).__name__}: {error}"
    given = f"constraint {limit_name(limit)}, which gives {text}"
    problems.unless(good, given, "a finite number: what is left, e.g. lambda v: v['pitch_um'] - 500")
