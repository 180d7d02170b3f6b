"""A two-level preconditioner: point relaxation on quadratic elements, algebraic multigrid on their linear part.

Relaxation damps what changes from node to node; what is left is smooth and lives on the linear elements of the same
mesh, where smoothed aggregation works (P. Vaněk, J. Mandel, M. Brezina, Computing 56, 179 (1996)). On cells stretched
far more than about ten to one relaxation by points no longer damps, and a direct solver serves better.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from .cell_maps import affine_map

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .spaces import Space

COARSEST = 500
"""Unknowns of the coarsest level, which is solved exactly."""
LARGEST_STRETCHING = 4.0
REFERENCE_RATIO = 4.0
"""Ratio of singular values for the six tets that fill a cube."""


@dataclass(frozen=True, eq=False)
class TwoLevel:
    """Approximate inverse of a matrix; symmetric if the matrix is.

    Parameters
    ----------
    matrix : scipy sparse matrix in compressed rows, shape (n, n)
    prolongation : scipy sparse matrix, shape (n, n_coarse)
        Linear elements to all unknowns, see `linear_part`.
    """

    matrix: Any
    prolongation: Any

    @cached_property
    def _coarse(self) -> Any:
        import pyamg

        coarse = (self.prolongation.T @ (self.matrix @ self.prolongation)).tocsr()
        coarse.sort_indices()
        relax = ("gauss_seidel", {"sweep": "symmetric", "iterations": 1})
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # levels that need no more coarsening
            return pyamg.smoothed_aggregation_solver(
                coarse,
                smooth=("jacobi", {"omega": 4.0 / 3.0, "weighting": "local"}),  # needs no random numbers
                presmoother=relax,
                postsmoother=relax,
                improve_candidates=None,
                max_coarse=COARSEST,
                coarse_solver="splu",
            ).aspreconditioner(cycle="V")

    def __call__(self, right: NDArray[np.float64]) -> NDArray[np.float64]:
        """Forward sweep, coarse correction, backward sweep; (n,) to (n,)."""
        from pyamg.relaxation.relaxation import gauss_seidel

        x = np.zeros_like(right)
        gauss_seidel(self.matrix, x, right, sweep="forward")
        x += self.prolongation @ (self._coarse @ (self.prolongation.T @ (right - self.matrix @ x)))
        gauss_seidel(self.matrix, x, right, sweep="backward")
        return x


@dataclass(frozen=True, eq=False)
class Blocks:
    """Approximate inverse of coupled equations, block by block: block lower triangular, two levels for every block.

    Parameters
    ----------
    matrix : scipy sparse matrix in compressed rows, shape (n, n)
    parts : list of (unknowns, prolongation)
        Indices of the unknowns of each block, in the order of solution; linear elements to these unknowns.
    """

    matrix: Any
    parts: list[tuple[NDArray[np.int64], Any]]

    @cached_property
    def _levels(self) -> list[tuple[NDArray[np.int64], Any, TwoLevel]]:
        """Unknowns, their rows, and the approximate inverse of each diagonal block."""
        found = []
        for unknowns, prolongation in self.parts:
            rows = self.matrix[unknowns]
            found.append((unknowns, rows, TwoLevel(rows[:, unknowns].tocsr(), prolongation)))
        return found

    def __call__(self, right: NDArray[np.float64]) -> NDArray[np.float64]:
        """(n,) to (n,); each block sees the solution of those before."""
        x = np.zeros_like(right)
        for unknowns, rows, level in self._levels:
            x[unknowns] = level(right[unknowns] - rows @ x)
        return x


def linear_part(space: Space, spread: Any) -> Any:
    """Prolongation from linear elements on the same mesh to the free unknowns, sparse (n_free, n_coarse).

    Parameters
    ----------
    space : Space
    spread : scipy sparse matrix, shape (n, n_free)
        Free unknowns to all; several unknowns may share one.
    """
    from scipy.sparse import csr_matrix, diags

    corners = np.asarray(space.numbering.nodal_dofs[0])
    picked = csr_matrix(spread)[corners]
    used = np.flatnonzero(np.asarray(picked.sum(axis=0)).ravel())
    sharing = np.asarray(spread.sum(axis=0)).ravel()
    return (diags(1 / sharing) @ spread.T @ corner_interpolation(space) @ picked[:, used]).tocsr()


def are_compact(space: Space) -> bool:
    """Whether relaxation by points works: nine cells of ten are stretched less than about four to one.

    Iterations grow with the stretching, from about 20 for cubes and tets that fill them to 60 at four to one. The
    measure is the ratio of the singular values of the map from the reference cell, over that of such a tet.
    """
    jacobian = affine_map(space.mesh.cells)[1]
    size = np.linalg.svd(jacobian.transpose(2, 0, 1), compute_uv=False)
    plain = REFERENCE_RATIO if space.mesh.kind == "tetra" else 1.0
    return bool(np.quantile(size[:, 0] / size[:, -1], 0.9) <= LARGEST_STRETCHING * plain)


def corner_interpolation(space: Space) -> Any:
    """Values at the corners of the mesh to those of their linear interpolant at all unknowns, sparse (n, n_corners)."""
    from scipy.sparse import csr_matrix

    cells = space.mesh.cells
    element, linear = space.element, cells.elem()
    shape = np.array(
        [linear.lbasis(element.doflocs.T, k)[0] * np.ones(len(element.doflocs)) for k in range(len(cells.t))]
    )
    dofs = np.asarray(space.numbering.element_dofs)
    owner, local = np.empty(space.size, dtype=np.int64), np.empty(space.size, dtype=np.int64)
    for i, row in enumerate(dofs):
        owner[row], local[row] = np.arange(row.size), i
    columns, weights = cells.t[:, owner].T, shape[:, local].T
    rows = np.repeat(np.arange(space.size), len(cells.t))
    kept = np.abs(weights.ravel()) > 1e-12
    entries = (weights.ravel()[kept], (rows[kept], columns.ravel()[kept]))
    return csr_matrix(entries, shape=(space.size, cells.p.shape[1]))
