"""Refinement of chosen triangles or tets: edges are halved, longest first, and names follow exactly.

The longest edge of every chosen cell is marked, and in every triangle (cell in 2-D, facet in 3-D) with a marked edge
also its longest one, until nothing changes. Every simplex is then bisected at its longest marked edge, and its halves
likewise. A facet and the cells on both sides of it are cut by the same edges in the same order, so that the mesh stays
conforming and the children of a named facet are found by cutting the facet itself (A. Plaza and G. F. Carey, Appl.
Numer. Math. 32, 195 (2000)).
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import MeshError
from .defects import find_columns
from .mesh import Mesh, cell_sizes

if TYPE_CHECKING:
    from numpy.typing import NDArray

SIMPLICES = ("triangle", "tetra")
SHARE = 0.3
"""Of the indicator that one round of refinement treats."""
EVERYWHERE = 1e-3
"""Share of the indicator that is spread over all cells by their size."""
SAME_AREA = 1e-10
"""Relative change of a named surface's area that round-off explains."""


def refined_cells(mesh: Mesh, chosen: NDArray[np.int64]) -> tuple[Mesh, NDArray[np.int64]]:
    """Halve some cells, and their neighbours as needed; all names survive.

    Parameters
    ----------
    mesh : Mesh
        Triangles or tets.
    chosen : (n,) int array
        Cells to refine.

    Returns
    -------
    Mesh
    (n_fine_cells,) int array
        The cell of `mesh` that each new one lies in.

    Raises
    ------
    MeshError
        Quads or hexahedra, which can be refined as a whole only.
    """
    if mesh.kind not in SIMPLICES:
        raise MeshError(f"chosen {mesh.kind} cells cannot be refined by themselves. Try refined() for the whole mesh.")
    cells = mesh.cells
    cuts = _cuts(cells, chosen)
    points = np.hstack([cells.p, cells.p[:, cuts.edges].mean(axis=1)])
    fine, parent = cuts.applied(cells.t.astype(np.int64))
    built = type(cells)(points, np.ascontiguousarray(fine))
    surfaces = {name: _children(cuts, cells.facets[:, facets], built) for name, facets in mesh.surfaces.items()}
    volumes = {name: np.flatnonzero(np.isin(parent, own)) for name, own in mesh.volumes.items()}
    result = Mesh(built, surfaces, volumes)
    for name in mesh.surfaces:
        if abs(result.surface_area_cm2(name) / mesh.surface_area_cm2(name) - 1) > SAME_AREA:
            raise MeshError(f"the surface {name!r} changed its area in refinement. Try a mesh with better cells there.")
    return result, parent


def refined_by(mesh: Mesh, indicator: NDArray[np.float64], growth: float) -> Mesh:
    """Refine where an indicator is large until the number of cells has grown enough.

    In every round the fewest cells that make up `SHARE` of the indicator are halved (W. Dörfler, SIAM J. Numer. Anal.
    33, 1106 (1996)); their children take over the part by volume, less what the smaller size is expected to bring.

    Parameters
    ----------
    mesh : Mesh
        Triangles or tets.
    indicator : (n_cells,) array
        Share of every cell in an error.
    growth : float
        Factor of the number of cells, above 1.

    Returns
    -------
    Mesh
    """
    fine, enough, size = mesh, growth * indicator.size, cell_sizes(mesh.cells)
    indicator = indicator / max(float(indicator.sum()), 1e-300) + EVERYWHERE * size / size.sum()
    while indicator.size < enough:
        before = cell_sizes(fine.cells)
        fine, parent = refined_cells(fine, largest_share(indicator, SHARE))
        part = cell_sizes(fine.cells) / before[parent]
        indicator = indicator[parent] * part ** (1 + 1 / mesh.dimension)
    return fine


def largest_share(indicator: NDArray[np.float64], share: float) -> NDArray[np.int64]:
    """The fewest cells that make up a share of the indicator."""
    order = np.argsort(-indicator, kind="stable")
    total = np.cumsum(indicator[order])
    return np.asarray(order[: int(np.searchsorted(total, share * total[-1])) + 1])


