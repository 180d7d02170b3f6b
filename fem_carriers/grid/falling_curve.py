"""A falling current-voltage curve through given points, smooth and falling everywhere."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

DIVISIONS = 64
"""Pieces an interval between two given points is divided into."""
FLATTEST = 1e-9
"""Smallest slope, in units of the largest current per volt: flat parts fall by this much."""
STEEPEST_PER_V = 40.0
"""Largest growth rate of the slope beyond the last point, about q/kT at room temperature."""
BEYOND_V = 0.25
"""Exponential continuation beyond the last point; a straight line follows."""


@dataclass(frozen=True, eq=False)
class FallingCurve:
    """Cubic Hermite interpolation on a dense table; straight lines beyond its ends.

    Parameters
    ----------
    voltage_V : (n,) float array
        Ascending.
    current_A_per_cm2, slope_S_per_cm2 : (n,) float array
        J and dJ/dV.
    """

    voltage_V: NDArray[np.float64]
    current_A_per_cm2: NDArray[np.float64]
    slope_S_per_cm2: NDArray[np.float64]

    def __call__(self, voltage_V: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """J in A/cm² and dJ/dV in S/cm², of the shape of `voltage_V`."""
        v, j, s = self.voltage_V, self.current_A_per_cm2, self.slope_S_per_cm2
        inside = np.clip(voltage_V, v[0], v[-1])
        k = np.clip(np.searchsorted(v, inside) - 1, 0, v.size - 2)
        h = v[k + 1] - v[k]
        t = (inside - v[k]) / h
        a, b, chord = h * s[k], h * s[k + 1], j[k + 1] - j[k]
        p, q = a - chord, chord - b  # J = J_k + chord t + t (1 − t) [p (1 − t) + q t]
        value = j[k] + chord * t + t * (1 - t) * (p * (1 - t) + q * t)
        slope = (chord + (1 - 2 * t) * (p * (1 - t) + q * t) + t * (1 - t) * (q - p)) / h
        return value + slope * (voltage_V - inside), slope


def falling_curve(
    voltage_V: NDArray[np.float64], current: NDArray[np.float64], slope: NDArray[np.float64] | None = None
) -> FallingCurve:
    """A curve through points whose slope is −exp(z), with z quadratic in each interval.

    z = ln(−dJ/dV) is linear for an exponential and constant for a straight line, so it is smooth where J is not. In
    each interval it takes the given end values and bends so that the integral of the slope is the step of J. The curve
    falls everywhere, and continues exponentially above the last point and as a straight line below the first one.

    Parameters
    ----------
    voltage_V : (n,) float array
        Ascending, n ≥ 2.
    current : (n,) float array
        J in A/cm², not rising.
    slope : (n,) float array, optional
        dJ/dV in S/cm²; estimated from neighbouring steps by default.

    Returns
    -------
    FallingCurve
    """
    h = np.diff(voltage_V)
    floor = FLATTEST * max(float(np.abs(current).max()), 1e-30)
    fall = np.maximum(-np.diff(current), floor * h)
    z = np.log(np.maximum(-slope, floor)) if slope is not None else _node_slopes(voltage_V, np.log(fall / h))
    bend = _bends(z, np.log(fall / h))
    t = np.arange(DIVISIONS) / DIVISIONS
    v = np.append((voltage_V[:-1, None] + h[:, None] * t).ravel(), voltage_V[-1])
    zs = z[:-1, None] + np.diff(z)[:, None] * t + bend[:, None] * t * (1 - t)
    steepness = (z[-1] - z[-2] - bend[-1]) / h[-1]
    v, zs = _continued(v, np.append(zs.ravel(), z[-1]), float(np.clip(steepness, 0.0, STEEPEST_PER_V)))
    return FallingCurve(v, current[0] - _integral(v, zs, h, z, bend), -np.exp(zs))


def _node_slopes(v: NDArray[np.float64], z_mid: NDArray[np.float64]) -> NDArray[np.float64]:
    """z at the points from the mean slopes of the intervals, linear between their middles."""
    if z_mid.size == 1:
        return np.full(2, z_mid[0])
    middle = 0.5 * (v[1:] + v[:-1])
    inner = np.interp(v[1:-1], middle, z_mid)
    first = z_mid[0] + (v[0] - middle[0]) * (z_mid[1] - z_mid[0]) / (middle[1] - middle[0])
    last = z_mid[-1] + (v[-1] - middle[-1]) * (z_mid[-1] - z_mid[-2]) / (middle[-1] - middle[-2])
    return np.concatenate([[first], inner, [last]])


def _bends(z: NDArray[np.float64], mean: NDArray[np.float64]) -> NDArray[np.float64]:
    """c of z = z_a + Δz t + c t (1 − t) in each interval, with ln ∫ exp z dt = `mean`; Newton, convex in c."""
    points, weights = np.polynomial.legendre.leggauss(16)
    t = 0.5 * (points + 1)
    straight = z[:-1, None] + np.diff(z)[:, None] * t
    c = 6 * (mean - straight @ weights / 2)
    for _ in range(60):
        e = 0.5 * weights * np.exp(straight + c[:, None] * t * (1 - t) - mean[:, None])
        value = e.sum(axis=1)
        step = np.clip(np.log(value) / ((e * t * (1 - t)).sum(axis=1) / value), -20.0, 20.0)
        c = c - step
        if np.abs(step).max() < 1e-13:
            break
    return np.asarray(c)


def _continued(
    v: NDArray[np.float64], z: NDArray[np.float64], steepness_per_V: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """The table with an exponential end."""
    beyond = np.linspace(0, BEYOND_V, 4 * DIVISIONS + 1)[1:]
    return np.append(v, v[-1] + beyond), np.append(z, z[-1] + steepness_per_V * beyond)


def _integral(
    v: NDArray[np.float64],
    zs: NDArray[np.float64],
    h: NDArray[np.float64],
    z: NDArray[np.float64],
    bend: NDArray[np.float64],
) -> NDArray[np.float64]:
    """∫ exp z from the first point to each of the table, with four Gauss points in each piece, where z is quadratic."""
    n = h.size * DIVISIONS
    t = (np.arange(DIVISIONS) + 0.5) / DIVISIONS
    inner = z[:-1, None] + np.diff(z)[:, None] * t + bend[:, None] * t * (1 - t)
    middle = np.append(inner.ravel(), 0.5 * (zs[n:-1] + zs[n + 1 :]))
    points, weights = np.polynomial.legendre.leggauss(4)
    s = 0.5 * (points + 1)
    left, right = zs[:-1, None], zs[1:, None]
    bow = 4 * (middle[:, None] - 0.5 * (left + right))
    pieces = np.diff(v) * (np.exp(left + (right - left) * s + bow * s * (1 - s)) @ weights) / 2
    return np.append(0.0, np.cumsum(pieces))
