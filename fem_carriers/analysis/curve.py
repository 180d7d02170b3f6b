"""Current-voltage curve: short circuit, open circuit and maximum power are solved for."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from ..cell import checks
from ..errors import Complaints, SolverError
from ..transport.bipolar import BipolarSystem
from ..transport.build import checked_problem
from ..transport.walk import Walker, implied_voltage_V
from ..units import MA
from .bipolar import BipolarSolution, bias_voltages, wrap

if TYPE_CHECKING:
    import pandas as pd

    from ..cell.unit_cell import UnitCell
    from ..transport.bipolar_state import BipolarState
    from ..transport.problem import Problem

POINTS = 15
LARGEST_TRIES = 25


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


@dataclass(frozen=True, eq=False, repr=False)
class CurrentVoltage:
    """A current-voltage curve.

    Parameters
    ----------
    points : tuple of Point
        By rising voltage.
    short_circuit, open_circuit, maximum_power : Point or None
        None in the dark.
    incident_power_mW_per_cm2 : float
    """

    points: tuple[Point, ...]
    short_circuit: Point | None
    open_circuit: Point | None
    maximum_power: Point | None
    incident_power_mW_per_cm2: float

    def _lit(self, point: Point | None) -> Point:
        if point is None:
            problems = Complaints("current_voltage")
            problems.add("a dark curve", "light for short circuit, open circuit and maximum power")
            problems.raise_if_any()
        assert point is not None
        return point

    @property
    def jsc_mA_per_cm2(self) -> float:
        """Short-circuit current density."""
        return self._lit(self.short_circuit).current_mA_per_cm2

    @property
    def voc_V(self) -> float:
        """Open-circuit voltage."""
        return self._lit(self.open_circuit).voltage_V

    @property
    def fill_factor_percent(self) -> float:
        """Maximum power over Jsc·Voc."""
        return 100 * self._lit(self.maximum_power).power_mW_per_cm2 / (self.jsc_mA_per_cm2 * self.voc_V)

    @property
    def efficiency_percent(self) -> float:
        """Maximum power over incident power.

        Raises
        ------
        InputError
            The light states no power.
        """
        problems = Complaints("efficiency")
        given = f"light with an incident power of {self.incident_power_mW_per_cm2:g} mW/cm²"
        allowed = "light that states its power: sunlight, or monochromatic light with a wavelength"
        problems.unless(self.incident_power_mW_per_cm2 > 0, given, allowed, "maximum_power.power_mW_per_cm2 instead")
        problems.raise_if_any()
        return 100 * self._lit(self.maximum_power).power_mW_per_cm2 / self.incident_power_mW_per_cm2

    @property
    def table(self) -> pd.DataFrame:
        """voltage_V, current_mA_per_cm2, power_mW_per_cm2, by rising voltage."""
        import pandas as pd

        rows = [(p.voltage_V, p.current_mA_per_cm2, p.power_mW_per_cm2) for p in self.points]
        return pd.DataFrame(rows, columns=["voltage_V", "current_mA_per_cm2", "power_mW_per_cm2"])

    @property
    def newton_steps(self) -> float:
        """Newton steps per solved voltage, on average."""
        return float(np.mean([p.state.outcome.steps for p in self.points]))

    @property
    def summary(self) -> pd.Series:
        """Headline numbers as one row."""
        import pandas as pd

        if self.maximum_power is None:
            return pd.Series({"points": len(self.points)}, name="current_voltage")
        values = {
            "jsc_mA_per_cm2": self.jsc_mA_per_cm2,
            "voc_V": self.voc_V,
            "fill_factor_percent": self.fill_factor_percent,
            "maximum_power_voltage_V": self.maximum_power.voltage_V,
            "maximum_power_mW_per_cm2": self.maximum_power.power_mW_per_cm2,
        }
        if self.incident_power_mW_per_cm2 > 0:
            values["efficiency_percent"] = self.efficiency_percent
        return pd.Series(values, name="current_voltage")

    def __str__(self) -> str:
        if self.maximum_power is None:
            return f"dark curve (no light enters), {len(self.points)} points\n{self.table.to_string(index=False)}"
        return str(self.summary.to_string(float_format="{:.5g}".format))

    def __repr__(self) -> str:
        return f"CurrentVoltage of {len(self.points)} points\n{self}"

    def _repr_html_(self) -> str:
        return str(self.summary.to_frame().to_html(float_format="{:.5g}".format))


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

    def open_circuit(self) -> Point:
        """J = 0 by Newton's method from the implied voltage, kept between voltages of either sign of J."""
        return self.root(implied_voltage_V(self.walker.system), lambda p: (p.current_mA_per_cm2, p.slope_mA_per_cm2_V))

    def maximum_power(self, voc: float) -> Point:
        """d(VJ)/dV = J + V dJ/dV = 0 between neighbouring points (R. P. Brent, 1973)."""
        from scipy.optimize import brentq

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


