"""Names of surfaces and volumes against the cells: what they refer to exists, and is named once."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import MeshError
from .defects import find_columns

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray


def at(place: NDArray[np.float64], unit: str) -> str:
    """A place in words."""
    return f"at ({', '.join(f'{float(c):.6g}' for c in place)}) {unit}"


def amid(points: NDArray[np.float64], nodes: NDArray[np.int64], unit: str) -> str:
    """The middle of some nodes in words."""
    return at(points[:, nodes].mean(axis=1), unit)


def refuse_no_facet(name: str, n: int, place: str) -> None:
    """Raise `MeshError` for `n` facets of a surface, the first at `place` (in words)."""
    raise MeshError(
        f"surface {name!r} has {n} facets that are no facet of the cells, the first {place}. Try meshing "
        "surface and volume together, so that they share their nodes."
    )


def facets_of(
    surfaces: Mapping[str, NDArray[np.int64]], mesh: Any, points: NDArray[np.float64], unit: str
) -> dict[str, NDArray[np.int64]]:
    """Facet indices of each surface.

    Parameters
    ----------
    surfaces : mapping of str to (n_corners, n) int array
        Corners of the facets, in any order.
    mesh : skfem.Mesh
    points : (dim, n_points) float array
        In `unit`, for places in messages.
    unit : str

    Raises
    ------
    MeshError
        For an empty surface, a facet that is none of the mesh, or one in two surfaces.
    """
    found: dict[str, NDArray[np.int64]] = {}
    owner = np.full(mesh.facets.shape[1], -1)
    for i, (name, nodes) in enumerate(surfaces.items()):
        if nodes.shape[1] == 0:
            raise MeshError(f"surface {name!r} is empty. Try giving it at least one facet, or removing the name.")
        same_corners = nodes.shape[0] == mesh.facets.shape[0]
        facets = find_columns(mesh.facets, nodes) if same_corners else np.full(nodes.shape[1], -1)
        lost = np.flatnonzero(facets < 0)
        if lost.size:
            refuse_no_facet(name, lost.size, amid(points, nodes[:, lost[0]], unit))
        facets = np.unique(facets)
        shared = facets[owner[facets] >= 0]
        if shared.size:
            raise MeshError(
                f"{shared.size} facets belong to two surfaces, {list(surfaces)[owner[shared[0]]]!r} and {name!r}, the "
                f"first {amid(points, mesh.facets[:, shared[0]], unit)}. Try leaving each facet in one group only."
            )
        owner[facets] = i
        found[name] = facets
    return found


def cells_of(
    volumes: Mapping[str, NDArray[np.int64]], points: NDArray[np.float64], cells: NDArray[np.int64], unit: str
) -> dict[str, NDArray[np.int64]]:
    """Sorted cell indices of each volume.

    Raises
    ------
    MeshError
        For an empty volume, an index out of range, or cells in no volume or in two.
    """
    count = np.zeros(cells.shape[1], dtype=np.int64)
    for name, members in volumes.items():
        if np.size(members) == 0:
            raise MeshError(f"volume {name!r} is empty. Try giving it at least one cell, or removing the name.")
        if np.min(members) < 0 or np.max(members) >= count.size:
            raise MeshError(f"volume {name!r} has cell indices outside 0 … {count.size - 1}. Try exporting it again.")
        count[np.unique(members)] += 1
    for bad, what in ((np.flatnonzero(count == 0), "in no volume"), (np.flatnonzero(count > 1), "in two volumes")):
        if bad.size:
            raise MeshError(
                f"{bad.size} of {count.size} cells are {what}, the first {amid(points, cells[:, bad[0]], unit)}; "
                f"volumes: {', '.join(volumes) or 'none'}. Try a mesh in which each cell is in exactly one named group."
            )
    return {name: np.unique(members) for name, members in volumes.items()}
