"""Points of a current-voltage curve, each solved once; open circuit and maximum power as roots."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from ..errors import Complaints, SolverError
from ..transport.bipolar import BipolarSystem
from ..transport.walk import Walker, implied_voltage_V
from ..units import MA
from .bipolar import BipolarSolution, bias_voltages, wrap

if TYPE_CHECKING:
    from ..transport.bipolar_state import BipolarState
    from ..transport.problem import Problem

LARGEST_TRIES = 25
NEARBY_V = 1e-3


@dataclass(frozen=True, eq=False, repr=False)
class Point:
    """One point of a curve."""

    voltage_V: float
    current_mA_per_cm2: float
    state: BipolarState

    @cached_property
    def slope_mA_per_cm2_V(self) -> float:
        """dJ/dV, from the linearised equations."""
        system = self.state.system
        total = sum(self.state.slopes[t] for t in system.conductors.hole_terminals)
        return system.roles.sign * total / system.problem.cell_area_cm2 / MA

    def __repr__(self) -> str:
        return f"Point at {self.voltage_V:.6g} V: {self.current_mA_per_cm2:.6g} mA/cm²"

    @property
    def power_mW_per_cm2(self) -> float:
        """V J."""
        return self.voltage_V * self.current_mA_per_cm2

    @cached_property
    def solution(self) -> BipolarSolution:
        """The full solution at this point."""
        return wrap(self.state)


class Tracer:
    """Points of one curve by voltage, each solved once."""

    def __init__(self, problem: Problem) -> None:
        self.walker = Walker(BipolarSystem(problem))
        self.points: dict[float, Point] = {}
        _check_terminals(self.walker)

    def at(self, voltage_V: float) -> Point:
        """The point at a forward bias."""
        if voltage_V not in self.points:
            system = self.walker.system
            state = self.walker.at(bias_voltages(system, voltage_V))
            scale = system.roles.sign / system.problem.cell_area_cm2 / MA
            holes = system.conductors.hole_terminals
            current = scale * sum(state.terminal_currents[t] for t in holes)
            self.points[voltage_V] = Point(voltage_V, current, state)
        return self.points[voltage_V]

    def open_circuit(self, near_V: float | None = None) -> Point:
        """J = 0 by Newton's method from the implied voltage, kept between voltages of either sign of J."""
        start = implied_voltage_V(self.walker.system) if near_V is None else near_V
        return self.root(start, lambda p: (p.current_mA_per_cm2, p.slope_mA_per_cm2_V))

    def maximum_power(self, voc: float, near_V: float | None = None) -> Point:
        """d(VJ)/dV = J + V dJ/dV = 0 between neighbouring points (R. P. Brent, 1973), or by secants from nearby."""
        from scipy.optimize import brentq, newton

        if near_V is not None:
            return self.at(float(newton(lambda v: _rise(self.at(v)), near_V, x1=near_V + NEARBY_V, tol=1e-7)))

        low, high = self._bracket(voc)
        return self.at(float(brentq(lambda v: _rise(self.at(v)), low.voltage_V, high.voltage_V, xtol=1e-7)))

    def _bracket(self, voc: float) -> tuple[Point, Point]:
        """Neighbouring points between which V J has its maximum."""
        known = [self.points[v] for v in sorted(self.points) if 0 <= v <= voc]
        best = max(range(len(known)), key=lambda i: known[i].power_mW_per_cm2)
        if best == 0:
            return known[0], known[1]
        if _rise(known[best]) > 0:
            return known[best], known[min(best + 1, len(known) - 1)]
        return known[best - 1], known[best]

    def root(self, voltage_V: float, function: Callable[[Point], tuple[float, float]]) -> Point:
        """Where a falling function of the voltage vanishes; it gives its value and slope at a point."""
        low, high = -math.inf, math.inf
        for _ in range(LARGEST_TRIES):
            point = self.at(voltage_V)
            value, slope = function(point)
            low, high = (voltage_V, high) if value > 0 else (low, voltage_V)
            step = -value / slope if slope < 0 else math.copysign(0.05, value)
            step = max(min(step, 0.05), -0.05)
            if abs(step) < 1e-9:
                return point
            voltage_V = voltage_V + step
            if not low < voltage_V < high:
                voltage_V = 0.5 * (low + high)
        raise SolverError("not converged", "A voltage of the curve did not settle.")


@dataclass(frozen=True, eq=False)
class KeyPoints:
    """Short circuit, open circuit and maximum power; None in the dark."""

    tracer: Tracer
    short_circuit: Point | None = None
    open_circuit: Point | None = None
    best: Point | None = None


SKETCH = (0.94, 0.85, 0.78, 0.55, 0.0)
"""Voltages, in units of open circuit, between which the maximum of the power is looked for."""


def key_points(problem: Problem, before: KeyPoints | None = None) -> KeyPoints:
    """Solve for them, starting near those of a coarser mesh if they are known."""
    tracer = Tracer(problem)
    if not tracer.walker.system.load.any():
        return KeyPoints(tracer)
    near = before.open_circuit if before is not None else None
    open_circuit = tracer.open_circuit(near.voltage_V if near is not None else None)
    if before is None or before.best is None:
        for share in SKETCH:
            tracer.at(share * open_circuit.voltage_V)
        best = tracer.maximum_power(open_circuit.voltage_V)
    else:
        best = tracer.maximum_power(open_circuit.voltage_V, before.best.voltage_V)
    return KeyPoints(tracer, tracer.at(0.0), open_circuit, best)


def _rise(point: Point) -> float:
    """d(VJ)/dV, mA/cm²."""
    return point.current_mA_per_cm2 + point.voltage_V * point.slope_mA_per_cm2_V


def _check_terminals(walker: Walker) -> None:
    problems = Complaints("current_voltage")
    conductors = walker.system.conductors
    both = bool(conductors.majority_terminals) and bool(conductors.minority_terminals)
    given = f"terminals {', '.join(conductors.majority_terminals + conductors.minority_terminals) or 'none'}"
    problems.unless(both, given, "a contact for each carrier", "solve_bipolar for a piece without contacts")
    problems.raise_if_any()
