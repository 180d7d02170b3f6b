"""Which way linear equations are solved: by size, by shape of the cells, and by what is kept from before.

- Small systems, and those in two dimensions: factors in double precision.
- Large three-dimensional systems on compact cells: Krylov methods with a two-level preconditioner (`two_level`), for
  two carriers block by block.
- Large ones on stretched cells, where that fails: factors in single precision (of the symmetric part for one carrier),
  as preconditioner of a Krylov method in double precision.
- Where factors are expensive they are kept, and serve as preconditioner for the next matrices (later Newton steps,
  neighbouring voltages) as long as that takes few iterations.

The true residual is checked whichever way is taken; a way that does not get there is followed by the next, up to
factors in double precision, which refuse a singular matrix.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import SolverError
from .krylov import Apply, solve_krylov
from .linear import Factorization, Scaled
from .memory import check_memory, factor_bytes
from .two_level import Blocks, TwoLevel, are_compact, linear_part

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .spaces import Space

TWO_LEVEL_ABOVE = 40_000
"""Unknowns above which the two-level method is faster than factors on compact cells in three dimensions."""
SINGLE_ABOVE = 50_000
"""Unknowns above which factors are computed in single precision."""
LARGEST_RESIDUAL = 0.5
"""Of the right-hand side: a solution that leaves more has no correct digit."""
TWO_LEVEL_ITERATIONS, PATIENT_ITERATIONS = 80, 600
"""Largest number of iterations: before factors are tried, and where factors do not fit into memory."""
FACTOR_ITERATIONS, KEPT_ITERATIONS = 30, 12
"""Largest number of iterations with factors of the same matrix in single precision, and with those of another one."""
BYTES_PER_NODE = {"triangle": 5e3, "quad": 5e3, "tetra": 4.5e3, "hexahedron": 9e3}
TWO_CARRIERS_MORE = 3.0
"""Memory of fields and matrices for quadratic elements and one unknown per node, and how much more for two."""
FORECAST_SHARE = 0.75
"""Of the forecast, above which there is no hope."""


@dataclass(eq=False)
class LinearSolver:
    """Solves a series of related equations.

    Parameters
    ----------
    linear_parts : function, optional
        Gives (unknowns, prolongation from linear elements to them) of each carrier, see `two_level.Blocks`; None where
        the two-level method does not apply.
    compact : bool
        Whether cells are compact enough for it to be tried first.
    two_carriers : bool
        Rows and columns are then scaled separately, and symmetric parts are of no use.
    kept : Factorization, optional
        The last factors computed.
    solutions, iterations, factorisations : int
        How many so far; iterations are those of Krylov methods.
    """

    linear_parts: Callable[[], list[tuple[Any, Any]]] | None = None
    compact: bool = False
    two_carriers: bool = False
    kept: Factorization | None = None
    solutions: int = 0
    iterations: int = 0
    factorisations: int = 0

    def prepare(self, matrix: Any) -> Prepared:
        """One matrix (n, n), ready to be solved with; factors of an earlier one are dropped if they came cheaply."""
        if self.kept is not None and not (self.kept.costs_many_solutions and self.kept.scaled.size == matrix.shape[0]):
            self.kept = None
        return Prepared(self, Scaled(matrix, equilibrate=self.two_carriers))

    def factorised(self, scaled: Scaled, *, single: bool) -> Factorization:
        """New factors, which take the place of those kept."""
        self.kept = None
        positive = not self.two_carriers and (single or is_symmetric(scaled.matrix))
        try:
            self.kept = Factorization(scaled, positive=positive, single=single)
        except SolverError as error:
            if not positive or error.outcome != "singular":
                raise
            self.kept = Factorization(scaled, single=single)  # not positive definite
        self.factorisations += 1
        return self.kept


@dataclass(frozen=True, eq=False)
class Prepared:
    """A matrix and the ways to solve with it."""

    owner: LinearSolver
    scaled: Scaled

    def solve(self, right: NDArray[np.float64], tolerance: float = 1e-10) -> NDArray[np.float64]:
        """x with A x = right.

        Parameters
        ----------
        right : (n,) array
        tolerance : float
            Of the residual, in the 2-norm of scaled rows, where a Krylov method is used.

        Raises
        ------
        SolverError
            "singular", "not enough memory".
        """
        if not right.any():
            return np.zeros_like(right)
        self.owner.solutions += 1
        b = self.scaled.rows * right
        x = self._by_two_levels(b, tolerance) if self.owner.compact else None
        if x is None and self.owner.kept is not None:
            x = self._by_kept_factors(b, tolerance)
        if x is None:
            x = self._by_new_factors(b, tolerance)
        if np.linalg.norm(b - self.scaled.matrix @ x) > LARGEST_RESIDUAL * np.linalg.norm(b):
            raise SolverError("singular", "The linear equations are singular; is there a sink for carriers?")
        return np.asarray(self.scaled.columns * x)

    def _by_two_levels(
        self, b: NDArray[np.float64], tolerance: float, limit: int = TWO_LEVEL_ITERATIONS
    ) -> NDArray[np.float64] | None:
        if self.scaled.size < TWO_LEVEL_ABOVE:
            return None
        x = self._krylov(b, self._two_level, tolerance, limit, symmetric=self._is_symmetric)
        self.owner.compact = x is not None  # not tried again where it fails
        return x

    def _by_kept_factors(self, b: NDArray[np.float64], tolerance: float) -> NDArray[np.float64] | None:
        """With factors of this matrix or of an earlier one."""
        factors = self.owner.kept
        assert factors is not None
        own = factors.scaled is self.scaled
        if own and factors.exact:
            return self._exactly(factors, b)
        limit = FACTOR_ITERATIONS if own else KEPT_ITERATIONS
        rows, columns = self.scaled.rows, self.scaled.columns
        symmetric = factors.positive and self._is_symmetric
        return self._krylov(b, lambda v: factors.approximate(v / rows) / columns, tolerance, limit, symmetric)

    def _by_new_factors(self, b: NDArray[np.float64], tolerance: float) -> NDArray[np.float64]:
        try:
            if self.scaled.size > SINGLE_ABOVE:
                self.owner.factorised(self.scaled, single=True)
                x = self._by_kept_factors(b, tolerance)
                if x is not None:
                    return x
            return self._exactly(self.owner.factorised(self.scaled, single=False), b)
        except SolverError as error:
            if error.outcome != "not enough memory" or self.owner.linear_parts is None:
                raise
            x = self._by_two_levels(b, tolerance, PATIENT_ITERATIONS)
            if x is None:
                raise
            return x

    def _exactly(self, factors: Factorization, b: NDArray[np.float64]) -> NDArray[np.float64]:
        refinements = 0 if self.owner.two_carriers else 1  # steps of the bipolar form refine anyway
        return factors.solve(b / self.scaled.rows, refinements=refinements) / self.scaled.columns

    def _krylov(
        self, b: NDArray[np.float64], precondition: Apply, tolerance: float, limit: int, symmetric: bool
    ) -> NDArray[np.float64] | None:
        x, used = solve_krylov(
            self.scaled.matrix, b, precondition, symmetric=symmetric, tolerance=tolerance, limit=limit
        )
        self.owner.iterations += used
        return x

    @cached_property
    def _is_symmetric(self) -> bool:
        return not self.owner.two_carriers and is_symmetric(self.scaled.matrix)

    @cached_property
    def _two_level(self) -> Apply:
        from scipy.sparse import diags

        assert self.owner.linear_parts is not None
        parts = [(i, (diags(1 / self.scaled.columns[i]) @ coarse).tocsr()) for i, coarse in self.owner.linear_parts()]
        if len(parts) == 1:
            return TwoLevel(self.scaled.matrix, parts[0][1])
        return Blocks(self.scaled.matrix, parts)


def one_carrier_solver(space: Space, spread: Any) -> LinearSolver:
    """Solver of equations for one unknown per node.

    Parameters
    ----------
    space : Space
    spread : sparse matrix, shape (n, n_free)
        Free unknowns to all.
    """
    if space.mesh.dimension < 3 or space.size < TWO_LEVEL_ABOVE:
        return LinearSolver()
    every = np.arange(spread.shape[1])
    return LinearSolver(lambda: [(every, linear_part(space, spread))], compact=are_compact(space))


def two_carrier_solver(space: Space, spread: Callable[[], Any]) -> LinearSolver:
    """Solver of equations for two unknowns per node, stacked.

    Parameters
    ----------
    space : Space
    spread : function
        Gives the sparse matrix (2n, n_free): free unknowns to all.
    """
    if space.mesh.dimension < 3 or 2 * space.size < TWO_LEVEL_ABOVE:
        return LinearSolver(two_carriers=True)

    def parts() -> list[tuple[Any, Any]]:
        rows = spread().tocsr()
        halves = (rows[: space.size], rows[space.size :])
        used = [np.flatnonzero(np.asarray(half.sum(axis=0)).ravel()) for half in halves]
        return [(i, linear_part(space, half[:, i])) for i, half in zip(used, halves, strict=True)]

    return LinearSolver(parts, compact=are_compact(space), two_carriers=True)


def forecast_bytes(space: Space, carriers: int) -> float:
    """Memory that a solution will take at its peak: fields, matrices, and factors where they will be needed.

    A fit to measured peaks; it may be a third off.

    Parameters
    ----------
    space : Space
    carriers : {1, 2}
        Unknowns per node.
    """
    assembled = BYTES_PER_NODE[space.mesh.kind] * (1 if carriers == 1 else TWO_CARRIERS_MORE) * space.size
    size = carriers * space.size
    if space.mesh.dimension == 2 or (size > TWO_LEVEL_ABOVE and are_compact(space)):
        return assembled
    share = (0.5 if size > SINGLE_ABOVE else 1.0) * (0.5 if carriers == 1 else 1.0)
    return assembled + share * factor_bytes(size, two_carriers=carriers == 2)


def check_forecast(space: Space, carriers: int) -> None:
    """Refuse before the start what would run out of memory.

    Raises
    ------
    SolverError
        "not enough memory".
    """
    needed = FORECAST_SHARE * forecast_bytes(space, carriers)
    check_memory(needed, f"{space.size} nodes with {carriers} unknown{'s' * (carriers - 1)} each, at the least")


def is_symmetric(matrix: Any) -> bool:
    """Whether xᵀA y = yᵀA x to round-off for random signs x, y."""
    x, y = np.random.default_rng(0).choice([-1.0, 1.0], (2, matrix.shape[0]))
    return bool(abs(x @ (matrix @ y) - y @ (matrix @ x)) <= 1e-13 * np.linalg.norm(matrix.data))
