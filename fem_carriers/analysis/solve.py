"""Drivers: solve a problem and report where the model is strained."""

from __future__ import annotations

import dataclasses
import warnings
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import ModelWarning
from ..transport.drift import Drift, make_drift
from ..transport.excess import ExcessSystem
from ..transport.problem import Problem
from ..transport.steady import ExcessState, solve_state
from .accuracy import refine
from .climb import SolutionClimb
from .ladder import current_numbers, starting_problem, wanted_target
from .solution import Solution, finish

if TYPE_CHECKING:
    from ..cell.unit_cell import UnitCell

LARGEST_INJECTION = 0.002
"""Δn over the majority density above which collection at a terminal is a tenth of a percent or more off."""


def solve_excess(
    problem: Problem | UnitCell,
    voltage_V: float | Mapping[str, float] = 0.0,
    *,
    field_V_per_cm: Any = None,
    current_mA_per_cm2: Any = None,
    first_step_um: float | None = None,
    growth: float | None = None,
    target_error_percent: float | None = None,
    target_error: Mapping[str, float] | None = None,
    largest_unknowns: int | None = None,
    progress: bool = True,
) -> Solution:
    """Solve the steady excess-carrier equation.

    ∇·Γ + G − R(Δn) = 0, Γ = D ∇Δn + (J/q) [t(Δn) − t(0)], with Δn fixed by the voltage where a layer of the opposite
    type has a contact and by 0 on bare metal. Valid at zero net current for any injection, or in low injection for any
    current.

    Parameters
    ----------
    problem : Problem or UnitCell
    voltage_V : float, or mapping of terminal to float
        Forward bias of the collecting terminals.
    field_V_per_cm : vector, mapping of volume to vector, or function, optional
        A field in low injection: Γ = D ∇Δn + μ Δn E. Components (x, z) in 2-D, (x, y, z) in 3-D.
    current_mA_per_cm2 : vector, mapping, or function, optional
        A prescribed divergence-free total current density.
    first_step_um, growth : float, optional
        Of a unit cell's mesh; as for `problem`.
    target_error_percent : float, optional
        Refine the mesh until the error bars of the collected currents (without a terminal, of the mean excess density)
        are below this share of each. Default is 0.1 for a unit cell without stated steps; meshes that are stated or
        given stay as they are, without error bars.
    target_error : mapping of str to float, optional
        Absolute errors instead, by name, e.g. ``{"collected_front_mA_per_cm2": 0.01}``.
    largest_unknowns : int, optional
        No finer mesh than that; default 300,000 in 2-D, 250,000 in 3-D.
    progress : bool
        Show value ± bar of every mesh on a terminal.

    Returns
    -------
    Solution

    Raises
    ------
    InputError
        Inputs that do not fit together.
    SolverError
        No solution: "not converged", "singular", "no sink for carriers", "not a number".
    BalanceError
        The carrier ledger does not close.

    Warns
    -----
    ModelWarning
        Collection at a terminal beyond low injection; a layer conducting sideways to its contact, whose sheet
        resistance this form leaves out; cells too coarse for the drift.
    """
    options = {"first_step_um": first_step_um, "growth": growth}
    target = wanted_target("solve_excess", problem, options, target_error_percent, target_error)
    first = starting_problem(problem, options, target, bipolar=False)

    def solve(meshed: Problem, before: object) -> Solution:
        drift = make_drift(meshed, field_V_per_cm, current_mA_per_cm2)
        state = solve_state(ExcessSystem(meshed, drift), voltage_V)
        return finish(state, strains(state))

    if target is None:
        solution = solve(first, None)
    else:
        climb = SolutionClimb(largest_unknowns, "collected_{}_mA_per_cm2")
        solution, bars = refine(
            first, solve, current_numbers, climb.finer, target, estimates=climb.estimates, progress=progress
        )
        solution = dataclasses.replace(solution, uncertainty=bars)
    for note in solution.warnings:
        warnings.warn(note, ModelWarning, stacklevel=2)
    return solution


def strains(state: ExcessState) -> tuple[str, ...]:
    """Where the assumptions of the excess-carrier form are strained, in sentences."""
    notes = (_injection(state), _sheet(state), _coarse(state.system.drift))
    return tuple(note for note in notes if note)


def _injection(state: ExcessState) -> str:
    if not any(j.terminal is not None for j in state.constraints.junctions) and state.system.drift is None:
        return ""
    eq = state.system.problem.equilibrium
    ratio = float(np.abs(state.dn).max() / max(eq.n0, eq.p0))
    if ratio <= LARGEST_INJECTION:
        return ""
    return (
        f"the excess density reaches {ratio:.2g} of the majority density; with a current to a terminal this form holds "
        f"in low injection (below {LARGEST_INJECTION:g}), and collection may be off by more than 0.1 %."
    )


def _sheet(state: ExcessState) -> str:
    surfaces = state.system.problem.surfaces
    wide = [j for j in state.constraints.junctions if j.terminal is not None]
    bare = sorted({n for j in wide for n in j.surfaces if surfaces[n].contact is None})
    if not bare:
        return ""
    return (
        f"the layer on {', '.join(bare)} is taken as an equipotential: its sheet resistance is left out, so collection "
        "does not fall with pitch, and a full-face layer has no best pitch in this form."
    )


def _coarse(drift: Drift | None) -> str:
    if drift is None or not drift.needs_upwinding:
        return ""
    return (
        f"the drift carries carriers across a cell faster than they diffuse (cell Péclet number {drift.peclet:.2g}); "
        "diffusion along the drift was added there, which is accurate to first order only. Use a finer mesh along it."
    )
