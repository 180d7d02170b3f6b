"""Mesh of the sheet in plan: graded quads on a rectangle, the same grid cut along the outline elsewhere; in cm."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..meshing.extrude import tensor_mesh
from ..meshing.grading import graded_axis
from ..meshing.mesh import Mesh
from ..transport.spaces import lagrange_element
from ..units import MOHM, UM
from .joints import roots
from .lines import distinct, divided
from .outline import CellOutline, clip_box
from .placing import SAME_CM

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from .joints import Wiring
    from .placing import PlacedLine, Window

GROWTH = 4.0
"""Ratio of neighbouring steps beside the edges of fingers."""
PER_PITCH = 2
"""Least number of largest steps between fingers."""
WITHOUT_FINGERS = 12
"""Least number of steps across a piece without fingers."""
END_STEPS = 12
"""First step beside the free end of a finger, as a part of the pitch."""
PER_SPAN = 2
"""Least number of steps along fingers between crossings."""


def plan_axes(
    window: Window, wirings: Sequence[Wiring], borders: tuple[list[float], list[float]], fineness: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Grid lines in x and y, cm: fine beside finger edges, on every end and crossing.

    Parameters
    ----------
    window : Window
    wirings : sequence of Wiring
    borders : two lists of float
        Further lines in x and y.
    fineness : float
        Divides all steps.
    """
    fine: list[tuple[float, float]] = []
    ends: list[tuple[float, float]] = []
    fixed_x, fixed_y = list(borders[0]), list(borders[1])
    parts = WITHOUT_FINGERS if all(w.grid.fingers is None for w in wirings) else 1
    largest, span = np.ptp(window.x) / parts, np.ptp(window.y) / parts
    for wiring in wirings:
        first = _first_step(wiring) / fineness
        verticals = [line for line in wiring.lines if line.axis == 1]
        for line in verticals:
            fine += [(line.at - line.half_width, first), (line.at + line.half_width, first)]
            fixed_x.append(line.at)
            fixed_y += [line.low, line.high]
            fixed_y += _tips(line, wiring)
            ends += _free_ends(line, wiring, window, fineness)
        for line in wiring.lines:
            if line.axis == 0:
                ends += _touching(line, wiring, fineness)
                half = line.metal.shaded_um * UM / 2 if line.kind == "wire" else line.half_width
                fixed_y += [line.at - half, line.at, line.at + half]
                fixed_x += [line.low, line.high, *wiring.places(line)]
            else:
                fixed_y += wiring.places(line)
        if wiring.grid.fingers is not None:
            bars = [line for line in wiring.lines if line.axis == 0]
            largest = min(largest, wiring.grid.fingers.pitch_um * UM / PER_PITCH)
            span = min(span, np.ptp(window.y) / max(len(bars), 1) / PER_SPAN)
    x = _graded(window.x, fine, fixed_x, largest / fineness)
    y = _graded(window.y, ends, fixed_y, span / fineness)
    return x, y


def _tips(line: PlacedLine, wiring: Wiring) -> list[float]:
    """Where a tapered finger is narrowest between two roots."""
    fingers = wiring.grid.fingers
    if line.kind != "finger" or fingers is None or fingers.tip_width_um is None:
        return []
    ends = roots(line, wiring)
    return list(0.5 * (ends[1:] + ends[:-1]))


def _free_ends(line: PlacedLine, wiring: Wiring, window: Window, fineness: float) -> list[tuple[float, float]]:
    """Ends of a finger inside the cell, where the sheet's current turns towards it, with the first step there."""
    if line.kind != "finger" or wiring.grid.fingers is None:
        return []
    first = wiring.grid.fingers.pitch_um * UM / END_STEPS / fineness
    inside = [end for end in (line.low, line.high) if window.y[0] + SAME_CM < end < window.y[1] - SAME_CM]
    joined = roots(line, wiring)
    return [(end, first) for end in inside if joined.size == 0 or np.abs(joined - end).min() > SAME_CM]


def _touching(line: PlacedLine, wiring: Wiring, fineness: float) -> list[tuple[float, float]]:
    """Edges of a busbar that touches the sheet, whose current turns towards it there, with the first step."""
    metal = {"busbar": wiring.grid.busbars, "perimeter": wiring.grid.perimeter}.get(line.kind)
    if wiring.grid.fingers is None or not getattr(metal, "touches_sheet", False):
        return []
    first = wiring.grid.fingers.pitch_um * UM / END_STEPS / fineness
    return [(line.at - line.half_width, first), (line.at + line.half_width, first)]


def _graded(
    extent: tuple[float, float], fine: list[tuple[float, float]], fixed: list[float], largest: float
) -> NDArray[np.float64]:
    """Graded axis with all fixed places; fine places outside are left out, nearly equal ones become one."""
    places = _within([*(p for p, _ in fine), *fixed], extent)
    steps: dict[int, float] = {}
    for p, h in fine:
        k = int(np.argmin(np.abs(places - p)))
        if abs(places[k] - p) < 10 * SAME_CM:
            steps[k] = min(h, steps.get(k, h))
    graded = [(float(places[k]), h) for k, h in steps.items()]
    others = [float(p) for k, p in enumerate(places) if k not in steps]
    if not graded:
        return divided(places, largest)
    return graded_axis(extent[0], extent[1], graded, GROWTH, largest, others)


def _within(places: list[float], extent: tuple[float, float]) -> NDArray[np.float64]:
    inside = [p for p in places if extent[0] + 10 * SAME_CM < p < extent[1] - 10 * SAME_CM]
    return np.concatenate([[extent[0]], distinct(inside) if inside else [], [extent[1]]])


