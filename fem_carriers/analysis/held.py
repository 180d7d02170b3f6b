"""A number of a solved state with the unknowns held while inputs change: what gradients by the adjoint are made of.

With y the free unknowns, F(y, p) = 0 the equations and J(y, p) a number,

    dJ/dp = ∂J/∂p − λ · ∂F/∂p,    (∂F/∂y)ᵀ λ = (∂J/∂y)ᵀ

with both partial derivatives at held y. One solve gives λ, and every input then costs assemblies of J and F only
(M. B. Giles, N. A. Pierce, Flow, Turbulence and Combustion 65, 393 (2000), for the discrete adjoint).
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C
from ..transport.adjoint import ExcessResponse
from ..transport.bipolar import BipolarSystem
from ..transport.bipolar_adjoint import BipolarResponse, Functional
from ..transport.bipolar_state import BipolarState, terminal_currents
from ..transport.excess import ExcessSystem
from ..transport.steady import ExcessState, constrain, fixed_weights
from ..units import MA

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ..transport.channels import Key
    from ..transport.problem import Problem

System = TypeVar("System", bound=ExcessSystem | BipolarSystem)


def system_like(system: System, problem: Problem) -> System:
    """The equations of another problem; where its light and all that light meets are the same, so is the generation."""
    new, old = type(system)(problem), system.problem
    same = problem.mesh is old.mesh and problem.light == old.light and _optical(problem) == _optical(old)
    if same:
        new.__dict__["_generation"] = system._generation  # a cached property
    return new


def _optical(problem: Problem) -> Any:
    layers = {name: s.layer for name, s in problem.surfaces.items() if s.layer is not None}
    return (
        problem.base.material, problem.base.temperature_K,
        {name: (layer.absorbing_depth_um, layer.collection) for name, layer in layers.items()},
    )  # fmt: skip


class Held(ABC):
    """A current of a state, in mA/cm² of the cell, while inputs change."""

    @abstractmethod
    def at(self, system: Any) -> float:
        """J − λ · F of equations on the same unknowns; its derivative is that of the current once solved."""


@dataclass(frozen=True, eq=False)
class HeldExcess(Held):
    """Collected current of terminals (or bare metal surfaces) in the excess-carrier form.

    Parameters
    ----------
    state : ExcessState
    keys : sequence of Key
    """

    state: ExcessState
    keys: Sequence[Key]

    @cached_property
    def _multipliers(self) -> NDArray[np.float64]:
        """λ (n,): the collection probability where Δn is free, 0 where it is fixed."""
        response = ExcessResponse(self.state)
        field: NDArray[np.float64] = sum((response.field(key) for key in self.keys), np.zeros(self.state.dn.size))
        return np.where(self.state.constraints.fixed, 0.0, field)

    def at(self, system: ExcessSystem) -> float:
        """J − λ · F."""
        problem, dn, constraints = system.problem, self.state.dn, self.state.constraints
        if any(self.state.voltages_V.values()):
            constraints = constrain(problem, self.state.voltages_V)
            dn = np.where(constraints.fixed, constraints.values, dn)
        F = system.residual(dn)
        weights = fixed_weights(problem, constraints)
        total = sum(weights.values(), np.full(dn.size, 1e-300))
        own: NDArray[np.float64] = sum((weights[key] / total for key in self.keys), np.zeros(dn.size))
        rate = -float(F @ np.where(constraints.fixed, own, 0.0)) - float(self._multipliers @ F)
        return ELEMENTARY_CHARGE_C * rate / problem.cell_area_cm2 / MA


@dataclass(frozen=True, eq=False)
class HeldBipolar(Held):
    """Current out of terminals in the bipolar form, positive as the current of the cell under light.

    Parameters
    ----------
    state : BipolarState
    terminals : sequence of str
        Terminals of one polarity.
    """

    state: BipolarState
    terminals: Sequence[str]

    @cached_property
    def _functional(self) -> Functional:
        every = BipolarResponse(self.state).functionals
        parts = [every["terminal", t] for t in self.terminals]
        by_unknowns, by_equations = (
            sum(v) for v in zip(*((p.by_unknowns, p.by_equations) for p in parts), strict=True)
        )
        return Functional(np.asarray(by_unknowns), np.asarray(by_equations))

    @cached_property
    def _psi(self) -> NDArray[np.float64]:
        return BipolarResponse(self.state).multipliers(self._functional)

    @cached_property
    def slope_mA_per_cm2_V(self) -> float:
        """dJ/dV for a rise of the forward bias, from the same multipliers."""
        x, slope = self.state.system.completed(self.state.x, self.state.voltages)
        rise = self.state.equations.matrix(x, slope)[1]
        return self._in_mA(float(self._psi @ rise), self.state.system.problem)

    def at(self, system: BipolarSystem) -> float:
        """J − λ · F."""
        x, _ = system.completed(self.state.x, self.state.voltages)
        residuals = system.residuals(x, self.state.voltages)
        currents = terminal_currents(system, x, residuals, self.state.voltages)
        sign = 1.0 if set(self.terminals) <= set(system.conductors.majority_terminals) else -1.0
        rate = sign * sum(currents[t] for t in self.terminals) / ELEMENTARY_CHARGE_C
        multipliers = self._functional.by_equations - self._psi
        return self._in_mA(rate - float(multipliers @ np.concatenate(residuals)), system.problem)

    def _in_mA(self, rate: float, problem: Problem) -> float:
        return ELEMENTARY_CHARGE_C * rate / problem.cell_area_cm2 / MA
