"""Where metal lines are joined to each other and to the terminal."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..units import MM, MOHM
from .lines import crossings
from .placing import SAME_CM, PlacedLine, Window, in_window, placed_lines

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ..errors import Complaints
    from .circuit import Builder, Line
    from .layout import Grid
    from .outline import CellOutline


@dataclass(frozen=True, eq=False)
class Wiring:
    """The lines of one grid within a window, with the places of pads and wire joints on the whole cell.

    Parameters
    ----------
    name : str
    grid : Grid
    lines : list of PlacedLine
    pads, contacts : dict of str to list of float
        By the name of the line: places along it, cm.
    window : Window
    """

    name: str
    grid: Grid
    lines: list[PlacedLine]
    pads: dict[str, list[float]]
    contacts: dict[str, list[float]]
    window: Window

    def of(self, *kinds: str) -> list[PlacedLine]:
        """Lines of some kinds."""
        return [line for line in self.lines if line.kind in kinds]

    def across(self, line: PlacedLine) -> list[PlacedLine]:
        """Lines that cross this one within the window."""
        return crossings(line, self.lines)

    def places(self, line: PlacedLine) -> list[float]:
        """Pads and joints on a line, within its extent."""
        wanted = [*self.pads.get(line.name, []), *self.contacts.get(line.name, [])]
        beneath = [c for name, c in self.contacts.items() if line.kind == "busbar" and _above(self, name, line)]
        wanted += [place for places in beneath for place in places]
        return [p for p in wanted if line.low - SAME_CM <= p <= line.high + SAME_CM]


def _above(wiring: Wiring, name: str, bar: PlacedLine) -> bool:
    """Whether the wire called `name` lies on a busbar."""
    return any(w.name == name and on_busbar(w, [bar]) for w in wiring.of("wire"))


def on_busbar(wire: PlacedLine, lines: Sequence[PlacedLine]) -> list[PlacedLine]:
    """Busbars beneath a wire."""
    bars = (line for line in lines if line.kind == "busbar")
    return [bar for bar in bars if abs(bar.at - wire.at) <= bar.half_width + SAME_CM]


def wiring(outline: CellOutline, name: str, grid: Grid, window: Window) -> Wiring:
    """Lines, pads and joints of a grid."""
    whole = placed_lines(outline, name, grid)
    fingers = [line for line in whole if line.kind == "finger"]
    pads = {line.name: pads_on(line, grid) for line in whole}
    contacts = {line.name: _contacts(line, fingers, grid) for line in whole if line.kind == "wire"}
    return Wiring(name, grid, in_window(whole, window), pads, contacts, window)


def _contacts(wire: PlacedLine, fingers: list[PlacedLine], grid: Grid) -> list[float]:
    """Places of a wire's joints: all fingers it crosses, or those nearest to equally spaced contacts."""
    assert grid.wires is not None
    candidates = np.unique([finger.at for finger in crossings(wire, fingers)])
    if grid.wires.contacts is None or candidates.size == 0:
        return list(candidates)
    n = grid.wires.contacts
    wanted = wire.low + (np.arange(n) + 0.5) / n * (wire.high - wire.low)
    return sorted({float(candidates[np.argmin(np.abs(candidates - x))]) for x in wanted})


def pads_on(line: PlacedLine, grid: Grid) -> list[float]:
    """Places of the collection points on one whole busbar or side of a perimeter busbar, cm."""
    points = grid.collection
    if points is None or line.kind == "finger":
        return []
    if points.per_busbar is not None:
        k = (np.arange(points.per_busbar) + 0.5) / points.per_busbar
        return [] if line.kind == "wire" else list(line.low + k * (line.high - line.low))
    assert points.points_mm is not None
    places = [p[line.axis] * MM for p in points.points_mm if _lies_on(p, line)]
    return [float(np.clip(p, line.low, line.high)) for p in places]


def _lies_on(point_mm: tuple[float, float], line: PlacedLine) -> bool:
    box = line.box
    return all(box[2 * a] - SAME_CM <= point_mm[a] * MM <= box[2 * a + 1] + SAME_CM for a in (0, 1))


