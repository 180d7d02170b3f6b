"""The equations of a drawing: those of the resolved mode, with metal on lines of the mesh."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..units import MM, MOHM, UM
from .cell_current import Law, mixed, nothing
from .circuit import GAUSS_POINTS, GAUSS_WEIGHTS, Builder, Circuit, shape_slopes, shapes
from .metal import MetalLine

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .drawing import PlanDrawing
    from .local_laws import LocalLaws
    from .sheet_mesh import SheetSpace


@dataclass(frozen=True, eq=False)
class DrawnLine:
    """Metal on facets: its name, and start, end and middle node of each facet, shape (3, n)."""

    name: str
    metal: MetalLine
    nodes: NDArray[np.int64]
    facets: NDArray[np.int64]


def drawn_circuit(drawing: PlanDrawing, laws: LocalLaws, space: SheetSpace) -> tuple[Circuit, tuple[DrawnLine, ...]]:
    """The equations of a drawing, and its metal."""
    builder = Builder()
    sheet = builder.add_nodes(space.places, "the sheet")
    slopes, nodes = space.slopes(), space.nodes()
    for axis in (0, 1):
        conductance = space.weight / drawing.sheet_resistance_ohm_per_sq
        builder.couple("sheet", "drawing", sheet[nodes], slopes[axis], conductance, space.per_cell)
    metal_of = _metal_nodes(builder, drawing, space)
    drawn = []
    for name, metal in drawing.lines.items():
        facets = np.asarray(drawing.mesh.surfaces[name])
        below = _facet_nodes(space, facets)
        line = DrawnLine(name, metal, metal_of[below], facets)
        _conduct(builder, drawing, line, below)
        _shade(builder, drawing, laws, line, below)
        drawn.append(line)
    _terminals(builder, drawing, space, metal_of)
    _feed_areas(builder, drawing, laws, space)
    return builder.circuit(), tuple(drawn)


def _facet_nodes(space: SheetSpace, facets: NDArray[np.int64]) -> NDArray[np.int64]:
    """Start, end and middle node of facets, (3, n)."""
    ends = space.basis.nodal_dofs[0][space.mesh.cells.facets[:, facets]]
    return np.vstack([ends, space.basis.facet_dofs[0][facets]])


def lengths_cm(cells: Any, facets: NDArray[np.int64]) -> NDArray[np.float64]:
    """Lengths of facets."""
    a, b = cells.p[:, cells.facets[0, facets]], cells.p[:, cells.facets[1, facets]]
    return np.asarray(np.hypot(*(b - a)))


def _metal_nodes(builder: Builder, drawing: PlanDrawing, space: SheetSpace) -> NDArray[np.int64]:
    """For each node of the sheet that of the metal above it, −1 without."""
    facets = [np.asarray(drawing.mesh.surfaces[name]) for name in drawing.lines]
    covered = (
        np.unique(np.concatenate([_facet_nodes(space, f).ravel() for f in facets])) if facets else np.zeros(0, int)
    )
    metal_of = np.full(space.places.shape[1], -1)
    metal_of[covered] = builder.add_nodes(space.places[:, covered], "a metal line")
    return metal_of


def _conduct(builder: Builder, drawing: PlanDrawing, line: DrawnLine, below: NDArray[np.int64]) -> None:
    """∫ g x′ v′ along the line, and its contact to the sheet."""
    h, resistance = lengths_cm(drawing.mesh.cells, line.facets), line.metal.resistance_ohm_per_cm
    contact = _contact_ohm_cm(drawing, line)
    for t, weight in zip(GAUSS_POINTS, GAUSS_WEIGHTS, strict=True):
        if resistance > 0:
            slopes = np.repeat(shape_slopes(t)[:, None], h.size, axis=1)
            builder.couple("finger", line.name, line.nodes, slopes, weight / resistance / h)
        if drawing.contact_resistivity_mohm_cm2 > 0:
            shape = np.repeat(shapes(t)[:, None], h.size, axis=1)
            nodes, differences = np.concatenate([below, line.nodes]), np.concatenate([shape, -shape])
            builder.couple("contact", line.name, nodes, differences, weight * h / contact)
    if resistance == 0:
        for a, b in ((0, 1), (0, 2)):
            _tie_pairs(builder, line.nodes[a], line.nodes[b])
    if drawing.contact_resistivity_mohm_cm2 == 0:
        _tie_pairs(builder, line.nodes.ravel(), below.ravel())


def _tie_pairs(builder: Builder, one: NDArray[np.int64], other: NDArray[np.int64]) -> None:
    for pair in zip(one.tolist(), other.tolist(), strict=True):
        builder.tie(pair)


def _contact_ohm_cm(drawing: PlanDrawing, line: DrawnLine) -> NDArray[np.float64]:
    """Contact resistance × length of each facet, with crowding."""
    rhoc, sheet = drawing.contact_resistivity_mohm_cm2 * MOHM, drawing.sheet_resistance_ohm_per_sq
    outer = drawing.mesh.cells.f2t[1, line.facets] < 0
    if rhoc == 0:
        return np.ones(outer.size)
    width, transfer = line.metal.width_um * UM, (rhoc / sheet) ** 0.5
    one_side = (rhoc * sheet) ** 0.5 / np.tanh(width / transfer)
    return np.asarray(np.where(outer, one_side, 0.5 * (rhoc * sheet) ** 0.5 / np.tanh(width / 2 / transfer)))


def _shade(builder: Builder, drawing: PlanDrawing, laws: LocalLaws, line: DrawnLine, below: NDArray[np.int64]) -> None:
    """What a line takes from the sheet beneath: light over its shading width, recombination over its width."""
    cells = drawing.mesh.cells
    a, b = (cells.p[:, cells.facets[k, line.facets]] for k in (0, 1))
    t = np.tile(GAUSS_POINTS, line.facets.size)
    places = np.repeat(a, 3, axis=1) + np.repeat(b - a, 3, axis=1) * t
    boxes = np.array([places[0], places[0], places[1], places[1]])
    length = np.repeat(lengths_cm(cells, line.facets), 3) * np.tile(GAUSS_WEIGHTS, line.facets.size)
    here = laws.current
    no_light: Law = mixed((-1.0, here.law), (1.0, here.dark))
    takes = [("shading by lines", line.metal.shaded_um, no_light)]
    if laws.under_metal is not None:
        extra = mixed((1.0, laws.under_metal.dark), (-1.0, here.dark))
        takes.append(("recombination under metal", line.metal.width_um, extra))
    for name, width_um, law in takes:
        chain = (("", nothing), (name, law))
        builder.feed(name, boxes, length * width_um * UM, np.repeat(below, 3, axis=1), shapes(t), chain)


def _terminals(builder: Builder, drawing: PlanDrawing, space: SheetSpace, metal_of: NDArray[np.int64]) -> None:
    for name, resistance_mohm in drawing.terminals.items():
        nodes = np.unique(_facet_nodes(space, np.asarray(drawing.mesh.surfaces[name])))
        nodes = metal_of[nodes] if name in drawing.lines else nodes
        builder.tie(nodes)
        conductance = 1 / (resistance_mohm * MOHM) if resistance_mohm > 0 else None
        builder.terminal(int(nodes[0]), name, conductance)
    covered = np.flatnonzero(metal_of >= 0)
    for x, y in drawing.points_mm:
        distance = np.hypot(space.places[0, covered] - x * MM, space.places[1, covered] - y * MM)
        builder.terminal(int(metal_of[covered[int(np.argmin(distance))]]), "points", None)


def _feed_areas(builder: Builder, drawing: PlanDrawing, laws: LocalLaws, space: SheetSpace) -> None:
    """J(u) of every named area, and of the rest."""
    owner = np.full(drawing.mesh.cells.t.shape[1], -1)
    names = list(drawing.currents)
    for k, name in enumerate(names):
        owner[drawing.mesh.volumes[name]] = k
    at = np.repeat(owner, space.basis.dx.shape[1])
    nodes, values, weight, boxes = space.nodes(), space.values(), space.weight, space.boxes
    for k in np.unique(at):
        on = np.flatnonzero(at == k)
        chain: tuple[tuple[str, Law], ...] = (("", laws.current.law),)
        if k >= 0:
            chain = (*chain, (names[k], drawing.currents[names[k]].law))
        builder.feed(names[k] if k >= 0 else "lit", boxes[:, on], weight[on], nodes[:, on], values[:, on], chain)
