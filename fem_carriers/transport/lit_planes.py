"""Planes that light enters, from a unit cell or from a named surface of a mesh."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell.outlines import UNIT_DEPTH_UM
from ..errors import MeshError
from .generation import LitPlane, tangents

if TYPE_CHECKING:
    from ..cell.unit_cell import UnitCell
    from ..meshing.mesh import Mesh


def plane_of_cell(cell: UnitCell, side: str) -> LitPlane:
    """Front or rear of a unit cell; metal of that side is opaque.

    Parameters
    ----------
    cell : UnitCell
    side : {"front", "rear"}
    """
    height = cell.thickness_um * 1e-4 if side == "front" else 0.0
    origin, inward = np.zeros(cell.dimension), np.zeros(cell.dimension)
    origin[-1], inward[-1] = height, -1.0 if side == "front" else 1.0
    box = cell.frame.box
    return LitPlane(origin, inward, box.difference(cell.layout(side).opaque), box)


def plane_of_facets(mesh: Mesh, name: str) -> LitPlane:
    """The plane of a named surface; light enters through its facets only.

    Parameters
    ----------
    mesh : Mesh
    name : str

    Raises
    ------
    MeshError
        The surface is not flat.
    """
    from skfem import FacetBasis

    from .spaces import cell_mapping, lagrange_element

    element, map_ = lagrange_element(mesh.kind, 1), cell_mapping(mesh)
    basis = FacetBasis(mesh.cells, element, mapping=map_, facets=mesh.surfaces[name], intorder=1)
    normals = np.asarray(basis.normals)[:, :, 0]
    inward = -normals.mean(axis=1)
    inward /= np.linalg.norm(inward)
    corners = mesh.cells.p[:, mesh.cells.facets[:, mesh.surfaces[name]]]
    origin = corners[:, 0, 0]
    height = np.abs(np.einsum("d,dij->ij", inward, corners - origin[:, None, None])).max()
    if np.abs(normals + inward[:, None]).max() > 1e-6 or height > 1e-6 * np.ptp(mesh.cells.p):
        raise MeshError(f"The lit surface {name!r} is not flat; light enters flat surfaces. Try naming its flat part.")
    clear = _projection(corners, tangents(inward))
    return LitPlane(origin, inward, clear, clear)


def _projection(corners: Any, directions: list[Any]) -> Any:
    """Union of the facets in plane coordinates, µm; in 2-D drawn one unit deep."""
    from shapely import Polygon, box, union_all

    along = [np.einsum("d,dij->ij", t, corners) * 1e4 for t in directions]
    if len(along) == 1:
        return union_all([box(min(a), 0.0, max(a), UNIT_DEPTH_UM) for a in along[0].T])
    order = range(3) if corners.shape[1] == 3 else _around(along)
    return union_all([Polygon([(along[0][k, i], along[1][k, i]) for k in order]) for i in range(corners.shape[2])])


def _around(along: list[Any]) -> list[int]:
    """Order in which the four corners of scikit-fem's quad facets go round."""
    a, b = along[0][:, 0], along[1][:, 0]
    return [int(k) for k in np.argsort(np.arctan2(b - b.mean(), a - a.mean()))]
