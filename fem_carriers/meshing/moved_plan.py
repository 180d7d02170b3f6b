"""Displacements in plan of a mesh with round or oblique outlines, when sizes of the cell change a little."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell.outlines import UNIT_DEPTH_UM, shade_size, whole_copies
from ..cell.patches import BELOW, Dot

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..cell.patches import Patch
    from ..cell.unit_cell import UnitCell
    from .mesh import Mesh

    Known = NDArray[np.float64]

NEAR_UM = 1e-6
CORNERS = range(24, 97, 8)
"""Corners that a full circle may have in a mesh."""


def plan_displacement(mesh: Mesh, old: UnitCell, new: UnitCell) -> NDArray[np.float64]:
    """Displacement of every point, (2, n) in µm, of a plan-view mesh extruded through depths.

    Parameters
    ----------
    mesh : Mesh
    old, new : UnitCell
    """
    where = mesh.points_um
    count = int((where[2] < where[2].min() + NEAR_UM).sum())
    plan = where[:2, :count]
    known = np.full(plan.shape, np.nan)
    for place, moved in _patch_boxes(old, new):
        _follow_patch(plan, known, place, moved)
    _keep_masks(plan, known, old)
    _follow_lines(plan, known, old, new)
    edges = _edges(mesh, count)
    found = np.array([_spread(plan, edges, known[i], _partners(plan, old, i)) for i in (0, 1)])
    return np.tile(found, where.shape[1] // count)


def _patch_boxes(old: UnitCell, new: UnitCell) -> list[tuple[tuple[bool, Any], Any]]:
    """((is a disc, outline), new bounds) of every copy of every patch and shade; round ones by few corners."""
    found = []
    for side in ("front", "rear"):
        for a, b in zip(getattr(old, side).patches, getattr(new, side).patches, strict=True):
            for opaque in (False, True):
                if opaque and not _shades(a):
                    continue
                pairs = zip(whole_copies(a, old.frame, 4, opaque), whole_copies(b, new.frame, 4, opaque), strict=True)
                found += [((isinstance(a, Dot), shape), moved.bounds) for shape, moved in pairs]
    return sorted(found, key=lambda box: not box[0][0])  # where outlines cross, straight ones stay straight


def _shades(patch: Patch) -> bool:
    return shade_size(patch, patch.contact is not BELOW and patch.contact is not None)


def _follow_patch(plan: Known, known: Known, place: tuple[bool, Any], moved: tuple[float, ...]) -> None:
    """Points on an outline move with the rectangle around it; strips move at right angles to their edges only."""
    disc, shape = place
    on = _on_disc(plan, shape) if disc else _on_line(plan, shape.boundary)
    low, high = np.array(shape.bounds[:2]), np.array(shape.bounds[2:])
    new_low, new_high = np.array(moved[:2]), np.array(moved[2:])
    for i in (0, 1):
        share = (plan[i, on] - low[i]) / (high[i] - low[i])
        change = (new_low[i] - low[i]) * (1 - share) + (new_high[i] - high[i]) * share
        if high[i] - low[i] < UNIT_DEPTH_UM:  # strips are longer, and their points may slide along
            known[i, on] = change


def _on_line(plan: Known, line: Any) -> NDArray[np.bool_]:
    from shapely import distance, points

    return np.asarray(distance(points(plan.T), line) < NEAR_UM)


def _on_disc(plan: Known, square: Any) -> NDArray[np.bool_]:
    """Points on any of the polygons that stand for a circle; `square` is the one of four corners."""
    center = np.array(square.centroid.coords[0])[:, None]
    radius = (square.bounds[2] - square.bounds[0]) / 2 / np.sqrt(2 * np.pi / 4)
    away, angle = np.hypot(*(plan - center)), np.arctan2(*(plan - center)[::-1])
    on = np.zeros(away.size, dtype=bool)
    for corners in CORNERS:
        step = 2 * np.pi / corners
        tip = radius * np.sqrt(step / np.sin(step))
        edge = tip * np.cos(step / 2) / np.cos(np.mod(angle, step) - step / 2)
        on |= np.abs(away - edge) < NEAR_UM * 10
    return on


def _keep_masks(plan: Known, known: Known, cell: UnitCell) -> None:
    """Light masks stay where they are."""
    for source in cell.light.sources if cell.light is not None else ():
        for mask in source.mask:
            known[:, _on_line(plan, mask.outline(3).boundary)] = 0.0


def _follow_lines(plan: Known, known: Known, old: UnitCell, new: UnitCell) -> None:
    """Points on sides and on planes inside move with these, at right angles."""
    for i, axis in enumerate("xy"):
        pairs = [*zip(getattr(old.frame, axis), getattr(new.frame, axis), strict=True)]
        pairs += [(p.position_um, new.inner[n].position_um) for n, p in old.inner.items() if p.axis == axis]
        for before, after in pairs:
            known[i, np.abs(plan[i] - before) < NEAR_UM] = after - before


def _edges(mesh: Mesh, count: int) -> NDArray[np.int64]:
    """Edges of the lowest plan, (2, n)."""
    corners = mesh.cells.facets
    flat = corners[:, (corners < count).all(axis=0)]
    edges = np.hstack([flat[[i, (i + 1) % len(flat)]] for i in range(len(flat))])
    if len(flat) == 4:  # facets of hexahedra list their corners around, or across; keep those that are edges of cells
        known = {tuple(e) for e in np.sort(mesh.cells.edges, axis=0).T.tolist()}
        edges = np.array([e for e in np.sort(edges, axis=0).T.tolist() if tuple(e) in known]).T
    return np.unique(np.sort(edges, axis=0), axis=1)


def _partners(plan: Known, cell: UnitCell, component: int) -> NDArray[np.int64]:
    """For every point the one that moves like it across a periodic side; normal displacements are prescribed there."""
    partner = np.arange(plan.shape[1])
    for axis in cell.periodic_axes:
        i = "xy".index(axis)
        if i == component:
            continue
        low, high = (np.flatnonzero(np.abs(plan[i] - end) < NEAR_UM) for end in getattr(cell.frame, axis))
        partner[high[np.argsort(plan[1 - i, high])]] = low[np.argsort(plan[1 - i, low])]
    return partner


def _spread(plan: Known, edges: NDArray[np.int64], known: Known, partner: NDArray[np.int64]) -> NDArray[np.float64]:
    """Known values where there are any; elsewhere means of the neighbours weighted by 1/distance²."""
    from scipy.sparse import coo_matrix, diags
    from scipy.sparse.linalg import spsolve

    n = known.size
    weight = 1 / ((plan[:, edges[0]] - plan[:, edges[1]]) ** 2).sum(axis=0)
    a, b = partner[edges]
    half = coo_matrix((weight, (a, b)), shape=(n, n))
    both = (half + half.T).tocsr()
    laplacian = (diags(np.asarray(both.sum(axis=1)).ravel()) - both).tocsr()
    fixed = np.isfinite(known)
    values = np.where(fixed, known, 0.0)
    free = np.flatnonzero(~fixed & (partner == np.arange(n)))
    if free.size:
        right = -(laplacian[free] @ values)
        values[free] = spsolve(laplacian[free][:, free].tocsc(), right)
    return np.where(fixed, values, values[partner])
