"""Solve the bipolar form at given terminal conditions; the solution and its numbers."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C
from ..errors import BalanceError, Complaints
from ..transport.bipolar import BipolarSystem
from ..transport.bipolar_state import BipolarState
from ..transport.walk import Walker
from ..units import MA
from .accuracy import refine
from .climb import SolutionClimb
from .ladder import current_numbers, starting_problem, wanted_target
from .ledger import LARGEST_MISCLOSURE, make_ledger
from .losses import Losses, make_losses, node_splitting
from .solution import Solution
from .terminals import Through, settle

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..cell.unit_cell import UnitCell
    from ..transport.problem import Problem

Condition = float | str | Through
"""A voltage in V, "floating", or through a resistance."""


@dataclass(frozen=True, eq=False, repr=False)
class BipolarSolution(Solution):
    """A solution of the bipolar form; everything of `Solution`, and terminal currents, potentials, losses."""

    @property
    def bipolar(self) -> BipolarState:
        """The state, with its potentials and currents."""
        assert isinstance(self.state, BipolarState)
        return self.state

    @property
    def voltage_V(self) -> Mapping[str, float]:
        """Voltage of every terminal."""
        return self.bipolar.voltages_V

    @property
    def current_mA_per_cm2(self) -> Mapping[str, float]:
        """Conventional current that leaves the cell at every terminal; they sum to zero."""
        return {t: i / self.problem.cell_area_cm2 / MA for t, i in self.bipolar.currents_A.items()}

    @property
    def collected_mA_per_cm2(self) -> Mapping[str, float]:
        """Carriers collected by every terminal, positive under light: holes or electrons, as the terminal takes."""
        holes = self.bipolar.system.conductors.hole_terminals
        return {t: j if t in holes else -j for t, j in self.current_mA_per_cm2.items()}

    @property
    def cell_current_mA_per_cm2(self) -> float:
        """Current out of the hole-collecting terminals; photocurrent positive."""
        return sum(self.current_mA_per_cm2[t] for t in self.bipolar.system.conductors.hole_terminals)

    @property
    def cell_voltage_V(self) -> float:
        """Voltage of the hole-collecting over the electron-collecting terminal (the first of each by name)."""
        conductors = self.bipolar.system.conductors
        pair = (conductors.majority_reference, next(iter(conductors.minority_terminals), None))
        if None in pair:
            return self.implied_voltage_V
        majority, minority = (self.voltage_V[str(t)] for t in pair)
        return (majority - minority) * self.bipolar.system.roles.sign

    @property
    def power_mW_per_cm2(self) -> float:
        """Power out of all terminals."""
        return sum(self.voltage_V[t] * j for t, j in self.current_mA_per_cm2.items())

    @property
    def headline(self) -> dict[str, float]:
        """The numbers that carry error bars: terminal currents; without a terminal the implied voltage."""
        currents = {f"current_{t}_mA_per_cm2": j for t, j in self.current_mA_per_cm2.items()}
        return currents or {"implied_voltage_V": self.implied_voltage_V}

    @cached_property
    def implied_voltage_V(self) -> float:
        """VT ln(np/ni²) at the mean excess density of the base."""
        bulk, roles = self.problem.space.bulk, self.bipolar.system.roles
        mean = float((bulk.values(self.bipolar.dn) * bulk.dx).sum() / bulk.dx.sum())
        return float(roles.splitting(mean))

    @cached_property
    def losses(self) -> Losses:
        """Loss budget in mW/cm²."""
        return make_losses(self.bipolar, self.cell_current_mA_per_cm2)

    @cached_property
    def nodal_fields(self) -> dict[str, NDArray[np.float64]]:
        """Fields at the nodes as for `Solution`, and the quasi-Fermi potentials in V."""
        from .fields import nodal_fields

        fields = nodal_fields(self.state)
        sign, split = self.bipolar.system.roles.sign, node_splitting(self.bipolar)
        reference = self.bipolar.system.conductors.majority_reference
        majority = sign * (self.bipolar.x.f + self.bipolar.voltages.get(reference or "", 0.0))
        minority = majority - sign * split
        hole, electron = (majority, minority) if sign > 0 else (minority, majority)
        return fields | {
            "quasi_fermi_splitting_V": split,
            "electron_quasi_fermi_potential_V": electron,
            "hole_quasi_fermi_potential_V": hole,
        }

    @cached_property
    def currents_mA_per_cm2(self) -> dict[str, NDArray[np.float64]]:
        """Electron and hole current density as cell averages, each (dimension, n_cells), mA/cm²."""
        system = self.bipolar.system
        dx = system.space.bulk.dx
        scale = system.roles.sign * ELEMENTARY_CHARGE_C / MA
        mean = [scale * (j * dx).sum(axis=-1) / dx.sum(axis=-1) for j in system.fluxes(self.bipolar.x)]
        names = ("electron", "hole") if system.roles.sign > 0 else ("hole", "electron")
        return dict(zip(names, mean, strict=True))


def solve_bipolar(
    problem: Problem | UnitCell,
    voltage_V: float | Mapping[str, Condition] = 0.0,
    *,
    first_step_um: float | None = None,
    growth: float | None = None,
    target_error_percent: float | None = None,
    target_error: Mapping[str, float] | None = None,
    largest_unknowns: int | None = None,
    progress: bool = True,
) -> BipolarSolution:
    """Solve the bipolar form: Δn and the majority potential, layers as sheets, contacts and terminals.

    Parameters
    ----------
    problem : Problem or UnitCell
        A unit cell is checked before it is meshed.
    voltage_V : float, or mapping of terminal to float, "floating" or Through
        A number is the voltage of all hole-collecting over all electron-collecting terminals, positive in forward
        bias. In a mapping every terminal is named; "floating" carries no current, ``Through(resistance_ohm_cm2,
        voltage_V)`` connects through a resistance (per cell area).
    first_step_um, growth : float, optional
        Of a unit cell's mesh; as for `problem`.
    target_error_percent : float, optional
        Refine the mesh until the error bars of the terminal currents (without a terminal, of the implied voltage) are
        below this share of each, at least of a hundredth of the generation. Default is 0.1 for a unit cell without
        stated steps; meshes that are stated or given stay as they are, without error bars.
    target_error : mapping of str to float, optional
        Absolute errors instead, by name, e.g. ``{"current_front_mA_per_cm2": 0.01}``.
    largest_unknowns : int, optional
        No finer mesh than that (per carrier); default 300,000 in 2-D, 250,000 in 3-D.
    progress : bool
        Show value ± bar of every mesh on a terminal.

    Returns
    -------
    BipolarSolution

    Raises
    ------
    InputError
        A layout without a finite answer, or terminals that are not there.
    SolverError
        "majority carriers exhausted", "not converged", "no sink for carriers".
    BalanceError
        The carrier ledger does not close.
    """
    options = {"first_step_um": first_step_um, "growth": growth}
    target = wanted_target("solve_bipolar", problem, options, target_error_percent, target_error)
    first = starting_problem(problem, options, target, bipolar=True)
    solve = lambda meshed, before: _solved(meshed, voltage_V)
    if target is None:
        return _solved(first, voltage_V)
    climb = SolutionClimb(largest_unknowns, "current_{}_mA_per_cm2")
    solution, bars = refine(
        first, solve, current_numbers, climb.finer, target, estimates=climb.estimates, progress=progress
    )
    return dataclasses.replace(solution, uncertainty=bars)


def _solved(problem: Problem, voltage_V: float | Mapping[str, Condition]) -> BipolarSolution:
    """Solve on one mesh."""
    walker = Walker(BipolarSystem(problem))
    if isinstance(voltage_V, Mapping):
        return wrap(settle(walker, voltage_V))
    good = isinstance(voltage_V, int | float) and math.isfinite(voltage_V)
    problems = Complaints("solve_bipolar")
    problems.unless(good, f"voltage_V = {voltage_V!r}", "a finite number, or a mapping of terminals")
    conductors = walker.system.conductors
    alone = not conductors.metals and voltage_V != 0
    problems.unless(not alone, f"voltage_V = {voltage_V!r} for a piece without contacts", "0: it floats by itself")
    resistor = bool(conductors.majority_terminals) and not conductors.minority_terminals
    given = f"voltage_V = {voltage_V!r} without a contact on a layer of the type opposite to the base"
    named = ", ".join(f"{t!r}: ..." for t in conductors.majority_terminals)
    problems.unless(voltage_V == 0 or not resistor, given, "a voltage for every terminal", f"{{{named}}}")
    problems.raise_if_any()
    return wrap(walker.at(bias_voltages(walker.system, float(voltage_V))))


def bias_voltages(system: BipolarSystem, voltage_V: float) -> dict[str, float]:
    """Hole terminals at the forward bias, electron terminals at 0; in the frame of a p-type base."""
    conductors, sign = system.conductors, system.roles.sign
    terminals = conductors.majority_terminals + conductors.minority_terminals
    return {t: sign * voltage_V if t in conductors.hole_terminals else 0.0 for t in terminals}


def wrap(state: BipolarState) -> BipolarSolution:
    """Close the ledger and the balance of the terminals of a state, and wrap it up.

    Raises
    ------
    BalanceError
        One of them does not close to `LARGEST_MISCLOSURE`.
    """
    ledger = make_ledger(state)
    solution = BipolarSolution(state=state, ledger=ledger, warnings=())
    currents = list(solution.current_mA_per_cm2.values())
    scale = max([ledger.scale_mA_per_cm2, *map(abs, currents)])
    if abs(sum(currents)) > LARGEST_MISCLOSURE * scale:
        raise BalanceError(
            "balance does not close",
            f"The terminal currents sum to {sum(currents):.1e} mA/cm² where {scale:.3g} flow; the solution is refused. "
            "Try a larger first step or less extreme inputs.",
        )
    return solution
