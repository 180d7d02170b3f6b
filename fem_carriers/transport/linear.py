"""Sparse direct solution: MKL Pardiso where it is installed, SciPy's SuperLU elsewhere."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager
from copy import copy
from functools import cache
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import SolverError

if TYPE_CHECKING:
    from types import TracebackType

    from numpy.typing import NDArray

ONE_THREAD_BELOW = 20_000
"""Unknowns below which a system is solved on one thread."""


class Factorization:
    """LU factors of a square sparse matrix; use as a context manager to free them.

    Rows and columns are scaled to unit size first, since a finely graded mesh spreads entries over many decades.

    Parameters
    ----------
    matrix : scipy sparse matrix, shape (n, n)
    scale : bool
        False if the caller has scaled the matrix.

    Raises
    ------
    SolverError
        "singular" if the matrix has no inverse.
    """

    def __init__(self, matrix: Any, *, scale: bool = True) -> None:
        import scipy.sparse as sp

        self._matrix = sp.csr_matrix(matrix)
        size = np.sqrt(np.abs(self._matrix.diagonal())) if scale else np.ones(self._matrix.shape[0])
        if not np.all(np.isfinite(self._matrix.data)):
            raise SolverError("not a number", "The equations contain NaN or infinite entries; check functions given.")
        self._scale = 1 / np.where(size > 0, size, 1.0)
        scaled = sp.diags(self._scale) @ self._matrix @ sp.diags(self._scale)
        self._solver = _pardiso(scaled) or _superlu(scaled)

    def solve(self, right: NDArray[np.float64], *, refinements: int = 1) -> NDArray[np.float64]:
        """x with A x = b, improved by iterative refinement.

        Parameters
        ----------
        right : (n,) array
        refinements : int
            Steps of iterative refinement.

        Raises
        ------
        SolverError
            "singular" if the residual stays large.
        """
        x = self._once(right)
        for _ in range(refinements):
            x = x + self._once(right - self._matrix @ x)
        size = abs(self._matrix) @ np.abs(x) + np.abs(right)
        if not np.all(np.isfinite(x)) or np.abs(right - self._matrix @ x).max() > 1e-8 * size.max():
            raise SolverError(
                "singular", "The linear equations are singular or nearly so; is there a sink for carriers?"
            )
        return x

    def _once(self, right: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(self._scale * self._solver.solve(self._scale * right))

    def __enter__(self) -> Factorization:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._solver.free()

    def __del__(self) -> None:
        if hasattr(self, "_solver") and not sys.is_finalizing():
            self._solver.free()


@contextmanager
def _threads(library: Any, size: int) -> Iterator[None]:
    """One thread for small systems, which several only slow down."""
    small = size < ONE_THREAD_BELOW
    before = library.MKL_Set_Num_Threads_Local(1) if small else 0
    try:
        yield
    finally:
        if small:
            library.MKL_Set_Num_Threads_Local(before)


@cache
def _pardiso_library() -> Any:
    """A solver to copy: finding the library on disk takes longer than solving a small problem."""
    from pypardiso import PyPardisoSolver

    return PyPardisoSolver(mtype=11)


class _Pardiso:
    def __init__(self, matrix: Any, *, scale: bool = True) -> None:
        self._matrix, self._solver = matrix, copy(_pardiso_library())
        self._solver.pt, self._solver.iparm = np.zeros_like(self._solver.pt), np.zeros_like(self._solver.iparm)
        with _threads(self._solver.libmkl, matrix.shape[0]):
            self._solver.factorize(matrix)

    def solve(self, right: NDArray[np.float64]) -> NDArray[np.float64]:
        with _threads(self._solver.libmkl, self._matrix.shape[0]):
            return np.asarray(self._solver.solve(self._matrix, right))

    def free(self) -> None:
        if self._matrix is not None:
            self._solver.free_memory(everything=True)
            self._matrix = None


class _SuperLU:
    def __init__(self, matrix: Any, *, scale: bool = True) -> None:
        from scipy.sparse.linalg import splu

        self._lu: Any = splu(matrix.tocsc())

    def solve(self, right: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(self._lu.solve(right))

    def free(self) -> None:
        self._lu = None


def _pardiso(matrix: Any) -> Any:
    """Pardiso factors, or None where Pardiso is not installed."""
    matrix = matrix.tocsr()
    matrix.sort_indices()
    try:
        return _Pardiso(matrix)
    except (ImportError, OSError):
        return None
    except Exception as error:
        raise SolverError("singular", f"The linear equations could not be factorised ({error}).") from error


def _superlu(matrix: Any) -> Any:
    try:
        return _SuperLU(matrix)
    except RuntimeError as error:
        raise SolverError("singular", f"The linear equations could not be factorised ({error}).") from error