def check_pads(problems: Complaints, name: str, grid: Grid, lines: Sequence[PlacedLine]) -> None:
    """Complain of collection points that lie on no metal."""
    points = grid.collection.points_mm if grid.collection is not None else None
    bars = [line for line in lines if line.kind != "finger"]
    for x, y in points if points is not None else ():
        given = f"{name}: the collection point at ({x:g}, {y:g}) mm"
        problems.unless(any(_lies_on((x, y), b) for b in bars), given, "a place on a busbar, wire or perimeter busbar")
    if points is None and grid.collection is not None and not any(b.kind in ("busbar", "perimeter") for b in bars):
        problems.add(f"{name}: collection points without a busbar", "busbars, or wires that lead to the terminal")


def join(builder: Builder, lines: Sequence[Line], wiring: Wiring) -> None:
    """Join lines of one grid where they cross, and wires to busbars beneath."""
    across = {line.placed.name: line for line in lines if line.placed.axis == 0}
    for finger in (line for line in lines if line.placed.axis == 1):
        for bar in wiring.across(finger.placed):
            if bar.kind == "wire":
                _to_wire(builder, finger, across[bar.name], wiring)
            else:
                _to_busbar(builder, finger, across[bar.name])
    for wire in wiring.of("wire"):
        for bar in on_busbar(wire, wiring.lines):
            for x in wiring.places(wire):
                _joint(builder, wiring.grid, across[wire.name].at(x), across[bar.name].at(x), wire.share)


def _to_wire(builder: Builder, finger: Line, wire: Line, wiring: Wiring) -> None:
    x = finger.placed.at
    joined = any(abs(x - place) < SAME_CM for place in wiring.contacts[wire.placed.name])
    if joined and finger.placed.kind == "finger" and not on_busbar(wire.placed, wiring.lines):
        share = finger.placed.share * wire.placed.share
        _joint(builder, wiring.grid, finger.at(wire.placed.at), wire.at(x), share)


def _to_busbar(builder: Builder, finger: Line, bar: Line) -> None:
    """Under a busbar the finger is one with it over the busbar's width."""
    here = bar.at(float(np.clip(finger.placed.at, bar.s[0], bar.s[-1])))
    middle = 0.5 * (finger.s[1:] + finger.s[:-1])
    vertices, middles = (np.abs(s - bar.placed.at) <= bar.placed.band + SAME_CM for s in (finger.s, middle))
    builder.tie(np.concatenate([[here], finger.vertices[vertices], finger.nodes[2, middles]]))


def _joint(builder: Builder, grid: Grid, a: int, b: int, share: float) -> None:
    assert grid.wires is not None
    resistance = grid.wires.joint_resistance_mohm * MOHM
    if resistance > 0:
        builder.resistor("joint", "wires", a, b, share / resistance)
    else:
        builder.tie([a, b])


def add_terminals(builder: Builder, lines: Sequence[Line], wiring: Wiring) -> None:
    """Hold collection points and wire ends at the terminal."""
    grid, window = wiring.grid, wiring.window
    for line in lines:
        placed = line.placed
        for place in wiring.pads.get(placed.name, []):
            if placed.low - SAME_CM <= place <= placed.high + SAME_CM:
                assert grid.collection is not None
                share = placed.share * window.share(placed.axis, place)
                _terminal(builder, line.at(place), "collection points", grid.collection.resistance_mohm, share)
        if placed.kind == "wire" and grid.wires is not None:
            for end, side in ((placed.low, "low"), (placed.high, "high")):
                if grid.wires.ends in (side, "both") and window.share(placed.axis, end) == 1:
                    _terminal(builder, line.at(end), "wire ends", grid.wires.end_resistance_mohm, placed.share)


def _terminal(builder: Builder, node: int, name: str, resistance_mohm: float, share: float) -> None:
    builder.terminal(node, name, share / (resistance_mohm * MOHM) if resistance_mohm > 0 else None)


def roots(finger: PlacedLine, wiring: Wiring) -> NDArray[np.float64]:
    """Where current leaves a finger: edges of busbars, and wires, along it; cm, sorted."""
    places = []
    for bar in wiring.across(finger):
        joined = bar.kind != "wire" or any(abs(finger.at - p) < SAME_CM for p in wiring.contacts[bar.name])
        if joined:
            places += [bar.at - bar.band, bar.at + bar.band]
    return np.unique(np.clip(places, finger.low, finger.high))
