"""Resolved mode: the sheet between the fingers on a two-dimensional mesh, −∇·(∇x/R_sh) = J(u), contacts by area.

J(u) is that of the cell without lateral transport, lit or under metal. A finger's potential depends on y alone (its
metal is an equipotential across); under it the current density into the metal is (x_sheet − x_metal)/ρc, so that
crowding at the finger's edges follows from the equations. With two grids there are two sheets on one mesh.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..errors import Complaints
from ..units import MOHM
from .circuit import Builder, Circuit, Line
from .joints import Wiring, add_terminals, join, roots
from .lines import add_line, distinct, tapered_width_um
from .local_laws import LocalLaws, laws_at
from .placing import SAME_CM, PlacedLine
from .shading import shading_bands
from .sheet_mesh import SheetSpace, plan_axes, plan_mesh, sheet_space

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from .layout import GridLayout
    from .placing import Window


def resolved_circuit(
    layout: GridLayout, laws: LocalLaws, window: Window, wirings: Sequence[Wiring], fineness: float = 1.0
) -> tuple[Circuit, SheetSpace]:
    """The equations of the resolved mode.

    Parameters
    ----------
    layout : GridLayout
    laws : LocalLaws
    window : Window
    wirings : sequence of Wiring
        One per grid.
    fineness : float
        Divides all steps of the mesh.

    Returns
    -------
    (Circuit, SheetSpace)
        The nodes of the first sheet come first, in the order of the space.

    Raises
    ------
    InputError
        Sheet or contact not stated, an interdigitated rear, a part without a path to a terminal.
    """
    _check(layout)
    axes = plan_axes(window, wirings, (laws.borders(0), laws.borders(1)), fineness)
    space = sheet_space(plan_mesh(*axes, layout.outline))
    builder, sheets = Builder(), []
    slopes, nodes = space.slopes(), space.nodes()
    for wiring in wirings:
        ids = builder.add_nodes(space.places, f"{wiring.name}: the sheet")
        sheets.append(ids)
        conductance = space.weight / _sheet(wiring)
        for axis in (0, 1):
            builder.couple("sheet", wiring.name, ids[nodes], slopes[axis], conductance, space.per_cell)
    for wiring, ids in zip(wirings, sheets, strict=True):
        _add_metal(builder, wiring, ids, space, axes)
    _feed(builder, layout, laws, wirings, sheets, space)
    if laws.edge is not None:
        _feed_edges(builder, layout, laws, window, wirings, sheets, space)
    return builder.circuit(), space


def _check(layout: GridLayout) -> None:
    problems = Complaints('cell with mode="resolved"')
    if layout.interdigitated:
        problems.add("an interdigitated rear", "grids on different faces", 'mode="smeared"')
    for name, grid in layout.grids.items():
        for quantity in ("sheet_resistance_ohm_per_sq", "contact_resistivity_mohm_cm2"):
            given = f"{name}: {quantity} is not stated"
            problems.unless(getattr(grid, quantity) is not None, given, "a number", f"Grid({quantity}=…)")
    problems.raise_if_any()


def _sheet(wiring: Wiring) -> float:
    assert wiring.grid.sheet_resistance_ohm_per_sq is not None
    return float(wiring.grid.sheet_resistance_ohm_per_sq)


def _add_metal(
    builder: Builder,
    wiring: Wiring,
    ids: NDArray[np.int64],
    space: SheetSpace,
    axes: tuple[NDArray[np.float64], NDArray[np.float64]],
) -> None:
    """Lines on the grid's own lines, joined, contacted and led to the terminal."""
    built = [_line(builder, line, wiring, axes[line.axis]) for line in wiring.lines]
    join(builder, built, wiring)
    add_terminals(builder, built, wiring)
    grid = wiring.grid
    bars = [b for b in built if b.placed.kind == "busbar" and grid.busbars is not None and grid.busbars.touches_sheet]
    frame = [b for b in built if b.placed.kind == "perimeter" and grid.perimeter is not None]
    frame = frame if grid.perimeter is not None and grid.perimeter.touches_sheet else []
    taken = np.zeros(space.weight.size, dtype=bool)
    for line in [*frame, *bars, *(b for b in built if b.placed.kind == "finger")]:
        taken |= _contact(builder, wiring, line, ids, space, taken)


def _line(builder: Builder, line: PlacedLine, wiring: Wiring, axis: NDArray[np.float64]) -> Line:
    """A line whose nodes are grid lines."""
    inside = (axis > line.low + 10 * SAME_CM) & (axis < line.high - 10 * SAME_CM)
    s = distinct(np.concatenate([[line.low], axis[inside], [line.high]]))
    if line.kind != "finger":
        return add_line(builder, line, s, np.full(s.size, line.metal.width_um))
    assert wiring.grid.fingers is not None
    return add_line(builder, line, s, tapered_width_um(line, roots(line, wiring), wiring.grid.fingers.tip_width_um, s))


