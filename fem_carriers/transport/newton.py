"""Newton's method for the excess density, with a named outcome."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import SolverError
from .solver import LinearSolver

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

LARGEST_STEPS = 80
KEEP_BELOW = 0.1
"""While a step lowers the sum of |F| below this share, the Jacobian is kept for the next one."""
LINEAR_TOLERANCE = 1e-8
"""Of the residual of a step's linear equations, where they are solved by iteration; the next step sees to the rest."""


@dataclass(frozen=True)
class Outcome:
    """How a solution was reached.

    Parameters
    ----------
    name : str
        "converged"; anything else is raised as a `SolverError`.
    steps : int
        Newton steps.
    residual : float
        Sum of |F| over the free equations, relative to the larger of generation and recombination.
    """

    name: str
    steps: int
    residual: float

    def __str__(self) -> str:
        return f"{self.name} in {self.steps} steps, residual {self.residual:.1e} of the carriers"


def newton(
    residual: Callable[[NDArray[np.float64]], NDArray[np.float64]],
    jacobian: Callable[[NDArray[np.float64]], Any],
    start: NDArray[np.float64],
    throughput: Callable[[NDArray[np.float64]], float],
    noise: Callable[[NDArray[np.float64]], float],
    *,
    tolerance: float = 1e-11,
    solver: LinearSolver | None = None,
) -> tuple[NDArray[np.float64], Outcome]:
    """Solve F(x) = 0 by damped Newton steps.

    A step is halved until the sum of |F| falls. It is done when the sum of |F| is below `tolerance` of the throughput
    of carriers, or when it no longer falls and is at round-off: x does not change and F is small against the
    throughput, or F is small against the terms that it sums (where opposed fluxes cancel and nothing passes through).

    Parameters
    ----------
    residual, jacobian : functions of x (n,), giving F (n,) and dF/dx (n, n)
    start : (n,) array
    throughput : function
        The larger of generation and total recombination at x.
    noise : function
        What rounding can leave in the sum of |F| at x, see `round_off`.
    tolerance : float
    solver : LinearSolver, optional

    Returns
    -------
    x : (n,) array
    outcome : Outcome

    Raises
    ------
    SolverError
        "not converged", "not a number" or "singular", with advice.
    """
    x, F = start, residual(start)
    best, equations, solver = np.inf, None, solver or LinearSolver()
    for step in range(LARGEST_STEPS):
        size = np.abs(F).sum() / max(throughput(x), 1e-300)
        if not np.isfinite(size):
            raise SolverError(
                "not a number", "The residual is not finite; check functions of position and extreme inputs."
            )
        if size <= tolerance and (step > 0 or size == 0):
            return x, Outcome("converged", step, float(size))
        if equations is None:
            equations = solver.prepare(jacobian(x))
        change = -equations.solve(F, LINEAR_TOLERANCE)
        settled = np.abs(change).max() <= 1e-12 * np.abs(x).max() and size <= 1e-9
        if size >= 0.5 * best and (settled or np.abs(F).sum() <= noise(x)):
            return x, Outcome("converged", step, float(size))
        best, before = min(best, size), np.abs(F).sum()
        x, F = _damped(residual, x, F, change)
        if np.abs(F).sum() > KEEP_BELOW * before:
            equations = None  # else they still serve
    raise SolverError(
        "not converged",
        f"Newton's method stopped after {LARGEST_STEPS} steps at a residual of {size:.1e} of the carriers. "
        "Try a smaller first step, a lower light level first, or check for extreme inputs.",
    )


def round_off(matrix: Any, x: NDArray[np.float64]) -> float:
    """What rounding can leave in the sum of |F| where F sums the terms A x: 16 ε Σ |A| |x|.

    16 stands for the number of terms that make up an entry of A, some of which cancel there.
    """
    return float(16 * np.finfo(float).eps * (abs(matrix) @ np.abs(x)).sum())


def _damped(residual: Any, x: Any, F: Any, change: Any) -> tuple[Any, Any]:
    """The longest of the steps 1, 1/2, 1/4, … that lowers the sum of |F|; the shortest one if none does."""
    before, scale = np.abs(F).sum(), 1.0
    while True:
        trial = x + scale * change
        F_trial = residual(trial)
        after = np.abs(F_trial).sum()
        if (np.isfinite(after) and after < before) or scale < 1e-3:
            return trial, F_trial
        scale /= 2
