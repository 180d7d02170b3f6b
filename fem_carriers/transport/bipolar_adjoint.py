"""The adjoint of the bipolar form: gradients of terminal currents and recombination rates at a solved state.

With y the free unknowns, F the stacked equations (Fm, FM), A = ∂F/∂x, and a number J = a·x + b·F of the stacked
unknowns and the residuals (currents into ideal contacts are residuals),

    (gather A spread)ᵀ λ = spreadᵀ (a + Aᵀ b),   ψ = b − gatherᵀ λ,   dJ/dp = ∂J/∂p + ψ · ∂F/∂p

for every input p of the equations. Generation adds to the minority and takes from the majority equations, so that the
response to a carrier generated at node i is ψ_M,i − ψ_m,i (C. Donolato, Appl. Phys. Lett. 46, 270 (1985), for the
linear case).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C
from .bipolar_equations import unstack
from .bipolar_state import ideal_rows
from .channels import Key, rate_slopes
from .refined import Refined, refined
from .solver import LinearSolver

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .bipolar import Unknowns
    from .bipolar_state import BipolarState


@dataclass(frozen=True, eq=False)
class Functional:
    """A number J with the gradient a by the stacked unknowns and b by the stacked equations, each (2n,)."""

    by_unknowns: NDArray[np.float64]
    by_equations: NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class BipolarResponse:
    """Where a carrier goes that is generated anywhere: the differential response at a state.

    Parameters
    ----------
    state : BipolarState
    """

    state: BipolarState

    @property
    def n(self) -> int:
        """Number of nodes."""
        return self.state.system.space.size

    @cached_property
    def _completed(self) -> tuple[Unknowns, NDArray[np.float64]]:
        """Unknowns, and dΔn/du on layers."""
        return self.state.system.completed(self.state.x, self.state.voltages)

    @cached_property
    def matrix(self) -> Any:
        """A = ∂F/∂x in the stacked unknowns, sparse (2n, 2n)."""
        return self.state.equations.matrix(*self._completed)[0]

    @cached_property
    def _reduced(self) -> Any:
        """Derivative of the equations of the free unknowns by these."""
        return self.state.equations.gather @ self.matrix @ self.state.equations.spread

    @cached_property
    def _backward(self) -> Refined:
        return refined(LinearSolver(two_carriers=True), self._reduced.T)

    @cached_property
    def _forward(self) -> Refined:
        return refined(LinearSolver(two_carriers=True), self._reduced)

    def multipliers(self, functional: Functional) -> NDArray[np.float64]:
        """ψ, stacked (2n,): the change of J per unit added to every equation."""
        equations = self.state.equations
        right = equations.spread.T @ (functional.by_unknowns + self.matrix.T @ functional.by_equations)
        return np.asarray(functional.by_equations - equations.gather.T @ self._backward.solve(right))

    def moved(self, load: NDArray[np.float64]) -> NDArray[np.float64]:
        """Change of the stacked unknowns (2n,) by an added load (n,), to first order."""
        equations = self.state.equations
        return np.asarray(equations.spread @ self._forward.solve(equations.gather @ np.concatenate([load, -load])))

    @cached_property
    def functionals(self) -> dict[Key, Functional]:
        """Minority carriers per second to every channel; also ("terminal", t) of majority terminals.

        The fields of the channels and of the minority terminals sum to one.
        """
        found = {key: self._of_density(slope) for key, slope in rate_slopes(self.state.system, self.state.dn).items()}
        found |= {("surface", f"{name}: shunt"): self._of_shunt(m) for name, m in self._shunts.items()}
        found |= {("surface", name): self._of_bare(dofs) for name, dofs in self.state.bare_dofs.items()}
        conductors = self.state.system.conductors
        found |= {("terminal", t): self._of_terminal(t) for t in conductors.minority_terminals}
        return found | {("terminal", t): self._of_terminal(t) for t in conductors.majority_terminals}

    @property
    def _shunts(self) -> dict[str, Any]:
        return self.state.system.conductors.shunts

    @property
    def keys(self) -> list[Key]:
        """Channels whose fields sum to one."""
        majority = self.state.system.conductors.majority_terminals
        return [key for key in self.functionals if key[0] != "terminal" or key[1] not in majority]

    def field(self, key: Key) -> NDArray[np.float64]:
        """φ of a channel at the nodes, (n,): its rate per rate of generation there.

        Raises
        ------
        KeyError
            No such channel.
        """
        psi = self.multipliers(self.functionals[key])
        return np.asarray(psi[self.n :] - psi[: self.n])

    def _of_density(self, slope: NDArray[np.float64]) -> Functional:
        """A function of Δn with its gradient (n,); on layers Δn follows the junction voltage f − s."""
        layer, by_u = self.state.system.conductors.layer, self._completed[1]
        on_first = np.where(layer, -by_u, 1.0) * slope
        return Functional(np.concatenate([on_first, by_u * slope]), np.zeros(2 * self.n))

    def _of_shunt(self, conductance: Any) -> Functional:
        layer = self.state.system.conductors.layer
        by_voltage = np.where(layer, np.asarray(conductance.sum(axis=0)).ravel(), 0.0) / ELEMENTARY_CHARGE_C
        return Functional(np.concatenate([-by_voltage, by_voltage]), np.zeros(2 * self.n))

    def _of_bare(self, dofs: NDArray[np.int64]) -> Functional:
        by_equations = np.zeros(2 * self.n)
        by_equations[dofs] = -1.0
        return Functional(np.zeros(2 * self.n), by_equations)

    def _of_terminal(self, terminal: str) -> Functional:
        """Carriers collected: minority carriers of a minority terminal, majority carriers of a majority terminal."""
        conductors, n = self.state.system.conductors, self.n
        sign = -1.0 if terminal in conductors.minority_terminals else 1.0
        by_unknowns, by_equations = np.zeros(2 * n), np.zeros(2 * n)
        for metal in conductors.metals:
            if metal.terminal == terminal and metal.resistivity_ohm_cm2 > 0:
                part = slice(0, n) if metal.on_layer else slice(n, 2 * n)
                load = np.where(conductors.layer, metal.load, 0.0) if metal.on_layer else metal.load  # elsewhere Δn
                by_unknowns[part] += sign * load / metal.resistivity_ohm_cm2 / ELEMENTARY_CHARGE_C
        by_equations[ideal_rows(self.state.system).get(terminal, np.zeros(0, dtype=np.int64))] = sign
        return Functional(by_unknowns, by_equations)

    def advanced(self, change: NDArray[np.float64]) -> Unknowns:
        """The state's unknowns moved by a stacked change (2n,), Δn on layers from the potentials."""
        moved, x = unstack(self.state.system, change), self.state.x
        return self.state.system.completed(type(x)(x.d + moved.d, x.f + moved.f, x.s + moved.s), self.state.voltages)[0]
