"""Newton's method for a grid at one terminal voltage.

With J falling in u, K x − Bᵀ w J(V + B x) is the gradient of a convex function, so a damped Newton method always
arrives. Factors of the (symmetric, positive definite) Jacobian are kept and reused as a preconditioner.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import SolverError
from ..transport.linear import Factorization
from .circuit import Circuit

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

MOST_STEPS = 60
LARGEST_STEP_V = 0.1
SETTLED_V = 1e-10
"""Newton's method has arrived when no potential moves by more than this."""
ROUGH, FINE = 1e-6, 1e-11
"""Relative accuracy of linear solutions: within Newton's method, and of the slope."""
MOST_ITERATIONS = 12
"""Conjugate-gradient iterations with old factors, beyond which new ones are made."""


@dataclass(frozen=True, eq=False)
class GridState:
    """A solved grid.

    Parameters
    ----------
    circuit : Circuit
    voltage_V : float
        Of the terminals.
    x : (n_unknowns,) float array
        Potentials relative to their own terminal.
    slope_x : (n_unknowns,) float array
        Their derivative in the terminal voltage.
    steps : int
        Of Newton's method.
    """

    circuit: Circuit
    voltage_V: float
    x: NDArray[np.float64]
    slope_x: NDArray[np.float64]
    steps: int

    @cached_property
    def potentials(self) -> NDArray[np.float64]:
        """Of all nodes, relative to their own terminal, V."""
        return np.asarray(self.circuit.T @ self.x)

    @cached_property
    def local_voltages(self) -> tuple[NDArray[np.float64], ...]:
        """u at the points of every source, V."""
        return tuple(self.voltage_V + np.asarray(s.B @ self.potentials) for s in self.circuit.sources)

    @cached_property
    def _currents(self) -> tuple[float, float]:
        total = slope = 0.0
        moved = self.circuit.T @ self.slope_x
        for source, u in zip(self.circuit.sources, self.local_voltages, strict=True):
            j, dj = source.law(u)
            total += float(source.weight @ j)
            slope += float((source.weight * dj) @ (1 + source.B @ moved))
        return total, slope

    @property
    def current_A(self) -> float:
        """Terminal current of the modelled piece."""
        return self._currents[0]

    @property
    def slope_S(self) -> float:
        """dI/dV."""
        return self._currents[1]


class GridSolver:
    """Solves one circuit at any voltage, each time from the last state.

    Parameters
    ----------
    circuit : Circuit
    """

    def __init__(self, circuit: Circuit) -> None:
        import scipy.sparse as sp

        self.circuit = circuit
        T = circuit.T
        n = T.shape[1]
        total = sum((part.K for part in circuit.parts), sp.csr_matrix((T.shape[0], T.shape[0])))
        self.K: Any = sp.csr_matrix(T.T @ total @ T)
        self.B: Any = sp.csr_matrix(sp.vstack([s.B @ T for s in circuit.sources]))
        self.Bt: Any = self.B.T.tocsr()
        self.weight = np.concatenate([s.weight for s in circuit.sources])
        self.ends = np.cumsum([0, *(s.weight.size for s in circuit.sources)])
        self.x = np.zeros(n)
        self.voltage_V: float | None = None
        self.slope_x = np.zeros(n)
        self.factors: Factorization | None = None

    def laws(self, u: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """w J and w dJ/du at all points."""
        pairs = [s.law(u[a:b]) for s, a, b in zip(self.circuit.sources, self.ends[:-1], self.ends[1:], strict=True)]
        j, dj = (np.concatenate(part) for part in zip(*pairs, strict=True))
        return self.weight * j, self.weight * dj

    def at(self, voltage_V: float) -> GridState:
        """The state at a terminal voltage.

        Raises
        ------
        SolverError
            "not converged".
        """
        if self.x.size == 0:
            return GridState(self.circuit, voltage_V, self.x, self.x, 0)
        x = self.x
        if self.voltage_V is not None:
            x = x + np.clip((voltage_V - self.voltage_V) * self.slope_x, -LARGEST_STEP_V, LARGEST_STEP_V)
        x, steps = self._newton(voltage_V, x)
        _, dj = self.laws(voltage_V + self.B @ x)
        self.slope_x = self._linear(dj, self.Bt @ dj, FINE)
        self.x, self.voltage_V = x, voltage_V
        return GridState(self.circuit, voltage_V, x, self.slope_x, steps)

    def _newton(self, voltage_V: float, x: NDArray[np.float64]) -> tuple[NDArray[np.float64], int]:
        residual, dj = self._residual(voltage_V, x)
        for count in range(1, MOST_STEPS + 1):
            step = self._linear(dj, -residual, ROUGH)
            size = float(np.abs(step).max())
            if not np.isfinite(size):
                break
            downhill = float(residual @ step)
            length = min(1.0, LARGEST_STEP_V / size) if size > LARGEST_STEP_V else 1.0
            for _ in range(30):
                trial = x + length * step
                residual, dj = self._residual(voltage_V, trial)
                if size < 1e-7 or float(residual @ step) <= 0.5 * abs(downhill):
                    break  # the convex function still falls, or rises gently, along the step
                length *= 0.5
            x = trial
            if size * length < SETTLED_V:
                return x, count
        raise SolverError("not converged", f"The grid's potentials did not settle at {voltage_V:.4g} V.")

    def _residual(self, voltage_V: float, x: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        j, dj = self.laws(voltage_V + self.B @ x)
        return self.K @ x - self.Bt @ j, dj

    def _jacobian(self, dj: NDArray[np.float64]) -> Any:
        import scipy.sparse as sp

        return sp.csr_matrix(self.K - self.Bt @ sp.diags_array(dj) @ self.B)

    def _linear(self, dj: NDArray[np.float64], right: NDArray[np.float64], accuracy: float) -> NDArray[np.float64]:
        """The solution by conjugate gradients with the last factors, or with new ones if that takes long."""

        def multiply(p: NDArray[np.float64]) -> NDArray[np.float64]:
            return np.asarray(self.K @ p - self.Bt @ (dj * (self.B @ p)))

        if self.factors is not None:
            x = _conjugate_gradients(multiply, right, self.factors, accuracy)
            if x is not None:
                return x
        self.factors = Factorization(self._jacobian(dj))
        return self.factors.solve(right)


def _conjugate_gradients(
    multiply: Callable[[NDArray[np.float64]], NDArray[np.float64]],
    right: NDArray[np.float64],
    factors: Factorization,
    accuracy: float,
) -> NDArray[np.float64] | None:
    """x with A x = b, or None after too many iterations (Hestenes and Stiefel, 1952)."""
    x = np.zeros_like(right)
    r, z = right, factors.solve(right, refinements=0)
    p, rz = z, float(right @ z)
    goal = accuracy**2 * rz
    for _ in range(MOST_ITERATIONS):
        q = multiply(p)
        pq = float(p @ q)
        if not pq > 0 or not rz > 0:
            return None
        x = x + rz / pq * p
        r = r - rz / pq * q
        z = factors.solve(r, refinements=0)
        new = float(r @ z)
        if new <= goal:
            return np.asarray(x)
        p, rz = z + new / rz * p, new
    return None
