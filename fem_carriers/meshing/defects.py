"""Search for defects of a mesh: pure geometry and topology, without names or messages."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

FLAT = 1e-9
"""Smallest volume spanned at a cell's corner, over the product of the three (2-D: two) edge lengths."""
TOUCH = 2e-7
"""Distance, over the size of the mesh, below which a point lies on a facet; above single-precision noise."""

# Each corner and its neighbours, right-handed in a sound cell, in the corner order of the VTK file formats.
_CORNERS: dict[str, list[tuple[int, ...]]] = {
    "triangle": [(0, 1, 2)],
    "quad": [(0, 1, 3), (1, 2, 0), (2, 3, 1), (3, 0, 2)],
    "tetra": [(0, 1, 2, 3)],
    "hexahedron": [
        *[(0, 1, 3, 4), (1, 2, 0, 5), (2, 3, 1, 6), (3, 0, 2, 7)],
        *[(4, 7, 5, 0), (5, 4, 6, 1), (6, 5, 7, 2), (7, 6, 4, 3)],
    ],
}
_MIRRORED = {
    "triangle": [0, 2, 1],
    "quad": [0, 3, 2, 1],
    "tetra": [0, 1, 3, 2],
    "hexahedron": [4, 5, 6, 7, 0, 1, 2, 3],
}
"""Order of the corners that turns an inverted cell into a sound one."""


def column_ids(columns: NDArray[np.int64]) -> NDArray[np.int64]:
    """Number the columns of an array so that equal columns, in any order of their entries, have equal numbers.

    Parameters
    ----------
    columns : (k, n) int array

    Returns
    -------
    (n,) int array
    """
    ordered = np.sort(columns, axis=0)
    ids: NDArray[np.int64] = ordered[0].astype(np.int64)
    span = int(ordered.max(initial=0)) + 1
    for row in ordered[1:]:
        ids = np.unique(ids * span + row, return_inverse=True)[1].astype(np.int64)
    return ids


def twins(columns: NDArray[np.int64]) -> NDArray[np.int64]:
    """Pairs of columns with the same entries, shape (2, n_pairs)."""
    ids = column_ids(columns)
    order = np.argsort(ids, kind="stable")
    same = np.flatnonzero(np.diff(ids[order]) == 0)
    return np.array([order[same], order[same + 1]])


def find_columns(table: NDArray[np.int64], wanted: NDArray[np.int64]) -> NDArray[np.int64]:
    """Index in `table` of each column of `wanted` (entries in any order), −1 where there is none."""
    ids = column_ids(np.hstack([table, wanted]))
    index = np.full(ids.size, -1)
    index[ids[: table.shape[1]]] = np.arange(table.shape[1])
    return index[ids[table.shape[1] :]]


def corner_volumes(points: NDArray[np.float64], cells: NDArray[np.int64], kind: str) -> NDArray[np.float64]:
    """Determinant of the edges at each corner over the product of their lengths (1 for a box), NaN for a zero edge.

    Parameters
    ----------
    points : (dim, n_points) float array
    cells : (n_local, n_cells) int array
        Corners in the order of the VTK file formats.
    kind : {"triangle", "quad", "tetra", "hexahedron"}

    Returns
    -------
    (n_corners, n_cells) float array
        One row for simplices, else one per corner.
    """
    found = []
    for corner, *neighbours in _CORNERS[kind]:
        edges = points[:, cells[neighbours]] - points[:, cells[[corner]]]  # (dim, dim, n_cells)
        with np.errstate(invalid="ignore", divide="ignore"):
            edges = edges / np.linalg.norm(edges, axis=0)
            found.append(np.linalg.det(edges.transpose(2, 1, 0)))
    return np.array(found)


def turn_inverted(cells: NDArray[np.int64], kind: str, volumes: NDArray[np.float64]) -> NDArray[np.int64]:
    """Reorder the corners of cells whose `corner_volumes` are negative."""
    inverted = volumes[0] < 0
    sound = cells.copy()
    sound[:, inverted] = cells[:, inverted][_MIRRORED[kind]]
    return sound


def coincident_nodes(points: NDArray[np.float64]) -> NDArray[np.int64]:
    """Pairs of nodes closer than 1e-9 of the size of the mesh, shape (n_pairs, 2)."""
    from scipy.spatial import cKDTree

    reach = 1e-9 * np.ptp(points, axis=1).max()
    return np.asarray(cKDTree(points.T).query_pairs(reach, output_type="ndarray"))


