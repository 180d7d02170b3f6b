"""Coordinate axes in µm along the edges of a box: lines, ticks, and where their numbers and titles stand."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

TICK, NUMBER, TITLE = 0.012, 0.035, {0: 0.08, 1: 0.11, 2: 0.11}
"""Distances from the box, in sizes of the box; of the title by axis."""


@dataclass(frozen=True)
class Axis:
    """One axis as drawn.

    Parameters
    ----------
    segments : (n, 2, 3) array
        The line and its ticks.
    at : list of (3,) array
        Places of the texts.
    texts : list of str
        Numbers, then the title.
    """

    segments: NDArray[np.float64]
    at: list[NDArray[np.float64]]
    texts: list[str]


def ticks(low: float, high: float, most: int) -> NDArray[np.float64]:
    """Round numbers from `low` to `high`, at most about `most` intervals."""
    from matplotlib.ticker import MaxNLocator

    values = np.asarray(MaxNLocator(most, steps=[1, 2, 2.5, 4, 5, 10]).tick_values(low, high), dtype=float)
    margin = 1e-6 * (high - low)
    return np.asarray(values[(values >= low - margin) & (values <= high + margin)])


def axes(bounds: Any, stretch_z: float) -> list[Axis]:
    """Axes along x, y and z of a box; of a flat one (no extent in y) along x and z.

    Parameters
    ----------
    bounds : (6,) sequence
        As drawn: x, y, z from and to.
    stretch_z : float
        Depth is drawn larger by this; the numbers are true.
    """
    low, high = np.array(bounds[0::2], dtype=float), np.array(bounds[1::2], dtype=float)
    flat = high[1] == low[1]
    left, back, front, down = np.array([[-1.0, 0, 0], [-0.6, 0.8, 0], [0, -1, 0], [0, 0, -1]])
    found = [_axis("x (µm)", 0, low, low, high, down if flat else front, 1.0)]
    if not flat:
        found.append(_axis("y (µm)", 1, low, low, high, left, 1.0))
    corner = np.array([low[0], high[1], low[2]])  # outermost on the left in the first view
    found.append(_axis("z (µm)", 2, corner, low, high, left if flat else back, stretch_z))
    return found


def other_edges(bounds: Any, drawn: list[Axis]) -> NDArray[np.float64]:
    """Edges of the box that no axis takes, (n, 2, 3)."""
    low, high = np.array(bounds[0::2], dtype=float), np.array(bounds[1::2], dtype=float)
    corners = np.array([(x, y, z) for x in (0, 1) for y in (0, 1) for z in (0, 1)])
    pairs = [(a, b) for k, a in enumerate(corners) for b in corners[k:] if np.abs(a - b).sum() == 1]
    edges = low + (high - low) * np.array(pairs)
    taken = np.array([a.segments[0].mean(axis=0) for a in drawn])
    apart = np.linalg.norm(edges.mean(axis=1)[:, None] - taken, axis=2).min(axis=1)
    return np.asarray(edges[apart > 1e-6 * np.linalg.norm(high - low)])


def _axis(title: str, i: int, start: Any, low: Any, high: Any, outward: Any, stretch: float) -> Axis:
    size = float(np.linalg.norm(high - low))
    share = (high[i] - low[i]) / size
    values = ticks(low[i] / stretch, high[i] / stretch, 6 if share > 0.5 else 4 if share > 0.25 else 2)
    where = np.tile(start, (len(values), 1))
    where[:, i] = values * stretch
    end = start.copy()
    end[i] = high[i]
    marks = np.stack([where, where + TICK * size * outward], axis=1)
    middle = (start + end) / 2 + TITLE[i] * size * outward
    texts = [f"{v:g}".replace("-", "−") for v in values] + [title]
    return Axis(np.concatenate([[[start, end]], marks]), [*(where + NUMBER * size * outward), middle], texts)
