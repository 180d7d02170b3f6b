"""Figures of a curve or a solution as sums of held currents, so that their gradients follow from the adjoint.

dVoc = −dJ/(dJ/dV) at open circuit; at the maximum-power voltage the power does not change with the voltage, so that
dPmax = V dJ there (envelope theorem). Fill factor and efficiency are quotients of these.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from ..transport.bipolar_state import BipolarState
from ..transport.drift import Drift
from ..transport.steady import ExcessState
from .bipolar import BipolarSolution
from .curve import CurrentVoltage, headline
from .held import Held, HeldBipolar, HeldExcess, system_like
from .solution import Solution

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..transport.bipolar import BipolarSystem
    from ..transport.excess import ExcessSystem
    from ..transport.problem import Problem
    from .tracer import Point

Combine = Callable[["NDArray[np.float64]", float], float]
"""Changes of the held currents, relative change of the incident power → change of the figure."""


@dataclass(frozen=True, eq=False)
class Figures:
    """Figures of one result.

    Parameters
    ----------
    system : ExcessSystem or BipolarSystem
    values : mapping of str to float
        By name with unit.
    held : tuple of Held
    combine : mapping of str to function
    power_mW_per_cm2 : float
        Incident power; 0 where it does not count.
    """

    system: ExcessSystem | BipolarSystem
    values: Mapping[str, float]
    held: tuple[Held, ...]
    combine: Mapping[str, Combine]
    power_mW_per_cm2: float = 0.0

    @property
    def problem(self) -> Problem:
        """The problem of the result."""
        return self.system.problem

    def needed(self, names: list[str]) -> list[int]:
        """Numbers of the held currents that these figures take."""
        unit = np.eye(len(self.held))
        return [i for i in range(len(self.held)) if any(self.combine[n](unit[i], 0.0) != 0 for n in names)]

    def parts(self, problem: Problem, chosen: list[int]) -> NDArray[np.float64]:
        """The held currents of a problem, NaN where not chosen, then the relative incident power."""
        system = system_like(self.system, problem)
        found = [held.at(system) if i in chosen else np.nan for i, held in enumerate(self.held)]
        power = system.optics.incident_power_mW_per_cm2 / self.power_mW_per_cm2 if self.power_mW_per_cm2 > 0 else 1.0
        return np.array([*found, power])


def figures_of(result: Any) -> Figures:
    """Figures of a current-voltage curve or a solution.

    Parameters
    ----------
    result : CurrentVoltage, BipolarSolution or Solution
        Of the excess-carrier form without a prescribed field or current.

    Raises
    ------
    InputError
        Anything else, or a dark curve.
    """
    problems = Complaints("gradients")
    if isinstance(result, CurrentVoltage):
        problems.unless(result.maximum_power is not None, "a dark curve", "a curve under light")
        problems.raise_if_any()
        return _of_curve(result)
    good = isinstance(result, Solution)
    problems.unless(good, f"{result!r:.80}", "a result of current_voltage, solve_bipolar or solve_excess")
    problems.raise_if_any()
    if isinstance(result, BipolarSolution):
        bipolar = {t: HeldBipolar(result.bipolar, [t]) for t in result.collected_mA_per_cm2}
        return _of_currents(result.bipolar.system, bipolar, result)
    state = result.state
    free = isinstance(state, ExcessState) and not isinstance(state.system.drift, Drift)
    problems.unless(free, "a solution with a prescribed field or current", "one without, or solve_bipolar")
    problems.raise_if_any()
    assert isinstance(state, ExcessState)
    excess = {t: HeldExcess(state, [("terminal", t)]) for t in result.collected_mA_per_cm2}
    return _of_currents(state.system, excess, result)


def _of_currents(system: ExcessSystem | BipolarSystem, held: Mapping[str, Held], result: Solution) -> Figures:
    """Figures that are held currents themselves."""
    names = {f"collected_{t}_mA_per_cm2": t for t in held}
    combine = {name: _taking(i) for i, name in enumerate(names)}
    values = {name: result.collected_mA_per_cm2[t] for name, t in names.items()}
    return Figures(system, values, tuple(held.values()), combine)


def _taking(i: int) -> Combine:
    return lambda change, power: float(change[i])


def _of_curve(curve: CurrentVoltage) -> Figures:
    points = (curve.short_circuit, curve.open_circuit, curve.maximum_power)
    short, opened, best = (_held(p) for p in points)
    assert curve.maximum_power is not None
    V, P = curve.maximum_power.voltage_V, curve.maximum_power.power_mW_per_cm2
    jsc, voc, factor = curve.jsc_mA_per_cm2, curve.voc_V, curve.fill_factor_percent

    def dvoc(change: NDArray[np.float64]) -> float:
        return -float(change[1]) / opened.slope_mA_per_cm2_V if change[1] else 0.0

    combine: dict[str, Combine] = {
        "jsc_mA_per_cm2": lambda change, power: float(change[0]),
        "voc_V": lambda change, power: dvoc(change),
        "fill_factor_percent": lambda change, power: (
            factor * (V * float(change[2]) / P - float(change[0]) / jsc - dvoc(change) / voc)
        ),
        "maximum_power_mW_per_cm2": lambda change, power: V * float(change[2]),
    }
    incident = curve.incident_power_mW_per_cm2
    if incident > 0:
        combine["efficiency_percent"] = lambda change, power: 100 * (V * float(change[2]) - P * power) / incident
    system = curve.maximum_power.state.system
    return Figures(system, headline(curve), (short, opened, best), combine, incident)


def _held(point: Point | None) -> HeldBipolar:
    assert point is not None
    state: BipolarState = point.state
    return HeldBipolar(state, state.system.conductors.hole_terminals)
