"""Terminals that float or are connected through a resistance: their voltages by Newton's method on the currents."""

from __future__ import annotations

import difflib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..errors import Complaints, SolverError
from ..units import MA

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..transport.bipolar_state import BipolarState
    from ..transport.walk import Walker

FLOATING = "floating"
STEP_V = 1e-4
LARGEST_TRIES = 30
Misfit = Callable[["NDArray[np.float64]"], tuple["NDArray[np.float64]", "BipolarState"]]


@dataclass(frozen=True)
class Through:
    """A terminal connected to a voltage through a resistance.

    Parameters
    ----------
    resistance_ohm_cm2 : float
        Per cell area, Ω·cm².
    voltage_V : float
    """

    resistance_ohm_cm2: float
    voltage_V: float = 0.0

    def __post_init__(self) -> None:
        problems = Complaints("Through")
        checks.positive(problems, "resistance_ohm_cm2", self.resistance_ohm_cm2)
        checks.finite(problems, "voltage_V", self.voltage_V)
        problems.raise_if_any()


def settle(walker: Walker, conditions: Mapping[str, Any]) -> BipolarState:
    """State in which every terminal meets its condition.

    A floating terminal carries no current; one behind a resistance R has V − V_ext = R J with J the current that leaves
    the cell there.

    Parameters
    ----------
    walker : Walker
    conditions : mapping of terminal to float, "floating" or Through
        Every terminal must be named, and at least one must not float.

    Returns
    -------
    BipolarState

    Raises
    ------
    InputError
        Missing or unknown terminals.
    SolverError
        "not converged".
    """
    _check(walker, conditions)
    sign = walker.system.roles.sign
    free = [t for t, c in conditions.items() if not isinstance(c, int | float)]
    known = {t: sign * float(c) for t, c in conditions.items() if isinstance(c, int | float)}
    guess = _first_guess(walker, conditions, known, free)

    def misfit(values: NDArray[np.float64]) -> tuple[NDArray[np.float64], BipolarState]:
        state = walker.at(known | dict(zip(free, values, strict=True)))
        area = walker.system.problem.cell_area_cm2
        found = []
        for terminal, value in zip(free, values, strict=True):
            current, condition = state.terminal_currents[terminal] / area, conditions[terminal]
            if isinstance(condition, Through):
                current -= (value - sign * condition.voltage_V) / condition.resistance_ohm_cm2
            found.append(current)
        return np.array(found), state

    return _newton(misfit, guess)


def _newton(misfit: Misfit, values: NDArray[np.float64]) -> BipolarState:
    """Newton's method with a Jacobian by differences; steps are at most 0.1 V."""
    error, state = misfit(values)
    for _ in range(LARGEST_TRIES):
        if values.size == 0:
            return state
        jacobian = np.column_stack([(misfit(values + STEP_V * e)[0] - error) / STEP_V for e in np.eye(values.size)])
        step = -np.linalg.lstsq(jacobian, error, rcond=None)[0]
        values = values + step * min(1.0, 0.1 / max(np.abs(step).max(), 1e-300))
        error, state = misfit(values)
        if np.abs(step).max() < 1e-10 or np.abs(error).max() < 1e-12 * MA:
            return state
    raise SolverError(
        "not converged", "The voltages of floating terminals did not settle. Try other terminal voltages."
    )


def _first_guess(walker: Walker, conditions: Mapping[str, Any], known: Mapping[str, float], free: list[str]) -> Any:
    """Open-circuit voltages: majority terminals above minority ones by the implied voltage."""
    from ..transport.walk import implied_voltage_V

    implied = implied_voltage_V(walker.system)
    majority = walker.system.conductors.majority_terminals
    level = [v - implied if t in majority else v for t, v in known.items()]
    base = float(np.mean(level)) if level else 0.0
    sign = walker.system.roles.sign
    guess = []
    for terminal in free:
        condition = conditions[terminal]
        open_circuit = base + implied if terminal in majority else base
        guess.append(
            0.5 * (open_circuit + sign * condition.voltage_V) if isinstance(condition, Through) else open_circuit
        )
    return np.array(guess)


def _check(walker: Walker, conditions: Mapping[str, Any]) -> None:
    problems = Complaints("solve_bipolar")
    conductors = walker.system.conductors
    terminals = [*conductors.majority_terminals, *conductors.minority_terminals]
    for name, condition in conditions.items():
        near = difflib.get_close_matches(str(name), terminals, 1)
        problems.unless(name in terminals, f"terminal {name!r}", f"one of {', '.join(terminals)}", *map(repr, near))
        number = checks.is_number(condition) and np.isfinite(condition)
        good = number or condition == FLOATING or isinstance(condition, Through)
        problems.unless(
            good, f"{name} = {condition!r}", '"floating", a finite voltage, or fc.Through(resistance_ohm_cm2)'
        )
    for name in terminals:
        problems.unless(name in conditions, f"no voltage for the terminal {name!r}", 'a voltage or "floating" for each')
    if conditions and all(c == FLOATING for c in conditions.values()):
        problems.add("all terminals floating", "at least one at a given voltage", "0 for one of them")
    problems.raise_if_any()
