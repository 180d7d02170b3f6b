"""A smooth function through a few computed points, with its own error: Gaussian-process regression.

Constant trend; squared-exponential (or, for less smooth functions, Matérn) covariance with one length per variable.
C. E. Rasmussen and C. K. I. Williams, Gaussian Processes for Machine Learning (2006): prediction eqs. 2.23-2.26 and
2.41-2.42 (trend), covariances eqs. 4.9 and 4.17, likelihood and its gradient eqs. 5.8-5.9, leave-one-out residuals
eqs. 5.10-5.12; numbers of equations from memory.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

JITTER = 1e-10
"""Share of the variance added to the diagonal, against round-off."""
LENGTH_BOUNDS, VARIANCE_BOUNDS = (0.05, 30.0), (1e-2, 1e3)
TYPICAL_LENGTH, LENGTH_FACTOR = 0.8, 3.0
"""What lengths are expected to be, and by what factor they scatter, where few points say little."""
NOISE_BOUNDS = {True: (1e-5, 1.0), False: (1e-6, 1e3)}
"""Factor on the variance of the noise: known bars are upper bounds; unknown ones are taken as a thousandth of the
spread first."""
UNKNOWN_NOISE = 1e-3
SAFETY = 2.0
"""On predicted deviations: of smooth functions of one and two variables the largest of 100 errors was 1.9 times as
large as twice the deviation."""
STARTS = (0.4, 1.0, 3.0)
CHUNK = 20_000


@dataclass(frozen=True, eq=False)
class Surrogate:
    """A fitted function of points in the unit cube.

    Parameters
    ----------
    points : (n, d) array
    values : (n,) array
    lengths : (d,) array
        Distance over which values are alike, variable by variable.
    variance : float
        Of the process.
    trend : float
    factor : (n, n) array
        Lower Cholesky factor of the covariance of the values.
    calibration : float
        Factor on all errors, from the leave-one-out residuals, with a safety factor.
    rough : bool
        Covariance of functions that are only twice differentiable (Matérn 5/2) instead of smooth ones.
    """

    points: NDArray[np.float64]
    values: NDArray[np.float64]
    lengths: NDArray[np.float64]
    variance: float
    trend: float
    factor: NDArray[np.float64]
    calibration: float
    rough: bool = False

    def mean(self, at: NDArray[np.float64], values: NDArray[np.float64] | None = None) -> NDArray[np.float64]:
        """Predicted values at (m, d) points; with `values` ((n,) or (n, k)) those of other data at the same points."""
        data = self.values if values is None else values
        weights = _solve(self.factor, data - self.trend)
        parts = [self._covariance(at[i : i + CHUNK]) @ weights for i in range(0, len(at), CHUNK)]
        return np.asarray(self.trend + np.concatenate(parts))

    def deviation(self, at: NDArray[np.float64]) -> NDArray[np.float64]:
        """Standard deviation of the prediction at (m, d) points."""
        parts = [self._deviation(at[i : i + CHUNK]) for i in range(0, len(at), CHUNK)]
        return np.concatenate(parts)

    def _deviation(self, at: NDArray[np.float64]) -> NDArray[np.float64]:
        half, rest, ones = self._reduced(at)
        left = self.variance - np.sum(half**2, axis=0) + rest**2 / (ones @ ones)
        return np.asarray(self.calibration * np.sqrt(np.maximum(left, 0.0)))

    def covariance(self, at: NDArray[np.float64]) -> NDArray[np.float64]:
        """Covariance (m, m) of the predictions at (m, d) points."""
        half, rest, ones = self._reduced(at)
        found = self._covariance(at, at) - half.T @ half + np.outer(rest, rest) / (ones @ ones)
        return np.asarray(self.calibration**2 * found)

    def left_out(self) -> NDArray[np.float64]:
        """Value less its prediction from all other points, (n,)."""
        inverse = _solve(self.factor, np.eye(len(self.values)))
        return np.asarray((inverse @ (self.values - self.trend)) / np.diag(inverse))

    def _covariance(self, at: NDArray[np.float64], others: Any = None) -> NDArray[np.float64]:
        from scipy.spatial.distance import cdist

        others = self.points if others is None else others
        squares = cdist(at / self.lengths, others / self.lengths, "sqeuclidean")
        return np.asarray(self.variance * _shape(squares, self.rough)[0])

    def _reduced(self, at: NDArray[np.float64]) -> tuple[Any, Any, Any]:
        """L⁻¹ k, 1 − 1ᵀ K⁻¹ k, L⁻¹ 1."""
        from scipy.linalg import solve_triangular

        half = solve_triangular(self.factor, self._covariance(at).T, lower=True)
        ones = solve_triangular(self.factor, np.ones(len(self.values)), lower=True)
        return half, 1 - ones @ half, ones


def fitted(points: Any, values: Any, bars: Any = None, rough: bool = False) -> Surrogate:
    """Fit a surrogate by maximum likelihood.

    Parameters
    ----------
    points : (n, d) array
        In the unit cube or near it.
    values : (n,) array
    bars : (n,) array, optional
        Half widths of the error bars of the values (two standard deviations of independent noise, or less); where they
        are not known, noise is estimated.
    rough : bool
        As for `Surrogate`.

    Returns
    -------
    Surrogate
    """
    from scipy.optimize import minimize

    points, values = np.asarray(points, dtype=float), np.asarray(values, dtype=float)
    known = bars is not None and bool(np.isfinite(bars).all())
    middle, spread = float(values.mean()), float(values.std()) or 1.0
    noise = (np.asarray(bars) / 2 / spread) ** 2 if known else np.full(len(values), UNKNOWN_NOISE**2)
    task = _Likelihood(points, (values - middle) / spread, noise, rough)
    d = points.shape[1]
    bounds = np.log([LENGTH_BOUNDS] * d + [VARIANCE_BOUNDS, NOISE_BOUNDS[known]])
    minimized: Any = minimize
    starts = [np.log([length] * d + [1.0, 0.1]) for length in STARTS]
    results: list[Any] = [minimized(task, start, jac=True, method="L-BFGS-B", bounds=bounds) for start in starts]
    best = min(results, key=lambda r: float(r.fun)).x
    trend, factor, *_ = task.parts(best)
    lengths, variance = np.exp(best[:d]), float(np.exp(best[d]))
    found = Surrogate(
        points, values, lengths, variance * spread**2, middle + spread * trend, spread * factor, 1.0, rough
    )
    return Surrogate(**{**found.__dict__, "calibration": _calibration(found)})


def _calibration(found: Surrogate) -> float:
    """Root mean square of the leave-one-out residuals over their predicted deviations, if above 1; with safety."""
    inverse = np.diag(_solve(found.factor, np.eye(len(found.values))))
    return SAFETY * max(1.0, float(np.sqrt(np.mean(found.left_out() ** 2 * inverse))))


class _Likelihood:
    """Negative logarithm of likelihood and prior, and its gradient, of (ln lengths, ln variance, ln noise factor)."""

    def __init__(
        self, points: NDArray[np.float64], values: NDArray[np.float64], noise: NDArray[np.float64], rough: bool
    ) -> None:
        self.values, self.noise, self.rough = values, noise, rough
        self.squares = (points[:, None, :] - points[None, :, :]) ** 2

    def parts(self, logs: Any) -> tuple[float, Any, Any, Any]:
        """Trend, Cholesky factor of the covariance, its part without noise, and the slope of that (see `_shape`)."""
        *lengths, variance, factor = np.exp(logs)
        shape, slope = _shape(self.squares @ np.power(lengths, -2.0), self.rough)
        smooth, slope = variance * shape, variance * slope
        whole = smooth + np.diag(factor * self.noise + JITTER * variance)
        lower = np.linalg.cholesky(whole)
        ones = _solve(lower, np.ones(len(self.values)))
        return float(ones @ self.values / ones.sum()), lower, smooth, slope

    def __call__(self, logs: Any) -> tuple[float, Any]:
        *lengths, variance, factor = np.exp(logs)
        trend, lower, smooth, slope = self.parts(logs)
        inverse = _solve(lower, np.eye(len(self.values)))
        rest = self.values - trend
        weights = inverse @ rest
        outer = inverse - np.outer(weights, weights)
        value = 0.5 * rest @ weights + np.log(np.diag(lower)).sum()
        gradient = [0.5 * np.sum(outer * slope * self.squares[:, :, k]) / s**2 for k, s in enumerate(lengths)]
        gradient.append(0.5 * (np.sum(outer * smooth) + JITTER * variance * np.trace(outer)))
        gradient.append(0.5 * factor * np.diag(outer) @ self.noise)
        off = (logs[:-2] - np.log(TYPICAL_LENGTH)) / np.log(LENGTH_FACTOR)
        gradient[: len(off)] += off / np.log(LENGTH_FACTOR)
        return float(value + 0.5 * off @ off), np.array(gradient)


def _shape(squares: NDArray[np.float64], rough: bool) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Correlation at squared distances r² (in lengths), and −2 times its derivative by r².

    Smooth: exp(−r²/2). Rough: (1 + √5 r + 5 r²/3) exp(−√5 r). Rasmussen and Williams, eqs. 4.9 and 4.17.
    """
    if not rough:
        smooth = np.exp(-0.5 * squares)
        return smooth, smooth
    r = np.sqrt(5 * np.maximum(squares, 0.0))
    fall = np.exp(-r)
    return (1 + r + r * r / 3) * fall, 5 / 3 * (1 + r) * fall


def _solve(lower: NDArray[np.float64], right: Any) -> Any:
    from scipy.linalg import cho_solve

    return cho_solve((lower, True), right)
