"""Planes inside a unit cell: lines that the mesh follows, and the facets on them."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..cell.unit_cell import UnitCell
    from .fineness import Fineness


def inner_lines(cell: UnitCell) -> list[Any]:
    """Traces of the planes in plan, as shapely lines in µm."""
    from shapely import LineString

    (x_low, x_high), (y_low, y_high) = cell.frame.x, cell.frame.y
    lines = []
    for plane in cell.inner.values():
        p = plane.position_um
        ends = [(p, y_low), (p, y_high)] if plane.axis == "x" else [(x_low, p), (x_high, p)]
        lines.append(LineString(ends))
    return lines


def inner_depths(cell: UnitCell, fineness: Fineness) -> list[tuple[float, float]]:
    """(Height, first step) of the ends of planes, µm; where a plane meets a collecting face the density bends fast."""
    ends = sorted({z for plane in cell.inner.values() for z in plane.heights_um(cell.thickness_um)})
    return [(z, fineness.mild_step_um) for z in ends]


def name_inner(cells: Any, cell: UnitCell) -> dict[str, NDArray[np.int64]]:
    """Facets on each plane."""
    corners = cells.p[:, cells.facets] * 1e4  # (dimension, n_corners, n_facets)
    near = 1e-7 * np.ptp(cells.p) * 1e4
    found = {}
    for name, plane in cell.inner.items():
        across = corners["xy".index(plane.axis)] - plane.position_um
        low, high = plane.heights_um(cell.thickness_um)
        within = (corners[-1] > low - near) & (corners[-1] < high + near)
        found[name] = np.flatnonzero(((np.abs(across) < near) & within).all(axis=0))
    return found
