"""Continuation in voltage: from a uniform splitting near the implied voltage to any set of terminal voltages."""

from __future__ import annotations

import weakref
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from ..errors import SolverError
from .bipolar import BipolarSystem, Unknowns
from .bipolar_equations import Equations
from .bipolar_newton import newton_bipolar
from .bipolar_state import BipolarState
from .solver import LinearSolver, check_forecast, two_carrier_solver

if TYPE_CHECKING:
    from numpy.typing import NDArray

SMALLEST_STEP_V = 2e-4
LARGEST_PREDICTION_VT = 3.0
EXHAUSTED, DEPLETED = 1e-2, 0.3
"""Majority density at a contact, and in the base, over that of equilibrium, below which a failure is put down to
exhaustion."""
HIGHEST_DARK_V, HIGHEST_ABOVE_V = 0.8, 0.5
"""A bias more than the second above the implied voltage, or above the first in the dark, is refused."""
START_LIFTS_V = (0.0, 0.01, -0.02, 0.03, -0.05, 0.06, -0.1, 0.12, 0.2)
"""How far above the implied voltage the first solution is tried."""


@dataclass
class Walker:
    """Solves one system at many voltages, each from the nearest solved state.

    Parameters
    ----------
    system : BipolarSystem
    states : list of BipolarState
        Everything solved so far.
    shared : LinearSolver, optional
        The `solver` of a walker on the same mesh with the same contacts: its factors serve here as preconditioner.
    """

    system: BipolarSystem
    states: list[BipolarState] = field(default_factory=list)
    shared: LinearSolver | None = field(default=None, repr=False)

    def __post_init__(self) -> None:
        self.system.conductors.check()
        check_forecast(self.system.space, 2)
        system = self.system  # and not self, so that the factors go with the walker
        self.solver = self.shared or two_carrier_solver(system.space, lambda: Equations(system).spread)
        self.equations = Equations(self.system, weakref.ref(self.solver))

    def at(self, voltages: Mapping[str, float]) -> BipolarState:
        """State at terminal voltages (frame of a p-type base).

        Raises
        ------
        SolverError
            "majority carriers exhausted" or "not converged", naming the voltage that could be reached.
        """
        if len(set(voltages.values())) <= 1 and not self.system.load.any():
            return self._equilibrium(voltages)
        if not self.states:
            self.states.append(self._first(voltages))
        nearest = min(self.states, key=lambda s: _distance(s.voltages, voltages))
        return self._walk(nearest, dict(voltages))

    def _equilibrium(self, voltages: Mapping[str, float]) -> BipolarState:
        """In the dark with all terminals alike Δn and every potential is zero; there is no scale to converge to."""
        zero = np.zeros(self.system.space.size)
        self.states.append(newton_bipolar(self.equations, Unknowns(zero, zero, zero), voltages))
        return self.states[-1]

    def _first(self, voltages: Mapping[str, float]) -> BipolarState:
        """A state that is solved from a uniform splitting: near the implied voltage, or at the bias asked for."""
        implied = self._implied()
        asked = self._bias(voltages)
        if asked > max(implied, HIGHEST_DARK_V) + HIGHEST_ABOVE_V:
            raise SolverError(
                "voltage too high",
                f"A forward bias of {asked:.4g} V lies far above the {implied:.4g} V that the light and recombination "
                "imply; the currents would be beyond this model. Try a lower voltage.",
            )
        error: SolverError | None = None
        for lift in START_LIFTS_V:
            bias = max(implied + lift, asked, 0.0)
            try:
                return newton_bipolar(self.equations, self._uniform(bias), self._at_bias(voltages, bias))
            except SolverError as failed:
                error = failed
        raise SolverError(
            "not converged",
            f"No solution from a uniform splitting near {max(implied, asked):.4g} V, where the calculation starts "
            f"({error}). Try a voltage nearer to open circuit, less light, or a smaller first step of the mesh.",
        )

    def _implied(self) -> float:
        """The implied voltage; with terminals that take what does not recombine, a splitting at which Δn is M0."""
        try:
            return implied_voltage_V(self.system)
        except SolverError:
            if not self.system.conductors.metals:
                raise
            return float(self.system.roles.splitting(self.system.roles.M0))

    def _uniform(self, bias: float) -> Unknowns:
        """Every junction at the bias; a floating layer has no terminal to be relative to and lies below the base."""
        n = self.system.space.size
        s = np.zeros(n)
        for junction in self.system.conductors.junctions:
            if junction.terminal is None:
                s[junction.dofs] = -bias
        return Unknowns(np.full(n, self.system.roles.density(bias)[0]), np.zeros(n), s)

    def _bias(self, voltages: Mapping[str, float]) -> float:
        """Largest forward bias of a junction."""
        offsets = self.system.conductors.offsets(voltages)[self.system.conductors.layer]
        return float(offsets.max(initial=0.0))

    def _at_bias(self, voltages: Mapping[str, float], bias: float) -> dict[str, float]:
        """One polarity at the bias, the other at 0, on the side where the terminals asked for are."""
        majority = self.system.conductors.majority_terminals
        if self.system.roles.sign > 0:
            return {t: bias if t in majority else 0.0 for t in voltages}
        return {t: 0.0 if t in majority else -bias for t in voltages}

    def _walk(self, state: BipolarState, target: dict[str, float]) -> BipolarState:
        """Step from a state to the target; steps are halved where Newton fails and doubled where it does well."""
        done, step, failure = 0.0, 1.0, "the starting state"
        origin, length = state, _distance(state.voltages, target)
        while done < 1.0:
            share = min(1.0, done + step)
            voltages = {t: (1 - share) * origin.voltages[t] + share * target[t] for t in target}
            try:
                state = newton_bipolar(self.equations, _predicted(state, voltages), voltages)
                self.states.append(state)
                done, step = share, 2 * step
            except SolverError as failed:
                failure, step = str(failed), step / 2
                if step * length < SMALLEST_STEP_V:
                    raise self._refusal(state, target, failure) from failed
        return state

    def _refusal(self, state: BipolarState, target: Mapping[str, float], failure: str) -> SolverError:
        reached, wanted = self._bias(state.voltages), self._bias(target)
        place = exhausted_place(state)
        if place:
            return SolverError(
                "majority carriers exhausted",
                f"Majority carriers are exhausted at {place} at {reached:.4g} V: the photocurrent cannot be "
                f"carried at {wanted:.4g} V. Try a higher doping, a wider contact, less light, or a higher voltage.",
            )
        return SolverError(
            "not converged",
            f"No solution at {wanted:.4g} V; {reached:.4g} V was reached ({failure}). Try a smaller first step of the "
            "mesh, or check for extreme inputs.",
        )