@dataclass(frozen=True, eq=False)
class Cuts:
    """Edges to be halved.

    Parameters
    ----------
    edges : (2, n) int array
        End points, the smaller number first, by rising `key`.
    rank : (n,) int array
        Order by length, longest last; without ties.
    n_points : int
        Of the mesh before; the middle of edge i becomes point n_points + i.
    """

    edges: NDArray[np.int64]
    rank: NDArray[np.int64]
    n_points: int

    def find(self, a: NDArray[np.int64], b: NDArray[np.int64]) -> NDArray[np.int64]:
        """Number of the edge between points a and b, −1 where it is not to be halved."""
        key = edge_keys(a, b, self.n_points)
        known = edge_keys(self.edges[0], self.edges[1], self.n_points)
        place = np.minimum(np.searchsorted(known, key), max(known.size - 1, 0))
        old = np.maximum(a, b) < self.n_points
        return np.where(old & (known[place] == key), place, -1) if known.size else np.full(a.shape, -1)

    def applied(self, simplices: NDArray[np.int64]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Segments, triangles or tets (k, n) cut up, and the number of the one that each piece is from."""
        parent = np.arange(simplices.shape[1])
        finished: list[tuple[NDArray[np.int64], NDArray[np.int64]]] = []
        while simplices.shape[1]:
            pairs = list(combinations(range(simplices.shape[0]), 2))
            found = np.array([self.find(simplices[i], simplices[j]) for i, j in pairs])
            order = np.where(found >= 0, self.rank[found], -1)
            first, every = order.argmax(axis=0), np.arange(order.shape[1])
            whole = order[first, every] < 0
            finished.append((simplices[:, whole], parent[whole]))
            cut = np.flatnonzero(~whole)
            ends = np.array(pairs)[first[cut]]
            middle = self.n_points + found[first[cut], cut]
            halves = [simplices[:, cut].copy(), simplices[:, cut].copy()]
            for half, end in zip(halves, ends.T, strict=True):
                half[end, np.arange(cut.size)] = middle
            simplices, parent = np.hstack(halves), np.tile(parent[cut], 2)
        return np.hstack([s for s, _ in finished]), np.concatenate([p for _, p in finished])


def edge_keys(a: Any, b: Any, n_points: int) -> Any:
    """One number for every pair of points, in either order."""
    return np.minimum(a, b).astype(np.int64) * n_points + np.maximum(a, b)


def _cuts(cells: Any, chosen: NDArray[np.int64]) -> Cuts:
    """The longest edges of the chosen cells and of every triangle with an edge to be halved."""
    n, t = cells.p.shape[1], cells.t.astype(np.int64)
    keys = np.array([edge_keys(t[i], t[j], n) for i, j in combinations(range(t.shape[0]), 2)])
    known, of_cell = np.unique(keys, return_inverse=True)
    of_cell = of_cell.reshape(keys.shape)
    edges = np.array([known // n, known % n])
    length = np.linalg.norm(cells.p[:, edges[1]] - cells.p[:, edges[0]], axis=0)
    # lengths that agree to round-off are equal: which is longer then is up to the numbering, alike on all sides
    rounded = np.round(np.log(length) * 1e9)
    rank = np.argsort(np.lexsort([np.arange(length.size), rounded]))
    triangles = t if t.shape[0] == 3 else cells.facets.astype(np.int64)
    pairs = list(combinations(range(3), 2))
    sides = np.array([np.searchsorted(known, edge_keys(triangles[i], triangles[j], n)) for i, j in pairs])
    longest = sides[rank[sides].argmax(axis=0), np.arange(sides.shape[1])]
    marked = np.zeros(known.size, dtype=bool)
    of_chosen = of_cell[:, chosen]
    marked[of_chosen[rank[of_chosen].argmax(axis=0), np.arange(of_chosen.shape[1])]] = True
    while True:
        wanted = longest[marked[sides].any(axis=0)]
        if marked[wanted].all():
            break
        marked[wanted] = True
    return Cuts(edges[:, marked], rank[marked], n)


def _children(cuts: Cuts, facets: NDArray[np.int64], fine: Any) -> NDArray[np.int64]:
    """Facets of the fine mesh that facets (k, n) of the coarse one are cut into."""
    if facets.shape[1] == 0:
        return np.zeros(0, dtype=np.int64)
    pieces = cuts.applied(facets.astype(np.int64))[0]
    found = find_columns(fine.facets.astype(np.int64), pieces)
    if (found < 0).any():
        raise MeshError("a named facet was lost in refinement. Try checking the mesh with check_mesh.")
    return np.asarray(np.unique(found))
