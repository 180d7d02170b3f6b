"""How well the place of an optimum is known, and how far around it a design is as good."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .places import cloud_around, sound
from .search import Found, Goal

if TYPE_CHECKING:
    from numpy.typing import NDArray

PATHS, CLOUD = 400, 300
DRIFT = 1.1
"""Standard deviation of the drift of the meshes' error over a range, in bars: 95 % lie below what the bars allow."""
STEPS = 400


def possible_tops(goal: Goal, found: Found) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Places and heights of the tops of functions that the points allow.

    The surrogate's posterior covers its own error and scatter of the points within their bars; an error of the meshes
    that drifts from one end of a bar to the other along the range of a variable is added.
    """
    generator = np.random.default_rng(2)
    region, surrogate, d = goal.region, found.surrogate, found.top.size
    sizes = 0.3 * 0.5 ** np.arange(8)
    clouds = [cloud_around(region, found.top, size, CLOUD // 2, generator) for size in sizes]
    pool = np.concatenate([found.top[None], *clouds])
    pool = pool[sound(pool, surrogate.points, found.failed)]
    mean = surrogate.mean(pool)
    high = np.argsort(-mean)[: 4 * CLOUD]
    pool, mean = pool[high], mean[high]
    values, vectors = np.linalg.eigh(surrogate.covariance(pool))
    root = vectors * np.sqrt(np.maximum(values, 0.0))
    paths = mean + generator.standard_normal((PATHS, len(pool))) @ root.T
    drift = DRIFT * found.bar * generator.standard_normal((PATHS, d))
    moved = paths + drift @ (pool - found.top).T
    best = np.argmax(moved, axis=1)
    return pool[best], paths[np.arange(PATHS), best]


def as_good(goal: Goal, found: Found) -> dict[str, tuple[float, float]]:
    """From where to where each variable loses at most `within`, the others at their best."""
    ranges = {}
    region, top = goal.region, found.top
    level = found.surrogate.mean(top[None])[0] - goal.within
    for k, name in enumerate(region.scales.names):
        ends = []
        for end in (0.0, 1.0):
            line = np.repeat(top[None], STEPS + 1, axis=0)
            line[:, k] = np.linspace(top[k], end, STEPS + 1)
            good = (found.surrogate.mean(line) >= level) & region.allowed(line)
            good &= sound(line, found.surrogate.points, found.failed)
            good[0] = True
            last = STEPS if good.all() else int(np.argmin(good)) - 1
            ends.append(float(region.scales.values(line[last][None])[0, k]))
        ranges[name] = (ends[0], ends[1])
    return ranges
