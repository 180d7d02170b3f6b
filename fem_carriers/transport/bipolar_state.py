"""A solved state of the bipolar form, and its terminal currents."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C
from .bipolar import BipolarSystem, Unknowns
from .bipolar_equations import Equations, step_solver, unstack
from .newton import Outcome

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, eq=False)
class BipolarState:
    """A solution at given terminal voltages.

    Parameters
    ----------
    system : BipolarSystem
    voltages : mapping of terminal to float
        In the frame of a p-type base (see `roles`), V.
    x : Unknowns
    outcome : Outcome
    equations : Equations
    tangent : Unknowns
        dx/dV for a rise of the forward bias; approximate (by the last factors kept), good for predictions.
    """

    system: BipolarSystem
    voltages: Mapping[str, float]
    x: Unknowns
    outcome: Outcome
    equations: Equations
    tangent: Unknowns

    @cached_property
    def slopes(self) -> dict[str, float]:
        """dI/dV of every terminal current for a rise of the forward bias, A/V, in the frame of a p-type base."""
        x, slope = self.system.completed(self.x, self.voltages)
        A, rise = self.equations.matrix(x, slope)
        solve = step_solver(self.equations, A)
        tangent = self.equations.spread @ solve(-(self.equations.gather @ rise))
        return _current_slopes(self.system, tangent, A @ tangent + rise)

    @property
    def dn(self) -> NDArray[np.float64]:
        """Δn at the nodes, cm⁻³."""
        return self.x.d

    @cached_property
    def residuals(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """(Fm, FM): round-off at free unknowns, reactions at fixed ones; carriers per second."""
        return self.system.residuals(self.x, self.voltages)

    @cached_property
    def terminal_currents(self) -> dict[str, float]:
        """Current out of the cell at every terminal, A (per cm of depth in 2-D), in the frame of a p-type base."""
        return terminal_currents(self.system, self.x, self.residuals, self.voltages)

    def minority_flux(self) -> Any:
        """jm at the quadrature points, (dimension, n_cells, n_points), 1/(cm² s)."""
        return self.system.fluxes(self.x)[0]

    @property
    def voltages_V(self) -> dict[str, float]:
        """Real terminal voltages."""
        return {t: float(self.system.roles.sign * v + 0.0) for t, v in self.voltages.items()}

    @cached_property
    def currents_A(self) -> dict[str, float]:
        """Real conventional current that leaves the cell at every terminal, A (per cm of depth in 2-D)."""
        return {t: self.system.roles.sign * i for t, i in self.terminal_currents.items()}

    def leaving(self) -> dict[tuple[str, str], float]:
        """Minority carriers per second that leave: to terminals, bare metal and shunts."""
        left = {("surface", name): rate for name, rate in self.bare_rates.items()}
        across = self.system.across(self.x, self.voltages)
        for name, shunt in self.system.conductors.shunts.items():
            left["surface", f"{name}: shunt"] = float((shunt @ across).sum()) / ELEMENTARY_CHARGE_C
        for terminal in self.system.conductors.minority_terminals:
            left["terminal", terminal] = -self.terminal_currents[terminal] / ELEMENTARY_CHARGE_C
        return left

    @cached_property
    def bare_dofs(self) -> dict[str, NDArray[np.int64]]:
        """Unknowns of every bare metal surface; a node shared by two of them counts once."""
        problem, left, found = self.system.problem, self.system.conductors.bare.copy(), {}
        for name in [n for n, s in problem.surfaces.items() if s.pins_to_zero]:
            dofs = problem.space.facet_dofs(problem.mesh.surfaces[name])
            found[name] = dofs[left[dofs]]
            left[dofs] = False
        return found

    @cached_property
    def bare_rates(self) -> dict[str, float]:
        """Recombination at every bare metal surface, carriers per second."""
        return {name: float(-self.residuals[0][dofs].sum()) for name, dofs in self.bare_dofs.items()}


def terminal_currents(
    system: BipolarSystem, x: Unknowns, residuals: Any, voltages: Mapping[str, float]
) -> dict[str, float]:
    """Current into the metal of every terminal, A, in the frame of a p-type base."""
    currents = dict.fromkeys([m.terminal for m in system.conductors.metals], 0.0)
    for metal in system.conductors.metals:
        if metal.resistivity_ohm_cm2 > 0:
            potential = (x.s if metal.on_layer else x.f) - (voltages[metal.terminal] - voltages[metal.reference])
            currents[metal.terminal] += float(metal.load @ potential) / metal.resistivity_ohm_cm2
    for terminal, rows in ideal_rows(system).items():
        currents[terminal] += ELEMENTARY_CHARGE_C * float(np.concatenate(residuals)[rows].sum())
    return currents


def ideal_rows(system: BipolarSystem) -> dict[str, NDArray[np.int64]]:
    """Stacked equations whose sum is the current into each terminal's ideal contacts."""
    n, bare = system.space.size, system.conductors.bare
    rows: dict[str, list[Any]] = {}
    for metal in system.conductors.metals:
        if metal.resistivity_ohm_cm2 == 0:
            own = metal.dofs if metal.on_layer else np.concatenate([metal.dofs + n, metal.dofs[bare[metal.dofs]]])
            rows.setdefault(metal.terminal, []).append(own)
    return {terminal: np.unique(np.concatenate(parts)) for terminal, parts in rows.items()}


def _current_slopes(system: BipolarSystem, tangent: Any, residual_slope: Any) -> dict[str, float]:
    moved = unstack(system, tangent)
    slopes = dict.fromkeys([m.terminal for m in system.conductors.metals], 0.0)
    for metal in system.conductors.metals:
        if metal.resistivity_ohm_cm2 > 0:
            slopes[metal.terminal] += (
                float(metal.load @ (moved.s if metal.on_layer else moved.f)) / metal.resistivity_ohm_cm2
            )
    for terminal, rows in ideal_rows(system).items():
        slopes[terminal] += ELEMENTARY_CHARGE_C * float(residual_slope[rows].sum())
    return slopes
