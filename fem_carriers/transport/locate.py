"""Which cell holds a point: a walk from cell to cell, for all points at once.

From a cell near by, each point moves across a facet that it lies beyond, chosen at random among these, until there is
none: such a walk ends in any convex mesh (O. Devillers, S. Pion, M. Teillaud, Int. J. Found. Comput. Sci. 13, 181
(2002); from memory). It works on strongly stretched cells, where a search among the nearest centres does not.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

LARGEST_STEPS = 20_000
BEYOND = 1e-10
"""Distance from a facet's plane, over the size of the mesh, above which a point lies beyond it."""


@dataclass(frozen=True, eq=False)
class Locator:
    """Finds cells of a mesh.

    Parameters
    ----------
    cells : skfem.Mesh
        Triangles, quads, tets or hexahedra with (nearly) plane facets.
    """

    cells: Any

    def cell_of(self, x_cm: NDArray[np.float64]) -> NDArray[np.int64]:
        """Cell of every point (dimension, n).

        Raises
        ------
        ValueError
            A point outside of the mesh.
        """
        found: NDArray[np.int64] = np.asarray(self._centres.query(x_cm.T)[1], dtype=np.int64)
        normals, offsets, across = self._planes
        limit = BEYOND * np.ptp(self.cells.p)
        rng, moving = np.random.default_rng(0), np.arange(found.size)
        for _ in range(LARGEST_STEPS):
            cell = found[moving]
            distance = np.einsum("lcd,dc->lc", normals[:, cell], x_cm[:, moving]) - offsets[:, cell]
            open_ = (distance > limit) & (across[:, cell] >= 0)
            choice = np.where(open_, rng.random(distance.shape), -1.0)
            facet, stays = choice.argmax(axis=0), ~open_.any(axis=0)
            if (distance[:, stays] > 1e3 * limit).any():
                raise ValueError("a point outside of the mesh")
            found[moving[~stays]] = across[facet[~stays], cell[~stays]]
            moving = moving[~stays]
            if not moving.size:
                return found
        raise ValueError("a point could not be located in the mesh")

    @cached_property
    def _centres(self) -> Any:
        from scipy.spatial import cKDTree

        return cKDTree(self.cells.p[:, self.cells.t].mean(axis=1).T)

    @cached_property
    def _planes(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.int64]]:
        """Outward unit normals (n_local, n_cells, dimension), offsets, and the cell across, −1 at the boundary."""
        cells = self.cells
        corners = cells.p[:, cells.facets[:, cells.t2f]]  # (dimension, n_corners, n_local, n_cells)
        middle = corners.mean(axis=1)
        normals = _normals(corners)
        outward = middle - cells.p[:, cells.t].mean(axis=1)[:, None]
        normals *= np.sign((normals * outward).sum(axis=0))
        pair = cells.f2t[:, cells.t2f]
        across = np.where(pair[0] == np.arange(cells.t.shape[1]), pair[1], pair[0])
        return np.ascontiguousarray(normals.transpose(1, 2, 0)), (normals * middle).sum(axis=0), across


def _normals(corners: NDArray[np.float64]) -> NDArray[np.float64]:
    """Unit normals of facets; of four corners that of the plane through the middles of the edges."""
    if corners.shape[0] == 2:
        edge = corners[:, 1] - corners[:, 0]
        normal = np.array([edge[1], -edge[0]])
    else:
        a, b, c = corners[:, 0], corners[:, 1], corners[:, 2]
        first, second = (b - a, c - a) if corners.shape[1] == 3 else _diagonals(corners)
        normal = np.cross(first, second, axis=0)
    return np.asarray(normal / np.linalg.norm(normal, axis=0))


def _diagonals(corners: NDArray[np.float64]) -> tuple[Any, Any]:
    """The two vectors between opposite corners; which corners are opposite depends on the order, so by the largest."""
    pairs = (((0, 1), (2, 3)), ((0, 2), (1, 3)), ((0, 3), (1, 2)))
    sizes = []
    for (i, j), (k, m) in pairs:
        area = np.cross(corners[:, j] - corners[:, i], corners[:, m] - corners[:, k], axis=0)
        sizes.append(np.linalg.norm(area, axis=0))
    best = np.argmax(sizes, axis=0)
    first = np.choose(best, [corners[:, j] - corners[:, i] for (i, j), _ in pairs])
    second = np.choose(best, [corners[:, m] - corners[:, k] for _, (k, m) in pairs])
    return first, second
