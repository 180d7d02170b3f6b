"""Metal lines as one-dimensional quadratic elements."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np

from .circuit import GAUSS_POINTS, GAUSS_WEIGHTS, Builder, Line, shape_slopes
from .placing import SAME_CM, PlacedLine

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

KIND = {"finger": "finger", "busbar": "busbar", "perimeter": "busbar", "wire": "wire"}
"""Kind of line to its place in the loss budget."""


def crossings(line: PlacedLine, others: Sequence[PlacedLine]) -> list[PlacedLine]:
    """Lines across this one that reach it (also those that end at its edge)."""
    found = []
    for other in others:
        if other.axis == line.axis:
            continue
        near = max(line.band, other.band) + SAME_CM
        reaches = other.low - line.half_width - SAME_CM <= line.at <= other.high + line.half_width + SAME_CM
        if reaches and line.low - near <= other.at <= line.high + near:
            found.append(other)
    return found


def stops(line: PlacedLine, others: Sequence[PlacedLine], pads: Sequence[float] = ()) -> NDArray[np.float64]:
    """Places along a line that must be nodes: its ends, crossings with their edges, pads."""
    places = [line.low, line.high, *pads]
    for other in crossings(line, others):
        places += [other.at - other.band, other.at, other.at + other.band]
    inside = np.clip(places, line.low, line.high)
    return distinct(inside)


def distinct(values: NDArray[np.float64] | list[float]) -> NDArray[np.float64]:
    """Sorted values, equal ones once."""
    ordered = np.sort(np.asarray(values, dtype=float))
    return np.asarray(ordered[np.append(True, np.diff(ordered) > SAME_CM)])


def divided(places: NDArray[np.float64], longest: float, least: int = 1) -> NDArray[np.float64]:
    """Equal steps between given places, none above `longest`."""
    parts = [
        np.linspace(a, b, max(least, int(np.ceil((b - a) / longest - 1e-9))) + 1)[:-1] for a, b in pairwise(places)
    ]
    return np.concatenate([*parts, places[-1:]])


def tapered_width_um(
    line: PlacedLine, roots: NDArray[np.float64], tip_um: float | None, s: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Width at places along a line: the full width at the roots, the tip's at free ends and half-way between roots."""
    full = line.metal.width_um
    if tip_um is None or roots.size == 0:
        return np.full(s.size, full)
    tips = np.concatenate([[line.low], 0.5 * (roots[1:] + roots[:-1]), [line.high]])
    places = np.concatenate([roots, tips])
    widths = np.concatenate([np.full(roots.size, full), np.full(tips.size, tip_um)])
    first = np.unique(places, return_index=True)[1]  # a root at an end of the line wins over the tip there
    return np.asarray(np.interp(s, places[first], widths[first]))


def add_line(builder: Builder, line: PlacedLine, s: NDArray[np.float64], width_um: NDArray[np.float64]) -> Line:
    """Nodes and conductances ∫ g x′ v′ ds of a line with g = width/(full width · Ω/cm), shared by mirror images."""
    middle = 0.5 * (s[1:] + s[:-1])
    along = np.concatenate([s, middle])
    across = np.full(along.size, line.at)
    places = np.array([along, across] if line.axis == 0 else [across, along])
    ids = builder.add_nodes(places, f"{line.grid}: {line.name}")
    n = s.size
    built = Line(line, s, np.array([ids[: n - 1], ids[1:n], ids[n:]]), width_um)
    builder.lines.append(built)
    resistance = line.metal.resistance_ohm_per_cm
    if resistance == 0:
        builder.tie(ids)
        return built
    h = np.diff(s)
    for t, weight in zip(GAUSS_POINTS, GAUSS_WEIGHTS, strict=True):
        g = (width_um[:-1] * (1 - t) + width_um[1:] * t) / line.metal.width_um / resistance
        slopes = np.repeat(shape_slopes(t)[:, None], h.size, axis=1)
        builder.couple(KIND[line.kind], line.grid, built.nodes, slopes, line.share * weight * g / h)
    return built
