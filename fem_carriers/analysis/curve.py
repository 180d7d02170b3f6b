"""Current-voltage curve: short circuit, open circuit and maximum power are solved for."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..cell import checks
from ..errors import Complaints
from .accuracy import Numbers, refine
from .climb import CurveClimb
from .ladder import starting_problem, wanted_target
from .tracer import KeyPoints, Point, key_points
from .uncertainty import Uncertainty, with_bar

if TYPE_CHECKING:
    import pandas as pd

    from ..cell.unit_cell import UnitCell
    from ..transport.problem import Problem

POINTS = 15
DARK_V = 0.7
"""Highest voltage of a dark curve by default."""


NO_BARS = "(no error bars: state target_error_percent)"


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
    uncertainty : Uncertainty, optional
        Half widths of the error bars by name; None where no target was asked for.
    """

    points: tuple[Point, ...]
    short_circuit: Point | None
    open_circuit: Point | None
    maximum_power: Point | None
    incident_power_mW_per_cm2: float
    uncertainty: Uncertainty | None = None

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
        """Headline numbers as one row, with an ``error_bar_…`` (half width) for each where they are known."""
        import pandas as pd

        bars = {f"error_bar_{name}": bar for name, bar in (self.uncertainty or {}).items()}
        if self.maximum_power is None:
            return pd.Series({"points": len(self.points)} | bars, name="current_voltage")
        values = headline(self) | {"maximum_power_voltage_V": self.maximum_power.voltage_V}
        return pd.Series(values | bars, name="current_voltage")

    def __str__(self) -> str:
        if self.maximum_power is None:
            return f"dark curve (no light enters), {len(self.points)} points\n{self.table.to_string(index=False)}"
        known: Mapping[str, float] = self.uncertainty or {}
        values = headline(self) | {"maximum_power_voltage_V": self.maximum_power.voltage_V}
        rows = [f"{name:<26}{with_bar(value, known.get(name))}" for name, value in values.items()]
        return "\n".join(rows if known else [*rows, NO_BARS])

    def __repr__(self) -> str:
        return f"CurrentVoltage of {len(self.points)} points\n{self}"

    def _repr_html_(self) -> str:
        return str(self.summary.to_frame().to_html(float_format="{:.5g}".format))


def current_voltage(
    problem: Problem | UnitCell,
    voltages_V: Sequence[float] | None = None,
    *,
    first_step_um: float | None = None,
    growth: float | None = None,
    target_error_percent: float | None = None,
    target_error: Mapping[str, float] | None = None,
    largest_unknowns: int | None = None,
    progress: bool = True,
) -> CurrentVoltage:
    """Current-voltage curve of a problem with contacts for both carriers.

    Starts near the implied voltage, finds open circuit, walks down to short circuit and solves for the maximum of V J.
    In the dark it solves at the voltages given (default 0 to 0.7 V).

    Parameters
    ----------
    problem : Problem or UnitCell
        A unit cell is checked before it is meshed.
    voltages_V : sequence of float, optional
        Voltages of the curve beside short circuit, open circuit and maximum power; default are 13 dense near the
        knee.
    first_step_um, growth : float, optional
        Of a unit cell's mesh; as for `problem`.
    target_error_percent : float, optional
        Refine the mesh until the error bars of Jsc, Voc, fill factor, maximum power and efficiency are below this
        share of each. Default is 0.1 for a unit cell without stated steps; meshes that are stated
        or given stay as they are, without error bars.
    target_error : mapping of str to float, optional
        Absolute errors instead, e.g. ``{"voc_V": 1e-4, "efficiency_percent": 0.01}``; other numbers are then free
        unless `target_error_percent` is given too.
    largest_unknowns : int, optional
        No finer mesh than that (per carrier); default 300,000 in 2-D, 250,000 in 3-D.
    progress : bool
        Show value ± bar of every mesh on a terminal.

    Returns
    -------
    CurrentVoltage

    Raises
    ------
    InputError
        No contacts for one of the carriers, or voltages that are not finite.
    SolverError
        As for `solve_bipolar`.

    Warns
    -----
    ModelWarning
        The error asked for was not reached; the bars hold all the same.
    """
    voltages_V = None if voltages_V is None else _checked(voltages_V)
    options = {"first_step_um": first_step_um, "growth": growth}
    target = wanted_target("current_voltage", problem, options, target_error_percent, target_error)
    first = starting_problem(problem, options, target, bipolar=True)
    if target is None:
        return _filled(key_points(first), voltages_V, None)
    solve = lambda meshed, before: _with_dark(key_points(meshed, before), voltages_V)
    climb = CurveClimb(largest_unknowns)
    keys, uncertainty = refine(
        first, solve, _numbers, climb.finer, target, estimates=climb.estimates, progress=progress
    )
    return _filled(keys, voltages_V, uncertainty)


def _with_dark(keys: KeyPoints, voltages_V: Sequence[float] | None) -> KeyPoints:
    """In the dark the error bar is that of the largest current asked for."""
    if keys.best is not None:
        return keys
    return dataclasses.replace(keys, best=keys.tracer.at(max(voltages_V) if voltages_V else DARK_V))


def _numbers(keys: KeyPoints) -> Numbers:
    """Headline numbers, each its own scale."""
    if keys.short_circuit is None:
        assert keys.best is not None
        values = {"current_mA_per_cm2": keys.best.current_mA_per_cm2}
    else:
        values = headline(_filled(keys, [], None))
    return values, {name: abs(value) for name, value in values.items()}


def headline(curve: CurrentVoltage) -> dict[str, float]:
    """Jsc, Voc, fill factor, maximum power and, where the light states its power, efficiency."""
    names = ["jsc_mA_per_cm2", "voc_V", "fill_factor_percent"]
    values = {name: float(getattr(curve, name)) for name in names}
    if curve.maximum_power is not None:
        values["maximum_power_mW_per_cm2"] = curve.maximum_power.power_mW_per_cm2
    if curve.incident_power_mW_per_cm2 > 0:
        values["efficiency_percent"] = curve.efficiency_percent
    return values


def _filled(keys: KeyPoints, voltages_V: Sequence[float] | None, uncertainty: Uncertainty | None) -> CurrentVoltage:
    """The curve through the key points and the voltages asked for."""
    tracer = keys.tracer
    power = tracer.walker.system.optics.incident_power_mW_per_cm2
    if keys.short_circuit is None or keys.open_circuit is None or keys.best is None:
        chosen = voltages_V if voltages_V is not None else list(np.linspace(DARK_V, 0.0, POINTS))
        points = [tracer.at(v) for v in sorted(chosen, reverse=True)]
        return CurrentVoltage(tuple(points[::-1]), None, None, None, power, uncertainty)
    chosen = voltages_V if voltages_V is not None else _default_voltages(keys.open_circuit.voltage_V)
    wanted = sorted({*chosen, *(p.voltage_V for p in (keys.short_circuit, keys.open_circuit, keys.best))})
    points = [tracer.at(voltage) for voltage in wanted[::-1]]
    return CurrentVoltage(tuple(points[::-1]), keys.short_circuit, keys.open_circuit, keys.best, power, uncertainty)


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
