"""How a quantity scatters with its inputs: a surrogate over the inputs, refined until its own error is small enough."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import SolverError
from .sampling import Distribution, samples
from .scales import Scales, rounded
from .search import Evaluate, bars_of
from .surrogate import Surrogate, fitted

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

TAILS = (0.01, 0.99)
"""Shares of an input's values between which the surrogate's unit range lies."""
OF_SPREAD = 0.01
"""The surrogate need not know better than this share of the quantity's standard deviation."""
DRAWS, SCRAMBLES = 4096, 8
"""Samples of the surrogate, and how often they are drawn to see what their number does."""
FIRST, MORE = 4, 2
"""Points of the first round per input, and of every further one (at least 8, and a quarter of those before)."""


@dataclass(frozen=True)
class Scatter:
    """What scatters, and what is asked of it.

    Parameters
    ----------
    quantity : str
    inputs : tuple of str
    distributions : tuple of Distribution
    designs : Scales, optional
        Inputs to choose, with their ranges; the surrogate covers them too.
    most_points : int
    seed : int
    """

    quantity: str
    inputs: tuple[str, ...]
    distributions: tuple[Distribution, ...]
    designs: Scales | None
    most_points: int
    seed: int = 0

    @property
    def names(self) -> tuple[str, ...]:
        """Of all variables: inputs, then designs."""
        return self.inputs + (self.designs.names if self.designs else ())

    @property
    def scales(self) -> Scales:
        """Of all variables."""
        tails = [_quantiles(d, TAILS) for d in self.distributions]
        low, high = [t[0] for t in tails], [t[1] for t in tails]
        designs = self.designs
        return Scales(
            self.names, (*low, *(designs.lowest if designs else ())), (*high, *(designs.highest if designs else ()))
        )

    def drawn(self, count: int, seed: int) -> NDArray[np.float64]:
        """Quasi-random samples (count, inputs) of the inputs alone."""
        return samples(self.distributions, count, "sobol", seed)

    def with_design(self, inputs: NDArray[np.float64], design: Any = ()) -> NDArray[np.float64]:
        """Points of the unit cube from samples (n, inputs) at one design."""
        rest = np.broadcast_to(np.asarray(design, dtype=float), (len(inputs), len(self.names) - len(self.inputs)))
        return self.scales.unit(np.hstack([inputs, rest]))

    @property
    def medians(self) -> NDArray[np.float64]:
        """Of the inputs."""
        return np.array([_quantiles(d, (0.5,))[0] for d in self.distributions])


@dataclass(frozen=True, eq=False)
class Learned:
    """The surrogate over all variables.

    Parameters
    ----------
    surrogate : Surrogate
    miss : float
        Half width of its error: twice the root mean square of its leave-one-out residuals.
    bar : float
        Error bar of the points, median; NaN where there are none.
    spread : float
        Standard deviation of the quantity (of several designs, at the middle one).
    """

    surrogate: Surrogate
    miss: float
    bar: float
    spread: float

    @property
    def limit(self) -> float:
        """Error of the surrogate that is small enough."""
        return max(0.0 if math.isnan(self.bar) else self.bar, 2 * OF_SPREAD * self.spread)

    @property
    def reached(self) -> bool:
        """Whether it is."""
        return self.miss <= self.limit


