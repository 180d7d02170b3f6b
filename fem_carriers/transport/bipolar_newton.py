"""Newton's method for the bipolar form at given terminal voltages."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C
from ..errors import SolverError
from .bipolar import BipolarSystem, Unknowns
from .bipolar_equations import Equations, step_solver, unstack
from .bipolar_state import BipolarState, terminal_currents
from .newton import Outcome

if TYPE_CHECKING:
    from numpy.typing import NDArray

LARGEST_STEPS = 20
LARGEST_CHANGE_VT = 10.0
"""Potentials move by at most this many thermal voltages per step."""
SETTLED_V = 1e-7
"""A step below this (and as small in Δn, relatively) is the last one: convergence is quadratic."""
LARGEST_MISCLOSURE = 1e-12
"""Of the balances of both carriers, over the throughput, at which the polishing ends."""
POLISHING_STEPS = 4
KEEP_BELOW_VT = 0.1
"""After a step below this many thermal voltages, and a tenth of the one before, the Jacobian is kept."""
STEP_TOLERANCE, TANGENT_TOLERANCE = 1e-6, 1e-3
"""Of the residuals of linear equations that are solved by iteration: the next step sees to the rest, and a tangent
only predicts."""


def newton_bipolar(equations: Equations, start: Unknowns, voltages: Mapping[str, float]) -> BipolarState:
    """Solve at given terminal voltages from a nearby start.

    Parameters
    ----------
    equations : Equations
    start : Unknowns
    voltages : mapping of terminal to float
        In the frame of a p-type base, V.

    Returns
    -------
    BipolarState

    Raises
    ------
    SolverError
        "not converged", "not a number", "singular".
    """
    system, VT = equations.system, equations.system.roles.VT
    x, slope = system.completed(equations.fixed_values(start, voltages), voltages)
    moved, before = np.inf, np.inf
    for step in range(1, LARGEST_STEPS + 1):
        F = np.concatenate(system.residuals(x, voltages))
        if not np.isfinite(F).all():
            raise SolverError("not a number", "The residual is not finite.")
        if not moved < min(KEEP_BELOW_VT * VT, 0.1 * before):  # else the last factors still serve
            A, rise = equations.matrix(x, slope)
            solve = step_solver(equations, A)
        change = solve(-(equations.gather @ F), STEP_TOLERANCE)
        before, moved = moved, _largest_potential(equations, change)
        scale = min(1.0, LARGEST_CHANGE_VT * VT / moved) if moved > 0 else 1.0
        previous = x
        x, slope = system.completed(_advanced(equations, x, scale * change), voltages)
        settled = scale == 1.0 and moved < SETTLED_V and _relative(x.d - previous.d, x.d) < SETTLED_V / VT
        if settled:
            return _finished(equations, x, voltages, step, rise, solve)
    raise SolverError("not converged", f"Newton's method did not settle within {LARGEST_STEPS} steps.")


def _finished(
    equations: Equations, x: Unknowns, voltages: Mapping[str, float], step: int, rise: Any, solve: Any
) -> BipolarState:
    """State with its residual brought below the bound."""
    system = equations.system
    for polish in range(POLISHING_STEPS + 1):
        residuals = system.residuals(x, voltages)
        scale = _throughput(system, x, residuals, voltages)
        size = equations.misclosure(residuals) / scale
        if size <= LARGEST_MISCLOSURE or polish == POLISHING_STEPS:
            break
        F = equations.gather @ np.concatenate(residuals)
        x, _ = system.completed(_advanced(equations, x, solve(-F, STEP_TOLERANCE)), voltages)
    tangent = unstack(system, equations.spread @ solve(-(equations.gather @ rise), TANGENT_TOLERANCE))
    return BipolarState(system, dict(voltages), x, Outcome("converged", step, size), equations, tangent)


def _advanced(equations: Equations, x: Unknowns, change: NDArray[np.float64]) -> Unknowns:
    moved = unstack(equations.system, equations.spread @ change)
    return Unknowns(x.d + moved.d, x.f + moved.f, x.s + moved.s)


def _largest_potential(equations: Equations, change: NDArray[np.float64]) -> float:
    moved = unstack(equations.system, equations.spread @ change)
    return float(max(np.abs(moved.f).max(initial=0.0), np.abs(moved.s).max(initial=0.0)))


def _relative(change: NDArray[np.float64], values: NDArray[np.float64]) -> float:
    return float(np.abs(change).max() / max(np.abs(values).max(), 1e-300))


def _throughput(system: BipolarSystem, x: Unknowns, residuals: Any, voltages: Mapping[str, float]) -> float:
    """The largest of generation, total recombination and terminal current, carriers per second."""
    rates = [*system.bulk_rates(x.d).values(), *system.surface_rates(x.d).values()]
    currents = terminal_currents(system, x, residuals, voltages).values()
    largest = max([abs(c) for c in currents], default=0.0) / ELEMENTARY_CHARGE_C
    return max(float(np.abs(system.load).sum()), float(np.abs(rates).sum()), largest, 1e-300)
