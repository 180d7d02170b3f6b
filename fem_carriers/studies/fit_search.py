"""The search for the best fit, and how far each parameter can be moved while the others make up for it."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Vector = NDArray[np.float64]

DIFFERENCE = 1e-4
"""Step of a parameter: of its logarithm, or of its range."""
UNCERTAIN = 0.5
"""A standard deviation above this share of the value leaves a parameter undetermined."""
MOVES = 2.0
"""A parameter that moves by more than this many of its own standard deviations (with the other one held) while
another is followed over its range cannot be separated from it."""
CHI_SQUARE = 4.0
"""Rise of chi-square that two standard deviations of one parameter make."""
AT_BOUND = 1e-3
TRIES = 8
FINE = 0.03
"""Places tried on either side of the best value, and how closely the end of the range is found, in logarithms or shares
of the bounds."""
NOTHING = 1e-12


@dataclass(frozen=True)
class Span:
    """A parameter with its bounds; its position is the value or its logarithm."""

    name: str
    low: float
    high: float
    start: float
    log: bool

    def position(self, value: float) -> float:
        """Of a value."""
        return math.log(value) if self.log else value

    def value(self, position: float) -> float:
        """At a position, within the bounds."""
        return min(max(math.exp(position) if self.log else position, self.low), self.high)

    @property
    def limits(self) -> tuple[float, float]:
        """Positions of the bounds."""
        return self.position(self.low), self.position(self.high)

    @property
    def unit(self) -> float:
        """Change of the position by which slopes and steps are scaled."""
        return 1.0 if self.log else self.high - self.low


@dataclass(frozen=True, eq=False)
class Search:
    """What is fitted to what.

    Parameters
    ----------
    predict : function
        Values of parameters to all curves, (n,).
    slopes : function
        (values, name, signed step) to the derivative of all curves by one parameter, (n,).
    measured, errors : (n,) arrays
    spans : sequence of Span
    """

    predict: Callable[[Mapping[str, float]], Vector]
    slopes: Callable[[Mapping[str, float], str, float], Vector]
    measured: Vector
    errors: Vector
    spans: Sequence[Span]
    _known: dict[tuple[float, ...], Vector] = field(default_factory=dict)

    def values(self, position: Vector) -> dict[str, float]:
        """Values of the parameters at a position (k,)."""
        return {s.name: s.value(float(p)) for s, p in zip(self.spans, position, strict=True)}

    def fitted(self, position: Vector) -> Vector:
        """All curves, (n,)."""
        key = tuple(float(p) for p in position)
        if key not in self._known:
            self._known[key] = self.predict(self.values(position))
        return self._known[key]

    def residuals(self, position: Vector) -> Vector:
        """(fitted − measured)/error, (n,)."""
        return (self.fitted(position) - self.measured) / self.errors

    def jacobian(self, position: Vector, free: Sequence[int]) -> Vector:
        """Derivatives of the residuals by the positions of some parameters, (n, k)."""
        values, columns = self.values(position), []
        for i in free:
            span = self.spans[i]
            value = values[span.name]
            by_position = value if span.log else 1.0
            step = DIFFERENCE * span.unit * by_position
            step = -step if value + step > span.high else step
            columns.append(self.slopes(values, span.name, step) * by_position / self.errors)
        return np.column_stack(columns)

    def minimum(self, start: Vector, held: Mapping[int, float], accuracy: float = 1e-6) -> Vector:
        """Best position (k,) with some parameters held; `accuracy` is that of chi-square, relative."""
        from scipy.optimize import least_squares

        free = [i for i in range(len(self.spans)) if i not in held]
        whole = np.array([held.get(i, float(p)) for i, p in enumerate(start)])
        if not free:
            return whole

        def filled(part: Vector) -> Vector:
            position = whole.copy()
            position[free] = part
            return position

        low, high = np.array([self.spans[i].limits for i in free]).T
        margin = 1e-6 * (high - low)

        def residuals(part: Vector) -> Vector:
            return self.residuals(filled(part))

        def jacobian(part: Vector) -> Vector:
            return self.jacobian(filled(part), free)

        found = least_squares(
            residuals, np.clip(whole[free], low + margin, high - margin), jac=jacobian, bounds=(low, high),
            x_scale=np.array([self.spans[i].unit for i in free]), xtol=1e-8, ftol=accuracy, gtol=1e-10, max_nfev=60,
        )  # fmt: skip
        return filled(np.asarray(found.x))


@dataclass(frozen=True, eq=False)
class Best:
    """The best fit.

    Parameters
    ----------
    position : (k,) array
    fitted : (n,) array
    chi_square : float
    noise : float
        Variance by which that is scaled: 1 where errors of the data are known.
    jacobian : (n, k) array
        Of the residuals over their errors, by position.
    """

    position: Vector
    fitted: Vector
    chi_square: float
    noise: float
    jacobian: Vector

    def deviations(self, free: Sequence[int]) -> Vector:
        """Standard deviations of the positions of some parameters, the others held."""
        return np.sqrt(np.diag(_inverse(self.jacobian[:, free])) * self.noise)

    def covariance(self, search: Search) -> Vector:
        """Of the values, (k, k)."""
        values = search.values(self.position)
        scale = np.array([values[s.name] if s.log else 1.0 for s in search.spans])
        return _inverse(self.jacobian) * self.noise * np.outer(scale, scale)


def _inverse(jacobian: Vector) -> Vector:
    """(JᵀJ)⁻¹; a direction without any effect on the data gets a huge variance."""
    scale = np.maximum(np.linalg.norm(jacobian, axis=0), 1e-150)
    _, sizes, directions = np.linalg.svd(jacobian / scale, full_matrices=False)
    inverse = (directions.T / np.maximum(sizes, NOTHING) ** 2) @ directions
    return np.asarray(inverse / np.outer(scale, scale))


def best(search: Search, errors_known: bool) -> Best:
    """The best fit of all parameters."""
    start = np.array([s.position(s.start) for s in search.spans])
    position = search.minimum(start, {})
    chi_square = float((search.residuals(position) ** 2).sum())
    noise = 1.0 if errors_known else chi_square / (search.measured.size - len(search.spans))
    jacobian = search.jacobian(position, range(len(search.spans)))
    return Best(position, search.fitted(position), chi_square, max(noise, 1e-30), jacobian)


@dataclass(frozen=True)
class Verdict:
    """What the data say of one parameter.

    Parameters
    ----------
    name : str
    value, deviation : float
        Best value and its standard deviation, linearised.
    low, high : float
        Range that fits within two standard deviations.
    determined : bool
    partners : tuple of str
        Parameters that it cannot be separated from.
    at_low, at_high : bool
        Whether that range ends at a bound.
    """

    name: str
    value: float
    deviation: float
    low: float
    high: float
    determined: bool
    partners: tuple[str, ...] = ()
    at_low: bool = False
    at_high: bool = False


def verdicts(search: Search, found: Best) -> tuple[Verdict, ...]:
    """One per parameter, in their order."""
    every = range(len(search.spans))
    deviations = found.deviations(every)
    return tuple(_verdict(search, found, i, float(deviations[i])) for i in every)


def _verdict(search: Search, found: Best, i: int, deviation: float) -> Verdict:
    span, at = search.spans[i], float(found.position[i])
    value = span.value(at)
    low, high = span.limits
    near = AT_BOUND * (high - low)
    bound = at - low < near or high - at < near
    relative = deviation if span.log else deviation / max(abs(value), 1e-3 * span.unit)
    own = deviation * (value if span.log else 1.0)
    if relative <= UNCERTAIN and not bound:
        ends = span.value(max(at - 2 * deviation, low)), span.value(min(at + 2 * deviation, high))
        return Verdict(span.name, value, own, *ends, determined=True)
    line = _profile(search, found, i, deviation)
    spread = [float(p[i]) for p in line]
    ends = span.value(min(spread)), span.value(max(spread))
    marks = {"at_low": min(spread) - low < near, "at_high": high - max(spread) < near}
    return Verdict(span.name, value, own, *ends, determined=False, partners=_partners(search, found, i, line), **marks)


def _profile(search: Search, found: Best, i: int, deviation: float) -> list[Vector]:
    """Positions along a parameter, the others refitted, that fit within two standard deviations."""
    at, kept = float(found.position[i]), [found.position]
    for end in search.spans[i].limits:
        start = at + math.copysign(min(2 * deviation, abs(end - at)), end - at)
        kept += _one_way(search, found, i, start, end)
    return kept


def _one_way(search: Search, found: Best, i: int, place: float, end: float) -> list[Vector]:
    """Those towards one bound: a first place, the bound, then ever closer to where chi-square reaches its limit."""
    lowest = float((search.residuals(found.position) ** 2).sum())
    limit, kept = lowest + CHI_SQUARE * found.noise, [found.position]
    inside, outside, beyond = lowest, math.inf, math.nan
    for _ in range(TRIES):
        trial = search.minimum(_shifted(found, kept[-1], i, place), {i: place}, accuracy=1e-3)
        size = float((search.residuals(trial) ** 2).sum())
        if size <= limit:
            kept.append(trial)
            inside = size
        else:
            outside, beyond = size, place
        near = float(kept[-1][i])
        if near == end or abs(beyond - near) < FINE * search.spans[i].unit:
            break
        share = math.sqrt(max(limit - inside, 0.0) / (outside - inside)) if math.isfinite(outside) else 1.0
        place = near + min(max(share, 0.1), 0.9) * (beyond - near) if math.isfinite(outside) else end
    return kept[1:]


def _shifted(found: Best, near: Vector, i: int, place: float) -> Vector:
    """Where the others are expected when one moves, to first order."""
    others = [k for k in range(near.size) if k != i]
    shift = np.zeros_like(near)
    shift[i] = place - near[i]
    if others:
        rest = found.jacobian[:, others]
        shift[others] = -np.linalg.lstsq(rest, found.jacobian[:, i] * shift[i], rcond=1e-8)[0]
    return np.asarray(near + np.clip(shift, -2.0, 2.0)) if others else near + shift


def _partners(search: Search, found: Best, i: int, line: Sequence[Vector]) -> tuple[str, ...]:
    """Parameters that move along a profile by more than what the data leave open with this one held."""
    others = [k for k in range(len(search.spans)) if k != i]
    if not others or len(line) < 2:
        return ()
    alone = found.deviations(others)
    moved = np.ptp(np.array(line)[:, others], axis=0)
    return tuple(search.spans[k].name for k, m, a in zip(others, moved, alone, strict=True) if m > MOVES * a)