def _contact(
    builder: Builder, wiring: Wiring, line: Line, ids: NDArray[np.int64], space: SheetSpace, taken: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """Contact resistance between a line and the sheet beneath, by area; returns the points it covers."""
    placed, (x, y) = line.placed, space.centres
    across, along = (y, x) if placed.axis == 0 else (x, y)
    on = (np.abs(across - placed.at) < placed.half_width) & (along > placed.low) & (along < placed.high) & ~taken
    assert wiring.grid.contact_resistivity_mohm_cm2 is not None
    resistivity = wiring.grid.contact_resistivity_mohm_cm2 * MOHM
    if resistivity == 0:
        _tie(builder, line, ids, space)
        return np.asarray(on)
    k = np.flatnonzero(on)
    metal, shape = line.values(space.points[placed.axis, k])
    nodes = np.concatenate([ids[space.nodes()[:, k]], metal])
    differences = np.concatenate([space.values()[:, k], -shape])
    builder.couple("contact", wiring.name, nodes, differences, space.weight[k] / resistivity, space.per_cell)
    return np.asarray(on)


def _tie(builder: Builder, line: Line, ids: NDArray[np.int64], space: SheetSpace) -> None:
    """An ideal contact: sheet nodes under the metal are one with the metal's node beside them."""
    placed, places = line.placed, space.places
    across = np.abs(places[1 - placed.axis] - placed.at) <= placed.half_width + 10 * SAME_CM
    along = places[placed.axis]
    inside = np.flatnonzero(across & (along >= placed.low - 10 * SAME_CM) & (along <= placed.high + 10 * SAME_CM))
    own = np.concatenate([line.vertices, line.nodes[2]])
    where = np.concatenate([line.s, 0.5 * (line.s[1:] + line.s[:-1])])
    order = np.argsort(where)
    k = np.clip(np.searchsorted(where[order], along[inside]), 1, where.size - 1)
    left = along[inside] - where[order][k - 1] < where[order][k] - along[inside]
    for node, sheet in zip(own[order][k - left], ids[inside], strict=True):
        builder.tie([node, sheet])


def _feed(
    builder: Builder,
    layout: GridLayout,
    laws: LocalLaws,
    wirings: Sequence[Wiring],
    sheets: list[NDArray[np.int64]],
    space: SheetSpace,
) -> None:
    """J(u) at the quadrature points of the sheet."""
    nodes, values, weight, boxes = space.nodes(), space.values(), space.weight, space.boxes
    n_local = nodes.shape[0]
    all_nodes = np.concatenate([ids[nodes] for ids in sheets])
    signs = np.repeat([wiring.grid.sign for wiring in wirings], n_local)[:, None]
    all_values = signs * np.tile(values, (len(wirings), 1))
    bands = shading_bands(layout, wirings, fingers=True)
    for name, mask, chain in laws_at(laws, space.points, space.centres, bands):
        on = np.flatnonzero(mask)
        builder.feed(name, boxes[:, on], weight[on], all_nodes[:, on], all_values[:, on], chain(on))


def _feed_edges(
    builder: Builder,
    layout: GridLayout,
    laws: LocalLaws,
    window: Window,
    wirings: Sequence[Wiring],
    sheets: list[NDArray[np.int64]],
    space: SheetSpace,
) -> None:
    """Edge recombination at quadrature points of the outline."""
    from skfem import FacetBasis

    from ..transport.spaces import cell_mapping
    from .cell_current import nothing

    assert laws.edge is not None
    cells = space.mesh.cells
    facets = cells.boundary_facets()
    middle = cells.p[:, cells.facets[:, facets]].mean(axis=1)
    mirror = np.zeros(facets.size, dtype=bool)
    for axis, at in window.mirrors:
        mirror |= np.abs(middle[axis] - at) < 10 * SAME_CM
    chosen = facets[laws.edge.holds(middle, layout.outline.size_cm) & ~mirror]
    if chosen.size == 0:
        return
    basis = FacetBasis(cells, space.basis.elem, facets=chosen, mapping=cell_mapping(space.mesh), intorder=4)
    points = basis.dx.shape[1]
    nodes = np.repeat(basis.element_dofs, points, axis=1)
    values = np.array([np.broadcast_to(np.asarray(phi[0]), basis.dx.shape).ravel() for phi in basis.basis])
    signs = np.repeat([wiring.grid.sign for wiring in wirings], nodes.shape[0])[:, None]
    x, y = np.asarray(basis.global_coordinates()).reshape(2, -1)
    builder.feed(
        "edge", np.array([x, x, y, y]), np.asarray(basis.dx).ravel(), np.concatenate([ids[nodes] for ids in sheets]),
        signs * np.tile(values, (len(wirings), 1)), (("", nothing), ("edge recombination", laws.edge.law)),
    )  # fmt: skip
