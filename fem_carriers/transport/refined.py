"""Linear equations solved to round-off, whichever way the solver takes."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .solver import LinearSolver, Prepared

TOLERANCE = 1e-13
"""Of the residual, where equations are solved by iteration."""


@dataclass(frozen=True, eq=False)
class Refined:
    """A matrix (n, n) ready to be solved with, with iterative refinement.

    Parameters
    ----------
    matrix : sparse matrix
    prepared : Prepared
    refinements : int
        Steps of refinement beyond those of the solver.
    """

    matrix: Any
    prepared: Prepared
    refinements: int

    def solve(self, right: NDArray[np.float64]) -> NDArray[np.float64]:
        """x with A x = right."""
        x = self.prepared.solve(right, TOLERANCE)
        for _ in range(self.refinements):
            x = x + self.prepared.solve(right - self.matrix @ x, TOLERANCE)
        return np.asarray(x)


def refined(solver: LinearSolver, matrix: Any) -> Refined:
    """The matrix with a solver of its own."""
    matrix = matrix.tocsr()
    return Refined(matrix, solver.prepare(matrix), 2 if solver.two_carriers else 0)
