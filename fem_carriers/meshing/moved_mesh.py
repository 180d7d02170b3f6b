"""A unit cell's mesh moved onto a cell whose sizes differ a little, on the same topology.

On grids every line moves with the outline that it follows, linearly in between. In plan views of round and oblique
outlines the points on outlines move with them, those on the sides along these, and all others follow smoothly (weighted
means of their neighbours, M. S. Floater, Comput. Aided Geom. Des. 14, 231 (1997)).
"""

from __future__ import annotations

import dataclasses
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import MeshError
from ..units import UM
from .mesh import Mesh
from .moved_plan import plan_displacement
from .unit_cell_mesh import collect_outlines

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..cell.unit_cell import UnitCell

SAME_UM = 1e-7


def moved_mesh(mesh: Mesh, old: UnitCell, new: UnitCell) -> Mesh:
    """The mesh of `old` on the outlines of `new`.

    Parameters
    ----------
    mesh : Mesh
        Made for `old`.
    old, new : UnitCell
        With the same patches, planes and masks; positions and sizes may differ by less than would change their order.

    Returns
    -------
    Mesh
        The mesh itself where nothing moves.

    Raises
    ------
    MeshError
        Outlines that part, meet, appear or vanish.
    """
    where = mesh.points_um
    depth = np.interp(where[-1], *_paired("depth", _depths(old), _depths(new)))
    plan = _plan(where[:-1], mesh, old, new)
    moved = np.vstack([plan, depth])
    if np.abs(moved - where).max() < 1e-15 * np.ptp(where):
        return mesh
    cells = mesh.cells
    return dataclasses.replace(mesh, cells=dataclasses.replace(cells, doflocs=np.ascontiguousarray(moved * UM)))


def _plan(plan: NDArray[np.float64], mesh: Mesh, old: UnitCell, new: UnitCell) -> NDArray[np.float64]:
    """New x (and y) of points, µm."""
    lines = [_lines(cell) for cell in (old, new)]
    if all(_is_rectilinear(cell_lines) for cell_lines in lines):
        moved = []
        for axis, x in zip("xy", plan, strict=False):
            before, after = (_positions(cell, own, axis) for cell, own in zip((old, new), lines, strict=True))
            moved.append(np.interp(x, *_paired(axis, before, after)))
        return np.array(moved)
    return plan + plan_displacement(mesh, old, new)


def _lines(cell: UnitCell) -> list[Any]:
    return collect_outlines(cell, {side: cell.layout(side) for side in ("front", "rear")}).all


def _segments(lines: list[Any]) -> NDArray[np.float64]:
    """End points of all straight pieces, (n, 2 ends, 2 coordinates)."""
    pieces = [np.asarray(part.coords) for line in lines for part in getattr(line, "geoms", [line])]
    return np.concatenate([np.stack([p[:-1], p[1:]], axis=1) for p in pieces] or [np.zeros((0, 2, 2))])


def _is_rectilinear(lines: list[Any]) -> bool:
    extent = np.abs(np.diff(_segments(lines), axis=1))[:, 0]
    return bool((extent.min(axis=1) < 1e-9).all()) if len(extent) else True


def _positions(cell: UnitCell, lines: list[Any], axis: str) -> list[float]:
    """Ends of the piece and coordinates of the lines at right angles to an axis, ascending and distinct."""
    ends, i = _segments(lines), "xy".index(axis)
    low, high = cell.frame.x if axis == "x" else cell.frame.y
    across = np.abs(ends[:, 0, i] - ends[:, 1, i]) < 1e-9
    return _distinct([low, high, *ends[across, 0, i]])


def _depths(cell: UnitCell) -> list[float]:
    ends = [z for plane in cell.inner.values() for z in plane.heights_um(cell.thickness_um)]
    return _distinct([0.0, cell.thickness_um, *ends])


def _distinct(values: list[float]) -> list[float]:
    ordered = np.sort(np.asarray(values, dtype=float))
    return [float(v) for v in ordered[np.append(True, np.diff(ordered) > SAME_UM)]]


def _paired(axis: str, old: list[float], new: list[float]) -> tuple[list[float], list[float]]:
    """Old and new positions, which must be as many."""
    if len(old) != len(new):
        raise MeshError(
            f"{len(old)} outlines across {axis} become {len(new)}: outlines in one place part or meet, and no mesh of "
            "the same cells follows. Try moving one of them by a small amount first."
        )
    return old, new