def current_voltage(problem: Problem | UnitCell, voltages_V: Sequence[float] | None = None) -> CurrentVoltage:
    """Current-voltage curve of a problem with contacts for both carriers.

    Starts near the implied voltage, finds open circuit, walks down to short circuit and solves for the maximum of V J.
    In the dark it solves at the voltages given (default 0 to 0.7 V).

    Parameters
    ----------
    problem : Problem or UnitCell
        A unit cell is checked before it is meshed with default fineness.
    voltages_V : sequence of float, optional
        Voltages of the curve; default are 15 between short and open circuit, dense near the knee.

    Returns
    -------
    CurrentVoltage

    Raises
    ------
    InputError
        No contacts for one of the carriers, or voltages that are not finite.
    SolverError
        As for `solve_bipolar`.
    """
    voltages_V = None if voltages_V is None else _checked(voltages_V)
    tracer = Tracer(checked_problem(problem))
    lit = bool(tracer.walker.system.load.any())
    power = tracer.walker.system.optics.incident_power_mW_per_cm2
    if not lit:
        chosen = voltages_V if voltages_V is not None else list(np.linspace(0.7, 0.0, POINTS))
        points = [tracer.at(v) for v in sorted(chosen, reverse=True)]
        return CurrentVoltage(tuple(points[::-1]), None, None, None, power)
    open_circuit = tracer.open_circuit()
    chosen = voltages_V if voltages_V is not None else _default_voltages(open_circuit.voltage_V)
    for voltage in sorted(chosen, reverse=True):
        tracer.at(voltage)
    short_circuit = tracer.at(0.0)
    best = tracer.maximum_power(open_circuit.voltage_V)
    wanted = sorted({*chosen, 0.0, open_circuit.voltage_V, best.voltage_V})
    return CurrentVoltage(tuple(tracer.points[v] for v in wanted), short_circuit, open_circuit, best, power)


def _rise(point: Point) -> float:
    """d(VJ)/dV, mA/cm²."""
    return point.current_mA_per_cm2 + point.voltage_V * point.slope_mA_per_cm2_V


def _default_voltages(voc: float) -> list[float]:
    """Voltages from just above open circuit to 0, dense near the knee."""
    shares = [1.03, 0.97, 0.94, 0.91, 0.88, 0.85, 0.82, 0.78, 0.7, 0.55, 0.35, 0.15, 0.0]
    return [share * voc for share in shares]


def _checked(voltages_V: Sequence[float]) -> list[float]:
    problems = Complaints("current_voltage")
    listed = isinstance(voltages_V, Sequence | np.ndarray) and not isinstance(voltages_V, str)
    good = listed and all(checks.is_number(v) and math.isfinite(v) for v in voltages_V)
    problems.unless(good, f"voltages_V = {voltages_V!r}", "a list of finite voltages")
    problems.raise_if_any()
    return [float(v) for v in voltages_V]


def _check_terminals(walker: Walker) -> None:
    problems = Complaints("current_voltage")
    conductors = walker.system.conductors
    both = bool(conductors.majority_terminals) and bool(conductors.minority_terminals)
    given = f"terminals {', '.join(conductors.majority_terminals + conductors.minority_terminals) or 'none'}"
    problems.unless(both, given, "a contact for each carrier", "solve_bipolar for a piece without contacts")
    problems.raise_if_any()
