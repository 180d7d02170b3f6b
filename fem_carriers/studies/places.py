"""Points of a region in the unit cube: all over it, around one of them, at the top of a surrogate."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import SolverError
from .limits import Region
from .surrogate import Surrogate

if TYPE_CHECKING:
    from numpy.typing import NDArray

CANDIDATES = 2048
CLOUD, ROUNDS = 200, 14


def spread_points(region: Region) -> NDArray[np.float64]:
    """Allowed points all over the unit cube, corners and middle among them.

    Raises
    ------
    SolverError
        The constraints leave hardly anything.
    """
    from itertools import product

    from scipy.stats import qmc

    d = len(region.scales.names)
    sobol = qmc.Sobol(d, seed=0).random(CANDIDATES)
    ends = list(product((0.0, 0.5, 1.0), repeat=d)) if d <= 5 else [(0.5,) * d]
    pool = np.concatenate([np.array(ends), sobol])
    pool = pool[region.allowed(pool)]
    if len(pool) < CANDIDATES // 100:
        raise SolverError(
            "no room", "the constraints leave less than 1 % of the ranges; check them, or narrow the ranges"
        )
    return np.asarray(pool)


def cloud_around(
    region: Region, at: NDArray[np.float64], size: float, count: int, generator: Any
) -> NDArray[np.float64]:
    """Allowed points around one, those beyond the ends of the ranges moved to the ends."""
    d = at.size
    wide = at + size * generator.standard_normal((count, d)) * (generator.random((count, d)) < max(0.5, 1.5 / d))
    points = np.clip(wide, 0.0, 1.0)
    return np.asarray(points[region.allowed(points)])


def top_of(region: Region, surrogate: Surrogate, failed: NDArray[np.float64]) -> NDArray[np.float64]:
    """Place of the largest value: the best of many points, then of ever closer ones around it."""
    generator = np.random.default_rng(0)
    pool = spread_points(region)
    pool = pool[sound(pool, surrogate.points, failed)]
    best = pool[np.argmax(surrogate.mean(pool))]
    size = 0.2
    for _ in range(ROUNDS):
        cloud = np.concatenate([best[None], cloud_around(region, best, size, CLOUD, generator)])
        cloud = cloud[sound(cloud, surrogate.points, failed)]
        best = cloud[np.argmax(surrogate.mean(cloud))]
        size *= 0.55
    return np.asarray(best)


def sound(points: NDArray[np.float64], good: NDArray[np.float64], failed: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Which points are closer to one that has a result than to any that failed; all if none would be."""
    if not len(failed):
        return np.full(len(points), True)
    near_good, near_failed = (np.min(np.linalg.norm(points[:, None] - p[None], axis=2), axis=1) for p in (good, failed))
    found = np.asarray(near_good < near_failed)
    return found if found.any() else np.full(len(points), True)
