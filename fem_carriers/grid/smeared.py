"""Smeared mode: fingers are lines fed by the whole unit cell's J(u) over the strip that is nearest to them.

There is no sheet between the fingers: its lateral loss, the contacts and the fingers' shading are in the unit cell's
curve already. With two grids, each place feeds from the nearest finger of one to the nearest finger of the other.
"""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from .circuit import GAUSS_POINTS, GAUSS_WEIGHTS, Builder, Circuit, Line
from .joints import Wiring, add_terminals, join, roots
from .lines import add_line, distinct, divided, stops, tapered_width_um
from .local_laws import LocalLaws, laws_at
from .placing import SAME_CM, PlacedLine
from .shading import shading_bands

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from .layout import GridLayout
    from .placing import Window

ELEMENTS = 3
"""Least number of quadratic elements of a finger between neighbouring crossings."""
TAPERED_ELEMENTS = 8


def smeared_circuit(layout: GridLayout, laws: LocalLaws, window: Window, wirings: Sequence[Wiring]) -> Circuit:
    """The equations of the smeared mode.

    Parameters
    ----------
    layout : GridLayout
    laws : LocalLaws
    window : Window
    wirings : sequence of Wiring
        One per grid.

    Raises
    ------
    InputError
        For breaks, a perimeter without fingers, or a part without a path to a terminal.
    """
    _check(layout)
    builder = Builder()
    nets = []
    for wiring in wirings:
        built = [_line(builder, line, wiring) for line in wiring.lines]
        join(builder, built, wiring)
        add_terminals(builder, built, wiring)
        nets.append([line for line in built if line.placed.axis == 1])  # fingers, and sides of a perimeter busbar
    signs = [wiring.grid.sign for wiring in wirings]
    bands = shading_bands(layout, wirings, fingers=False)
    more = [*bands.edges(1), *laws.borders(1)]
    strips = _strips(nets, window, [*bands.edges(0), *laws.borders(0)])
    points = [_points(layout, window, (low, high), fingers, signs, more) for low, high, fingers in strips]
    boxes, weight, places, nodes, values = (np.concatenate(column, axis=-1) for column in zip(*points, strict=True))
    for name, part, chain in laws_at(laws, places, places, bands):
        on = np.flatnonzero(part & (weight > 0))
        builder.feed(name, boxes[:, on], weight[on], nodes[:, on], values[:, on], chain(on))
    return builder.circuit()


def _check(layout: GridLayout) -> None:
    problems = Complaints('cell with mode="smeared"')
    for name, grid in layout.grids.items():
        if grid.breaks is not None:
            problems.add(f"{name}: broken fingers", "fingers without breaks", 'mode="resolved"')
        if grid.fingers is None:
            problems.add(
                f"{name}: a grid without fingers", "fingers that take the unit cell's current", 'mode="resolved"'
            )
    problems.raise_if_any()


def _line(builder: Builder, line: PlacedLine, wiring: Wiring) -> Line:
    """A line with its nodes; only fingers are fed along their length."""
    places = stops(line, wiring.lines, wiring.places(line))
    if line.kind != "finger":
        return add_line(builder, line, places, np.full(places.size, line.metal.width_um))
    ends = roots(line, wiring)
    assert wiring.grid.fingers is not None
    tip = wiring.grid.fingers.tip_width_um
    if tip is not None:
        places = distinct(np.concatenate([places, 0.5 * (ends[1:] + ends[:-1])]))
    s = divided(places, np.inf, ELEMENTS if tip is None else TAPERED_ELEMENTS)
    return add_line(builder, line, s, tapered_width_um(line, ends, tip, s))


def _strips(nets: list[list[Line]], window: Window, more: list[float]) -> list[tuple[float, float, list[list[Line]]]]:
    """Strips in x with the finger of each net that is nearest; pieces of one finger come together."""
    edges, columns = [*window.x, *more], []
    for net in nets:
        at = distinct([line.placed.at for line in net])
        columns.append(at)
        edges += list(0.5 * (at[1:] + at[:-1]))
    borders = distinct(np.clip(edges, *window.x))
    strips = []
    for low, high in pairwise(borders):
        nearest = [at[int(np.argmin(np.abs(at - 0.5 * (low + high))))] for at in columns]
        found = [
            [line for line in net if abs(line.placed.at - x) < SAME_CM] for net, x in zip(nets, nearest, strict=True)
        ]
        strips.append((float(low), float(high), found))
    return strips


def _points(
    layout: GridLayout,
    window: Window,
    strip: tuple[float, float],
    fingers: list[list[Line]],
    signs: list[int],
    more: list[float],
) -> tuple[NDArray[Any], ...]:
    """Gauss points along a strip: boxes, areas, places, nodes of the nearest fingers and values of B there."""
    y = _borders(layout, window, strip, fingers, more)
    h = np.diff(y)
    at = (y[:-1, None] + h[:, None] * GAUSS_POINTS).ravel()
    width, left, right = _widths(layout, strip, at)
    weight = (h[:, None] * GAUSS_WEIGHTS).ravel() * width
    nodes, values = zip(*(net[0].values(at) for net in fingers), strict=True)
    signed = [sign * value for sign, value in zip(signs, values, strict=True)]
    steps = np.append(0.0, np.cumsum(GAUSS_WEIGHTS))
    low, high = ((y[:-1, None] + h[:, None] * part).ravel() for part in (steps[:-1], steps[1:]))
    places = np.array([0.5 * (left + right), at])
    return np.array([left, right, low, high]), weight, places, np.concatenate(nodes), np.concatenate(signed)


def _borders(
    layout: GridLayout, window: Window, strip: tuple[float, float], fingers: list[list[Line]], more: list[float]
) -> NDArray[np.float64]:
    """Borders of the pieces along a strip: finger nodes, shading, corners of the outline."""
    corners = layout.outline.corners
    lows, highs = layout.outline.chord(0, np.array(strip))
    places = [*window.y, *corners[:, 1], *more, *lows, *highs]
    for net in fingers:
        for line in net:
            places += list(line.s)
    inside = np.array([p for p in places if window.y[0] <= p <= window.y[1]])
    return distinct(inside)


def _widths(
    layout: GridLayout, strip: tuple[float, float], y: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Width of a strip inside the outline at heights y, and its two sides."""
    if layout.outline.is_rectangle:
        left, right = np.full(y.size, strip[0]), np.full(y.size, strip[1])
    else:
        low, high = layout.outline.chord(1, y)
        left, right = np.maximum(low, strip[0]), np.minimum(high, strip[1])
    return np.maximum(right - left, 0.0), left, right