def learn(scatter: Scatter, evaluate: Evaluate) -> pd.DataFrame:
    """Evaluate samples until the surrogate's error is small enough, or no more points are allowed.

    Every round of new samples is predicted before it counts, and the surrogate must have been right.

    Parameters
    ----------
    scatter : Scatter
    evaluate : callable

    Returns
    -------
    pandas.DataFrame
        All evaluations, in order.
    """
    planned = planned_points(scatter)
    d = len(scatter.names)
    count = min(FIRST * d + 4, len(planned))
    table = evaluate(planned[:count])
    while count < len(planned):
        learned = learned_from(scatter, table)
        more = min(max(MORE * d, 8, count // 4), len(planned) - count)
        count += more
        table = evaluate(planned[:count])
        missed = 2 * _root_mean_square(scatter, learned, table.iloc[-more:])
        if learned.reached and missed <= learned.limit:
            break
    return table


def planned_points(scatter: Scatter) -> list[tuple[float, ...]]:
    """All points that may be evaluated: quasi-random samples of inputs and designs.

    Half of them are drawn from the inputs' own distributions and half evenly between their tails, so that the
    surrogate is as sure about rare values as about common ones.
    """
    from scipy.stats import qmc

    d = len(scatter.names)
    shares = qmc.Sobol(d, seed=scatter.seed).random(2 ** int(np.ceil(np.log2(scatter.most_points))))
    scales = scatter.scales
    even = scales.values(-0.05 + 1.1 * shares)
    columns = [
        np.where(np.arange(len(shares)) % 2, _clipped(d, even[:, k]), _quantiles(d, shares[:, k]))
        for k, d in enumerate(scatter.distributions)
    ]
    if scatter.designs is not None:
        columns += list(scatter.designs.values(shares[:, len(scatter.inputs) :]).T)
    rows = np.array(columns).T[: scatter.most_points]
    return [tuple(rounded(v, 5) for v in row) for row in rows.tolist()]


def learned_from(scatter: Scatter, table: pd.DataFrame) -> Learned:
    """Fit the surrogate to the points of a table.

    Raises
    ------
    SolverError
        Too few points have a result.
    """
    points, values, good = _data(scatter, table)
    if good.sum() < 4:
        reasons = (
            "; ".join(dict.fromkeys(r for r in table.get("failure", []) if r)) or f"no column {scatter.quantity!r}"
        )
        raise SolverError(
            "no results", f"{good.sum()} of {len(table)} points have a result, at least 4 needed: {reasons}"
        )
    bars = bars_of(table, scatter.quantity)[good]
    surrogate = fitted(points[good], values[good], bars)
    middle = scatter.designs.values(np.full((1, len(scatter.designs.names)), 0.5))[0] if scatter.designs else ()
    spread = float(np.std(surrogate.mean(scatter.with_design(scatter.drawn(1024, scatter.seed), middle))))
    misses = surrogate.left_out()[_competing(scatter, surrogate, points[good], spread)]
    bar = float(np.median(bars)) if np.isfinite(bars).all() else np.nan
    return Learned(surrogate, 2 * float(np.sqrt(np.mean(misses**2))), bar, spread)


def _competing(scatter: Scatter, surrogate: Surrogate, points: NDArray[np.float64], spread: float) -> Any:
    """Which points lie at designs that are not hopeless: within four standard deviations of the best, if eight do."""
    if scatter.designs is None:
        return np.full(len(points), True)
    middle = np.full((len(points), len(scatter.inputs)), 0.5)
    nominal = surrogate.mean(np.hstack([middle, points[:, len(scatter.inputs) :]]))
    close = nominal >= nominal.max() - 4 * spread
    return close if close.sum() >= 8 else np.full(len(points), True)


def _data(scatter: Scatter, table: pd.DataFrame) -> tuple[Any, Any, Any]:
    points = scatter.scales.unit(table[list(scatter.names)].to_numpy(dtype=float))
    there = scatter.quantity in table
    values = table[scatter.quantity].to_numpy(dtype=float) if there else np.full(len(table), np.nan)
    return points, values, np.isfinite(values)


def _root_mean_square(scatter: Scatter, learned: Learned, new: pd.DataFrame) -> float:
    """Of the surrogate's misses of points that it has not seen."""
    points, values, good = _data(scatter, new)
    if not good.any():
        return 0.0
    return float(np.sqrt(np.mean((learned.surrogate.mean(points[good]) - values[good]) ** 2)))


def variance_shares(
    scatter: Scatter, surrogate: Surrogate, design: Any
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Share of the variance that each input makes alone, and together with others.

    First-order and total indices of I. M. Sobol', Math. Comput. Simul. 55, 271 (2001), by the estimators of A. Saltelli
    et al., Comput. Phys. Commun. 181, 259 (2010), Table 2 (b) and (f).

    Returns
    -------
    alone, total, bars : (inputs,) arrays
        Bars: two standard deviations over differently scrambled samples, the larger of both indices'.
    """
    found = np.array([_shares(scatter, surrogate, design, seed) for seed in range(SCRAMBLES)])
    alone, total = np.clip(found.mean(axis=0), 0.0, None)
    bars = 2 * (found.std(axis=0, ddof=1) / np.sqrt(SCRAMBLES)).max(axis=0)
    return alone, total, bars


def _shares(scatter: Scatter, surrogate: Surrogate, design: Any, seed: int) -> Any:
    d = len(scatter.inputs)
    both = samples(scatter.distributions * 2, DRAWS // 2, "sobol", scatter.seed + 1000 + seed)
    a, b = both[:, :d], both[:, d:]
    mixed = np.repeat(a[None], d, axis=0)  # A with one column of B each
    mixed[np.arange(d), :, np.arange(d)] = b.T
    fa, fb, fm = (surrogate.mean(scatter.with_design(x, design)) for x in (a, b, mixed.reshape(-1, d)))
    fm = fm.reshape(d, -1)
    variance = float(np.var(np.concatenate([fa, fb]))) or 1.0
    centred = fb - np.concatenate([fa, fb]).mean()
    return np.mean(centred * (fm - fa), axis=1) / variance, np.mean((fa - fm) ** 2, axis=1) / (2 * variance)


def _quantiles(distribution: Distribution, shares: Sequence[float] | NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray(distribution.quantile(np.asarray(shares, dtype=float)), dtype=float)


def _clipped(distribution: Distribution, values: NDArray[np.float64]) -> NDArray[np.float64]:
    low, high = _quantiles(distribution, (1e-4, 1 - 1e-4))
    return np.clip(values, low, high)