def folded_facets(points: NDArray[np.float64], mesh: Any) -> NDArray[np.int64]:
    """Facets between two cells that lie on the same side of it."""
    inner = np.flatnonzero(mesh.f2t[1] >= 0)
    corners = points[:, mesh.facets[:, inner]]
    if points.shape[0] == 2:
        along = corners[:, 1] - corners[:, 0]
        normal = np.array([along[1], -along[0]])
    else:
        normal = np.cross(corners[:, 2] - corners[:, 0], corners[:, -1] - corners[:, 1], axis=0)
    offset = points[:, mesh.t].mean(axis=1)[:, mesh.f2t[:, inner]] - corners.mean(axis=1)[:, None]
    side = np.einsum("dsf,df->sf", offset, normal)
    return np.asarray(inner[side[0] * side[1] >= 0])


def parts(mesh: Any) -> NDArray[np.int64]:
    """Number of the connected part (through shared facets) of each cell."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    first, second = mesh.f2t[:, mesh.f2t[1] >= 0]
    n = mesh.t.shape[1]
    graph = coo_array((np.ones(first.size), (first, second)), shape=(n, n)).tocsr()
    return np.asarray(connected_components(graph, directed=False)[1])


def touching_points(points: NDArray[np.float64], facets: NDArray[np.int64]) -> NDArray[np.float64]:
    """Vertices and centres of boundary facets that lie on another boundary facet: hanging nodes and unmatched facets.

    Parameters
    ----------
    points : (dim, n_points) float array
    facets : (n_corners, n_facets) int array
        Corners of the boundary facets, quads in cyclic order.

    Returns
    -------
    (dim, n_found) float array
        Vertices first.
    """
    vertices = np.unique(facets)
    probes = np.hstack([points[:, vertices], points[:, facets].mean(axis=1)])
    probe, facet = _close_pairs(probes, points[:, facets])
    is_vertex = probe < vertices.size
    node = vertices[np.minimum(probe, vertices.size - 1)]
    own = np.where(is_vertex, (facets[:, facet] == node).any(axis=0), probe - vertices.size == facet)
    probe, facet = probe[~own], facet[~own]
    touches = np.zeros(probe.size, dtype=bool)
    for i in range(1, max(2, facets.shape[0] - 1)):  # a quad is two triangles
        corners = facets[[0, *range(i, i + points.shape[0] - 1)]][:, facet]
        touches |= _on_simplex(probes[:, probe], points[:, corners], TOUCH * np.ptp(points, axis=1).max())
    return np.asarray(probes[:, np.unique(probe[touches])])


def _close_pairs(
    probes: NDArray[np.float64], corners: NDArray[np.float64]
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Probes and facets (corners of shape (dim, n_corners, n)) whose boxes contain them."""
    import shapely

    extent = np.ptp(probes, axis=1)
    low, high = (corners.min(axis=1).T - TOUCH * extent.max()).T, (corners.max(axis=1).T + TOUCH * extent.max()).T
    u, v = np.sort(np.argsort(-extent, kind="stable")[:2])  # the tree is plane: search along the two longest axes
    tree = shapely.STRtree(shapely.box(low[u], low[v], high[u], high[v]))
    probe, facet = tree.query(shapely.points(probes[u], probes[v]))
    inside = ((probes[:, probe] >= low[:, facet]) & (probes[:, probe] <= high[:, facet])).all(axis=0)
    return probe[inside], facet[inside]


def _on_simplex(probes: NDArray[np.float64], corners: NDArray[np.float64], reach: float) -> NDArray[np.bool_]:
    """Does each probe (dim, n) lie on its segment or triangle (dim, dim, n), to the distance `reach`?"""
    edges = corners[:, 1:] - corners[:, :1]
    offset = probes - corners[:, 0]
    gram = np.einsum("din,djn->nij", edges, edges)
    weights = np.linalg.solve(gram, np.einsum("din,dn->ni", edges, offset)[..., None])[..., 0]
    gap = np.linalg.norm(offset - np.einsum("din,ni->dn", edges, weights), axis=0)
    within = (weights.min(axis=1, initial=1) >= -1e-6) & (weights.sum(axis=1) <= 1 + 1e-6)
    return np.asarray(within & (gap < reach))
