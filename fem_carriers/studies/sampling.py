"""Distributions of inputs, and random or quasi-random samples from them."""

from __future__ import annotations

import math
import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np

from ..cell import checks
from ..errors import Complaints

if TYPE_CHECKING:
    from numpy.typing import NDArray

METHODS = ("sobol", "halton", "latin_hypercube", "random")


class Distribution(Protocol):
    """An input that scatters."""

    def quantile(self, share: NDArray[np.float64]) -> NDArray[np.float64]:
        """Value below which a share (0 to 1) of all values lies."""


@dataclass(frozen=True)
class Uniform:
    """All values from `lowest` to `highest` alike."""

    lowest: float
    highest: float

    def __post_init__(self) -> None:
        problems = Complaints("uniform")
        _rising(problems, self, "lowest", "highest")
        problems.raise_if_any()

    def quantile(self, share: NDArray[np.float64]) -> NDArray[np.float64]:
        """lowest + share (highest − lowest)."""
        return self.lowest + (self.highest - self.lowest) * share


@dataclass(frozen=True)
class LogUniform:
    """All values of the logarithm alike."""

    lowest: float
    highest: float

    def __post_init__(self) -> None:
        problems = Complaints("log_uniform")
        checks.positive(problems, "lowest", self.lowest)
        _rising(problems, self, "lowest", "highest")
        problems.raise_if_any()

    def quantile(self, share: NDArray[np.float64]) -> NDArray[np.float64]:
        """lowest (highest/lowest)^share."""
        return np.asarray(self.lowest * (self.highest / self.lowest) ** share)


@dataclass(frozen=True)
class Normal:
    """Gauss, cut off at `lowest` and `highest` where they are stated."""

    mean: float
    standard_deviation: float
    lowest: float = -math.inf
    highest: float = math.inf

    def __post_init__(self) -> None:
        problems = Complaints("normal")
        checks.finite(problems, "mean", self.mean)
        checks.positive(problems, "standard_deviation", self.standard_deviation)
        _rising(problems, self, "lowest", "highest", finite=False)
        problems.raise_if_any()

    def quantile(self, share: NDArray[np.float64]) -> NDArray[np.float64]:
        """mean + standard_deviation Φ⁻¹(Φ(a) + share (Φ(b) − Φ(a))), a and b the cuts in standard deviations."""
        from scipy.special import ndtr, ndtri

        low, high = (ndtr((v - self.mean) / self.standard_deviation) for v in (self.lowest, self.highest))
        return np.asarray(self.mean + self.standard_deviation * ndtri(low + share * (high - low)))


@dataclass(frozen=True)
class LogNormal:
    """The logarithm scatters normally around that of `median`; 68 % lie within a factor of `factor`."""

    median: float
    factor: float

    def __post_init__(self) -> None:
        problems = Complaints("log_normal")
        checks.positive(problems, "median", self.median)
        good = checks.is_number(self.factor) and 1 < self.factor < math.inf
        problems.unless(good, f"factor = {self.factor!r}", "a number above 1")
        problems.raise_if_any()

    def quantile(self, share: NDArray[np.float64]) -> NDArray[np.float64]:
        """median factor^(Φ⁻¹(share))."""
        from scipy.special import ndtri

        return np.asarray(self.median * self.factor ** ndtri(share))


@dataclass(frozen=True)
class Triangular:
    """Rises from `lowest` to `most_likely` and falls to `highest`."""

    lowest: float
    most_likely: float
    highest: float

    def __post_init__(self) -> None:
        problems = Complaints("triangular")
        if _rising(problems, self, "lowest", "highest"):
            good = checks.is_number(self.most_likely) and self.lowest <= self.most_likely <= self.highest
            problems.unless(good, f"most_likely = {self.most_likely!r}", "a number from lowest to highest")
        problems.raise_if_any()

    def quantile(self, share: NDArray[np.float64]) -> NDArray[np.float64]:
        """Inverse of the piecewise quadratic cumulative distribution."""
        width, left = self.highest - self.lowest, self.most_likely - self.lowest
        rising = self.lowest + np.sqrt(share * width * left)
        falling = self.highest - np.sqrt((1 - share) * width * (width - left))
        return np.where(share * width < left, rising, falling)


@dataclass(frozen=True)
class Measured:
    """Measured values; between them straight lines of the cumulative distribution, none outside."""

    values: Sequence[float]

    def __post_init__(self) -> None:
        problems = Complaints("measured")
        sound = isinstance(self.values, Sequence) and not isinstance(self.values, str) and len(self.values) >= 2
        sound = sound and all(checks.is_number(v) and math.isfinite(v) for v in self.values)
        problems.unless(sound, f"values = {self.values!r}", "a list of two or more finite numbers")
        problems.raise_if_any()
        object.__setattr__(self, "values", tuple(map(float, self.values)))

    def quantile(self, share: NDArray[np.float64]) -> NDArray[np.float64]:
        """Linear interpolation between the sorted values."""
        return np.asarray(np.quantile(np.array(self.values), share))


DISTRIBUTIONS = {
    "uniform": Uniform, "log_uniform": LogUniform, "normal": Normal, "log_normal": LogNormal,
    "triangular": Triangular, "measured": Measured,
}  # fmt: skip


def samples(distributions: Sequence[Distribution], points: int, method: str, seed: int) -> NDArray[np.float64]:
    """Samples of independent inputs.

    Parameters
    ----------
    distributions : sequence of Distribution
    points : int
    method : {"sobol", "halton", "latin_hypercube", "random"}
        The first three are quasi-random: more even than chance. Sobol sequences are scrambled, and most even for
        powers of two.
    seed : int
        The same seed gives the same samples.

    Returns
    -------
    (points, inputs) array
    """
    shares = _shares(len(distributions), points, method, seed)
    columns = [d.quantile(s) for d, s in zip(distributions, shares.T, strict=True)]
    return np.array(columns, dtype=float).reshape(len(distributions), points).T


def _shares(inputs: int, points: int, method: str, seed: int) -> NDArray[np.float64]:
    from scipy.stats import qmc

    generator = np.random.default_rng(seed)
    if method == "random":
        return np.asarray(generator.random((points, inputs)))
    makers: dict[str, Any] = {"sobol": qmc.Sobol, "halton": qmc.Halton, "latin_hypercube": qmc.LatinHypercube}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", UserWarning)  # a number of points that is no power of two
        drawn: NDArray[np.float64] = np.clip(makers[method](inputs, seed=generator).random(points), 1e-12, 1 - 1e-12)
    return drawn


def _rising(problems: Complaints, owner: Any, low: str, high: str, finite: bool = True) -> bool:
    a, b = getattr(owner, low), getattr(owner, high)
    good = checks.is_number(a) and checks.is_number(b) and (not finite or (math.isfinite(a) and math.isfinite(b)))
    given = f"{low} = {a!r}, {high} = {b!r}"
    return problems.unless(good and a < b, given, f"two numbers, {low} below {high}")
