"""MKL Pardiso's factors of a sparse matrix, with the memory they need known before they are computed."""

from __future__ import annotations

import ctypes
from collections.abc import Iterator
from contextlib import contextmanager
from functools import cache
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import SolverError
from .memory import check_memory

if TYPE_CHECKING:
    from numpy.typing import NDArray

ONE_THREAD_BELOW = 20_000
"""Unknowns below which a system is solved on one thread."""
PARALLEL_ANALYSIS_ABOVE = 100_000
"""Unknowns above which the equations are ordered on several threads."""
UNSYMMETRIC, POSITIVE = 11, 2
"""Pardiso's numbers for real unsymmetric and for symmetric positive definite matrices."""
ANALYSE, FACTORISE, SOLVE, FREE = 11, 22, 33, -1
NO_MEMORY = (-2, -9, -10)
"""Pardiso's error numbers for memory that could not be had."""


class Pardiso:
    """Factors of a square matrix.

    Parameters
    ----------
    matrix : scipy sparse matrix in compressed rows, shape (n, n)
    positive : bool
        Whether the matrix is symmetric positive definite; factors then take half the memory and time.
    single : bool
        Factors in single precision, about half of both again: a preconditioner.

    Raises
    ------
    ImportError, OSError
        MKL is not installed.
    SolverError
        "not enough memory", before the factors are computed; "singular".

    References
    ----------
    O. Schenk and K. Gärtner, Future Gener. Comput. Syst. 20, 475 (2004).
    """

    def __init__(self, matrix: Any, *, positive: bool = False, single: bool = False) -> None:
        self._library, self._number = _library(), np.float32 if single else np.float64
        self._kind = POSITIVE if positive else UNSYMMETRIC
        self.size = int(matrix.shape[0])
        self._matrix: Any = _sorted(_upper(matrix) if positive else matrix, self._number)
        self._handle, self._settings = np.zeros(64, dtype=np.int64), np.zeros(64, dtype=np.int32)
        self._set(positive, single)
        self._call(ANALYSE)
        try:
            check_memory(self.bytes_needed, f"the factors of {self.size} equations")
            self._call(FACTORISE)
        except SolverError:
            self.free()
            raise

    def _set(self, positive: bool, single: bool) -> None:
        settings = self._settings
        settings[0] = 1  # own settings follow
        settings[1] = 3 if self.size > PARALLEL_ANALYSIS_ABOVE else 2  # nested dissection
        settings[9] = 13  # pivots below 1e-13 are perturbed; the residual is checked by the caller
        settings[10] = settings[12] = 0 if positive else 1  # scaling and matching
        settings[17] = -1  # count the entries of the factors
        settings[27] = int(single)
        settings[34] = 1  # indices count from zero

    @property
    def bytes_needed(self) -> float:
        """Memory at the peak of the factorisation, known after the analysis."""
        peak, kept, factors = (int(k) for k in self._settings[14:17])
        return 1024.0 * max(peak, kept + factors)

    @property
    def entries(self) -> int:
        """Entries of the factors."""
        return int(self._settings[17]) & 0xFFFFFFFF

    def solve(self, right: NDArray[np.float64]) -> NDArray[np.float64]:
        """x with A x = right, shape (n,), without refinement."""
        x = np.empty(self.size, dtype=self._number)
        self._call(SOLVE, np.ascontiguousarray(right, dtype=self._number), x)
        return x.astype(np.float64, copy=False)

    def free(self) -> None:
        """Give the memory back."""
        if self._matrix is not None:
            self._call(FREE)
            self._matrix = None

    def _call(self, phase: int, right: Any = None, x: Any = None) -> None:
        kind, step, size, one, quiet = (ctypes.c_int32(v) for v in (self._kind, phase, self.size, 1, 0))
        error, a = ctypes.c_int32(0), self._matrix
        right, x = (np.zeros(1) if v is None else v for v in (right, x))
        arrays = [_pointer(v) for v in (a.data, a.indptr, a.indices)]
        by_reference = [ctypes.byref(v) for v in (one, one, kind, step, size)]
        with _threads(self._library, self.size):
            self._library.pardiso(
                _pointer(self._handle), *by_reference, *arrays, None, ctypes.byref(one), _pointer(self._settings),
                ctypes.byref(quiet), _pointer(right), _pointer(x), ctypes.byref(error),
            )  # fmt: skip
        if error.value in NO_MEMORY:
            raise SolverError("not enough memory", f"The factors of {self.size} equations do not fit into memory.")
        if error.value != 0:
            raise SolverError("singular", f"The linear equations could not be factorised (error {error.value}).")


def _pointer(array: NDArray[Any]) -> Any:
    return array.ctypes.data_as(ctypes.c_void_p)


def _sorted(matrix: Any, number: Any) -> Any:
    """Compressed rows in 32-bit indices, sorted; an empty row would crash the library."""
    from scipy.sparse import csr_matrix

    rows = csr_matrix(matrix, dtype=number)
    if not rows.has_sorted_indices:
        rows = rows.sorted_indices()
    if not np.diff(rows.indptr).all():
        raise SolverError("singular", "The linear equations could not be factorised (an empty equation).")
    rows.indices, rows.indptr = rows.indices.astype(np.int32, copy=False), rows.indptr.astype(np.int32, copy=False)
    return rows


def _upper(matrix: Any) -> Any:
    from scipy.sparse import triu

    return triu(matrix, format="csr")


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
def _library() -> Any:
    """The MKL library; finding it on disk takes longer than solving a small problem."""
    from pypardiso import PyPardisoSolver

    library = PyPardisoSolver(mtype=UNSYMMETRIC).libmkl
    library.pardiso.argtypes, library.pardiso.restype = None, None
    return library
