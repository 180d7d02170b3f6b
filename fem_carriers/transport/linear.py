"""Sparse direct solution: MKL Pardiso where it is installed, SciPy's SuperLU elsewhere."""

from __future__ import annotations

import sys
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import SolverError
from .memory import check_memory, factor_bytes
from .pardiso import Pardiso

if TYPE_CHECKING:
    from types import TracebackType

    from numpy.typing import NDArray

MANY_ENTRIES = 150
"""Entries of the factors per unknown above which computing them takes as long as tens of solutions with them: about
70 in two dimensions, 400 and more in three."""


class Scaled:
    """A square sparse matrix with rows and columns scaled to unit size: A = R⁻¹ S C⁻¹, R and C diagonal.

    Parameters
    ----------
    matrix : scipy sparse matrix, shape (n, n)
    equilibrate : bool
        False: R = C = |diagonal|^−½, which keeps a symmetric matrix symmetric. True: the largest entry of every row,
        then of every column, becomes 1.

    Raises
    ------
    SolverError
        "not a number".
    """

    def __init__(self, matrix: Any, *, equilibrate: bool = False) -> None:
        import scipy.sparse as sp

        A: Any = sp.csr_matrix(matrix)
        if not np.all(np.isfinite(A.data)):
            raise SolverError("not a number", "The equations contain NaN or infinite entries; check functions given.")
        if equilibrate:
            self.rows = 1 / _largest(A, 1)
            A = sp.diags(self.rows) @ A
            self.columns = 1 / _largest(A, 0)
            self.matrix = (A @ sp.diags(self.columns)).tocsr()
        else:
            size = np.sqrt(np.abs(A.diagonal()))
            self.rows = self.columns = 1 / np.where(size > 0, size, 1.0)
            self.matrix = (sp.diags(self.rows) @ A @ sp.diags(self.columns)).tocsr()
        self.matrix.sort_indices()

    @property
    def size(self) -> int:
        """Number of unknowns."""
        return int(self.matrix.shape[0])


class Factorization:
    """LU factors of a square sparse matrix; use as a context manager to free them.

    Rows and columns are scaled to unit size first, since a finely graded mesh spreads entries over many decades.

    Parameters
    ----------
    matrix : scipy sparse matrix, shape (n, n), or Scaled
    positive : bool
        Factors of the symmetric part of the matrix, which is positive definite.
    single : bool
        Factors in single precision where the library offers it.

    Attributes
    ----------
    exact : bool
        Whether `solve` applies: the factors are those of the matrix itself, in double precision.

    Raises
    ------
    SolverError
        "singular" if the matrix has no inverse; "not enough memory" before it runs out.
    """

    def __init__(self, matrix: Any, *, positive: bool = False, single: bool = False) -> None:
        self.scaled = matrix if isinstance(matrix, Scaled) else Scaled(matrix)
        self.positive = positive
        A = self.scaled.matrix
        self._solver = _factors((A + A.T) / 2 if positive else A, positive, single)
        self.exact = not single and (not positive or abs(A - A.T).max() <= 1e-13)

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
        A, b = self.scaled.matrix, self.scaled.rows * right
        x = self._solver.solve(b)
        for _ in range(refinements):
            x = x + self._solver.solve(b - A @ x)
        size = abs(A) @ np.abs(x) + np.abs(b)
        if not np.all(np.isfinite(x)) or np.abs(b - A @ x).max() > 1e-8 * size.max():
            raise SolverError(
                "singular", "The linear equations are singular or nearly so; is there a sink for carriers?"
            )
        return np.asarray(self.scaled.columns * x)

    def approximate(self, right: NDArray[np.float64]) -> NDArray[np.float64]:
        """The same once, unchecked: a preconditioner."""
        return np.asarray(self.scaled.columns * self._solver.solve(self.scaled.rows * right))

    @property
    def costs_many_solutions(self) -> bool:
        """Whether computing the factors takes far longer than solving with them."""
        return bool(self._solver.entries * (2 if self.positive else 1) > MANY_ENTRIES * self.scaled.size)

    def free(self) -> None:
        """Give the memory back."""
        self._solver.free()

    def __enter__(self) -> Factorization:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.free()

    def __del__(self) -> None:
        if hasattr(self, "_solver") and not sys.is_finalizing():
            self.free()


class _SuperLU:
    def __init__(self, matrix: Any) -> None:
        from scipy.sparse.linalg import splu

        try:
            self._lu: Any = splu(matrix.tocsc())
        except (RuntimeError, MemoryError) as error:
            raise SolverError("singular", f"The linear equations could not be factorised ({error}).") from error
        self.entries = int(self._lu.nnz)

    def solve(self, right: NDArray[np.float64]) -> NDArray[np.float64]:
        """x with A x = b, both (n,)."""
        return np.asarray(self._lu.solve(right))

    def free(self) -> None:
        """Give the memory of the factors back."""
        self._lu = None


def _factors(matrix: Any, positive: bool, single: bool) -> Any:
    """Pardiso's factors, or SuperLU's where Pardiso is not installed."""
    try:
        return Pardiso(matrix, positive=positive, single=single)
    except (ImportError, OSError):
        check_memory(factor_bytes(matrix.shape[0], stock=True), f"the factors of {matrix.shape[0]} equations")
        return _SuperLU(matrix)


def _largest(matrix: Any, axis: int) -> NDArray[np.float64]:
    size = np.asarray(abs(matrix).max(axis=axis).toarray()).ravel()
    return np.where(size > 0, size, 1.0)