def _first_step(wiring: Wiring) -> float:
    """The transfer length √(ρc/R_sh) or the half-width, whichever is less; cm."""
    grid = wiring.grid
    widths = [line.half_width for line in wiring.lines if line.axis == 1]
    assert grid.sheet_resistance_ohm_per_sq is not None
    contact = (grid.contact_resistivity_mohm_cm2 or 0.0) * MOHM
    transfer = (contact / grid.sheet_resistance_ohm_per_sq) ** 0.5 if contact > 0 else np.inf
    return float(min([transfer, *widths, 0.05]))


@dataclass(frozen=True, eq=False)
class SheetSpace:
    """Quadratic elements on the mesh of the sheet, evaluated at quadrature points.

    Parameters
    ----------
    mesh : Mesh
    basis : skfem.Basis
    """

    mesh: Mesh
    basis: Any

    @property
    def per_cell(self) -> int:
        """Quadrature points of each cell."""
        return int(self.basis.dx.shape[1])

    @property
    def places(self) -> NDArray[np.float64]:
        """Nodes, shape (2, n), cm."""
        return np.asarray(self.basis.doflocs)

    @property
    def points(self) -> NDArray[np.float64]:
        """Quadrature points, shape (2, n_cells · n_points), cm."""
        return np.asarray(self.basis.global_coordinates()).reshape(2, -1)

    @property
    def weight(self) -> NDArray[np.float64]:
        """Their areas, cm²."""
        return np.asarray(self.basis.dx).ravel()

    @property
    def centres(self) -> NDArray[np.float64]:
        """Middle of the cell each point lies in, shape (2, n)."""
        middle = self.mesh.cells.p[:, self.mesh.cells.t].mean(axis=1)
        return np.asarray(np.repeat(middle, self.per_cell, axis=1))

    @property
    def boxes(self) -> NDArray[np.float64]:
        """Bounding box of the cell each point lies in, shape (4, n)."""
        corners = self.mesh.cells.p[:, self.mesh.cells.t]
        low, high = corners.min(axis=1), corners.max(axis=1)
        return np.asarray(np.repeat(np.array([low[0], high[0], low[1], high[1]]), self.per_cell, axis=1))

    def nodes(self) -> NDArray[np.int64]:
        """Nodes of the cell each point lies in, shape (n_local, n)."""
        return np.repeat(self.basis.element_dofs, self.per_cell, axis=1)

    def values(self) -> NDArray[np.float64]:
        """Shape functions at the points, shape (n_local, n)."""
        shape = self.basis.dx.shape
        return np.array([np.broadcast_to(np.asarray(phi[0]), shape).ravel() for phi in self.basis.basis])

    def slopes(self) -> NDArray[np.float64]:
        """Their gradients, shape (2, n_local, n)."""
        shape = (2, *self.basis.dx.shape)
        return np.stack([np.broadcast_to(phi[0].grad, shape).reshape(2, -1) for phi in self.basis.basis], axis=1)


def sheet_space(mesh: Mesh) -> SheetSpace:
    """Quadratic elements on triangles or quads."""
    from skfem import Basis

    return SheetSpace(mesh, Basis(mesh.cells, lagrange_element(mesh.kind, 2), intorder=4))


def plan_mesh(x: NDArray[np.float64], y: NDArray[np.float64], outline: CellOutline) -> Mesh:
    """Quads on a rectangular outline; else triangles of the grid cells and of what the outline leaves of them.

    A convex outline cuts each grid edge at one place, the same seen from both cells, so that the triangles fit.
    """
    from skfem import MeshTri

    if outline.is_rectangle:
        return Mesh(tensor_mesh(x / UM, y / UM))
    points, triangles = _cut_cells(x, y, outline)
    return Mesh(MeshTri(points, triangles))


def _cut_cells(
    x: NDArray[np.float64], y: NDArray[np.float64], outline: CellOutline
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Points and triangles: whole cells in two, cut ones as fans."""
    low, high = outline.chord(0, x)
    lower, upper = np.maximum(low[:-1], low[1:])[:, None], np.minimum(high[:-1], high[1:])[:, None]
    whole = (y[None, :-1] >= lower - SAME_CM) & (y[None, 1:] <= upper + SAME_CM)
    i, j = np.nonzero(whole)
    a, b, c, d = (np.column_stack([x[i + k], y[j + m]]) for k, m in ((0, 0), (1, 0), (1, 1), (0, 1)))
    pieces = [np.stack([a, b, c], axis=1), np.stack([a, c, d], axis=1)]
    for i, j in np.argwhere(~whole):
        polygon = clip_box(clip_box(outline.corners, 0, x[i], x[i + 1]), 1, y[j], y[j + 1])
        polygon = _tidy(polygon)
        if len(polygon) > 2:
            pieces.append(_fan(polygon))
    corners = np.concatenate(pieces).reshape(-1, 2)
    keys = np.round(corners / (20 * SAME_CM)).astype(np.int64)
    _, first, number = np.unique(keys, axis=0, return_index=True, return_inverse=True)
    return corners[first].T, np.asarray(number).reshape(-1, 3).T


def _tidy(polygon: NDArray[np.float64]) -> NDArray[np.float64]:
    """Corners that differ."""
    if len(polygon) == 0:
        return polygon
    keep = np.linalg.norm(polygon - np.roll(polygon, 1, axis=0), axis=1) > 20 * SAME_CM
    return np.asarray(polygon[keep])


def _fan(polygon: NDArray[np.float64]) -> NDArray[np.float64]:
    """Triangles around the middle of a convex polygon; around a corner of a triangle, nothing is to be cut."""
    if len(polygon) == 3:
        return polygon[None]
    middle = np.broadcast_to(polygon.mean(axis=0), polygon.shape)
    return np.stack([polygon, np.roll(polygon, -1, axis=0), middle], axis=1)