def _distance(a: Mapping[str, float], b: Mapping[str, float]) -> float:
    return max((abs(a[t] - b[t]) for t in b), default=0.0)


def _predicted(state: BipolarState, voltages: Mapping[str, float]) -> Unknowns:
    """Start for the next voltage: the last solution, moved along its tangent if all biases move alike and little.

    Δn is moved in its logarithm.
    """
    rise = _common_rise(state, voltages)
    if abs(rise) > LARGEST_PREDICTION_VT * state.system.roles.VT:
        return state.x
    x, t = state.x, state.tangent
    with np.errstate(divide="ignore", invalid="ignore"):
        growth = np.where(x.d > 0, np.exp(np.clip(rise * t.d / x.d, -3.0, 3.0)), 1.0)
    return Unknowns(x.d * growth, x.f + rise * t.f, x.s + rise * t.s)


def _common_rise(state: BipolarState, voltages: Mapping[str, float]) -> float:
    """Change of the forward bias, if it is the same for all pairs of terminals; infinite otherwise."""
    conductors = state.system.conductors
    rises = {
        (voltages[a] - state.voltages[a]) - (voltages[b] - state.voltages[b])
        for a in conductors.majority_terminals
        for b in conductors.minority_terminals
    }
    return rises.pop() if len(rises) == 1 else np.inf


def exhausted_place(state: BipolarState) -> str:
    """A majority contact, or a point of the base, where the majority carriers are nearly gone; empty if nowhere."""
    roles = state.system.roles
    left = (roles.M0 + state.dn) / roles.M0
    for metal in state.system.conductors.metals:
        if not metal.on_layer and float(left[metal.dofs].min()) < EXHAUSTED:
            return f"contact {metal.surface}"
    if left.min() < DEPLETED:
        where = state.system.space.points_cm[:, int(left.argmin())] * 1e4
        return f"({', '.join(f'{x:.4g}' for x in where)}) µm in the base"
    return ""


def implied_voltage_V(system: BipolarSystem) -> float:
    """Uniform splitting at which ∫ R + ∮ U balances ∫ G; 0 without light.

    Bare metal takes what diffuses to it, Dm Δn/l per area with l the volume over its area.

    Raises
    ------
    SolverError
        "no sink for carriers".
    """
    from scipy.optimize import brentq

    generated = float(system.load.sum())
    if generated <= 0:
        return 0.0
    one: NDArray[np.float64] = np.ones(system.space.size)
    bare = [system.space.surfaces[n].dx.sum() for n, s in system.problem.surfaces.items() if s.pins_to_zero]
    to_bare: float = system.roles.Dm * sum(bare) ** 2 / system.space.bulk.dx.sum()

    def excess(u: float) -> float:
        dn = system.roles.density(u)[0] * one
        lost = sum(system.bulk_rates(dn).values()) + sum(system.surface_rates(dn).values())
        return float(lost + to_bare * dn[0] - generated)

    high = 0.2
    while excess(high) <= 0:
        high *= 1.3
        if high > 12:
            raise SolverError(
                "no sink for carriers",
                "Nothing recombines, so no voltage balances the light. Try a lifetime, a J0 or srv on a surface.",
            )
    return float(brentq(excess, 0.0, high, xtol=1e-4))
