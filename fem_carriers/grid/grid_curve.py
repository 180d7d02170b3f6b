"""Current-voltage curve of a cell with its grid: short circuit, open circuit and maximum power are solved for."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints, SolverError
from ..units import MA
from .cell_current import CellCurrent
from .falling_curve import falling_curve
from .grid_solution import GridSolution
from .losses import GridLosses

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    import pandas as pd

SHARES = (0.35, 0.7, 0.85, 0.93, 1.02)
"""Voltages of a curve, as shares of the open-circuit voltage, besides those that are solved for."""
NEAR_V = 1e-7
"""The maximum-power voltage has settled when it moves by less (its power is then off by 1e-12)."""


@dataclass(frozen=True, eq=False, repr=False)
class GridCurve:
    """Current-voltage curve of a whole cell.

    Parameters
    ----------
    points : tuple of GridSolution
        By rising voltage.
    short_circuit, open_circuit, maximum_power : GridSolution
    incident_power_mW_per_cm2 : float
    """

    points: tuple[GridSolution, ...]
    short_circuit: GridSolution
    open_circuit: GridSolution
    maximum_power: GridSolution
    incident_power_mW_per_cm2: float

    @property
    def jsc_mA_per_cm2(self) -> float:
        """Short-circuit current per cell area."""
        return self.short_circuit.current_mA_per_cm2

    @property
    def voc_V(self) -> float:
        """Open-circuit voltage."""
        return self.open_circuit.voltage_V

    @property
    def fill_factor_percent(self) -> float:
        """Maximum power over Isc·Voc."""
        return 100 * self.maximum_power.power_mW_per_cm2 / (self.jsc_mA_per_cm2 * self.voc_V)

    @property
    def efficiency_percent(self) -> float:
        """Maximum power over incident power.

        Raises
        ------
        InputError
            The incident power is not known.
        """
        problems = Complaints("efficiency")
        given = f"incident power of {self.incident_power_mW_per_cm2:g} mW/cm²"
        problems.unless(self.incident_power_mW_per_cm2 > 0, given, "a CellCurrent that states its incident power")
        problems.raise_if_any()
        return 100 * self.maximum_power.power_mW_per_cm2 / self.incident_power_mW_per_cm2

    @property
    def losses(self) -> GridLosses:
        """Budget at maximum power."""
        return self.maximum_power.losses

    @property
    def table(self) -> pd.DataFrame:
        """voltage_V, current_A, current_mA_per_cm2, power_mW, power_mW_per_cm2 by rising voltage."""
        import pandas as pd

        names = ["voltage_V", "current_A", "current_mA_per_cm2", "power_mW", "power_mW_per_cm2"]
        return pd.DataFrame([[getattr(p, name) for name in names] for p in self.points], columns=names)

    @property
    def summary(self) -> pd.Series:
        """Headline numbers as one row."""
        import pandas as pd

        best = self.maximum_power
        values = {
            "area_cm2": best.area_cm2,
            "jsc_mA_per_cm2": self.jsc_mA_per_cm2,
            "voc_V": self.voc_V,
            "fill_factor_percent": self.fill_factor_percent,
            "maximum_power_voltage_V": best.voltage_V,
            "maximum_power_mW": best.power_mW,
            "maximum_power_mW_per_cm2": best.power_mW_per_cm2,
            "series_resistance_ohm_cm2": sum(best.series_resistance_ohm_cm2.values()),
        }
        if self.incident_power_mW_per_cm2 > 0:
            values["efficiency_percent"] = self.efficiency_percent
        mass = best.metal_mass_mg
        values |= {f"{kind}_mass_mg": value for kind, value in mass.items()}
        return pd.Series(values | {"metal_mass_mg": sum(mass.values())}, name="cell_curve")

    def __str__(self) -> str:
        return str(self.summary.to_string(float_format="{:.5g}".format))

    def __repr__(self) -> str:
        return f"GridCurve of {len(self.points)} points\n{self}"

    def _repr_html_(self) -> str:
        return str(self.summary.to_frame().to_html(float_format="{:.5g}".format))


def traced(
    solve: Callable[[float], GridSolution], current: CellCurrent, voltages_V: Sequence[float] | None
) -> GridCurve:
    """The curve of a solver of single voltages.

    Parameters
    ----------
    solve : function
        Voltage to solution.
    current : CellCurrent
        Where to start: open circuit is near its own.
    voltages_V : sequence of float, optional
        Further voltages of the curve.

    Raises
    ------
    InputError
        A dark cell.
    SolverError
        A voltage that does not settle.
    """
    problems = Complaints("cell_curve")
    given = f"a cell with {current.jsc_mA_per_cm2:.4g} mA/cm² at 0 V and open circuit at {current.voc_V:.4g} V"
    lit = current.jsc_mA_per_cm2 > 0 and current.voc_V < np.inf
    problems.unless(lit, given, "a lit cell with an open-circuit voltage", "cell_at for a single voltage")
    problems.raise_if_any()
    points: dict[float, GridSolution] = {}

    def at(voltage_V: float) -> GridSolution:
        if voltage_V not in points:
            points[voltage_V] = solve(voltage_V)
        return points[voltage_V]

    open_circuit = _open_circuit(at, current.voc_V)
    wanted = SHARES if voltages_V is None else [v / open_circuit.voltage_V for v in voltages_V]
    for share in sorted(wanted, reverse=True):
        at(share * open_circuit.voltage_V)
    short_circuit = at(0.0)
    best = _maximum_power(at, points)
    ordered = tuple(points[v] for v in sorted(points))
    return GridCurve(ordered, short_circuit, open_circuit, best, current.incident_power_mW_per_cm2)


def _open_circuit(at: Callable[[float], GridSolution], voltage_V: float) -> GridSolution:
    """I = 0 by Newton's method; I falls and is concave in V near there, so it arrives from above."""
    for _ in range(40):
        point = at(voltage_V)
        step = -point.current_mA_per_cm2 / point.slope_mA_per_cm2_V
        if abs(step) < 1e-9:
            return point
        voltage_V = max(voltage_V + float(np.clip(step, -0.1, 0.1)), 0.0)
    raise SolverError("not converged", "The open-circuit voltage did not settle.")


def maximum_of(solve: Callable[[float], GridSolution], starts_V: Sequence[float]) -> GridSolution:
    """Maximum power by a solver of single voltages, from two or more voltages near it.

    Parameters
    ----------
    solve : function
        Voltage to solution.
    starts_V : sequence of float

    Raises
    ------
    SolverError
        "not converged".
    """
    points = {voltage: solve(voltage) for voltage in starts_V}

    def at(voltage_V: float) -> GridSolution:
        if voltage_V not in points:
            points[voltage_V] = solve(voltage_V)
        return points[voltage_V]

    return _maximum_power(at, points)


def _maximum_power(at: Callable[[float], GridSolution], points: dict[float, GridSolution]) -> GridSolution:
    """Maximum of V I: that of the curve through all known points with their slopes, solved for again until it stays."""
    last = np.inf
    for _ in range(12):
        known = [points[v] for v in sorted(points)]
        voltages = np.array([p.voltage_V for p in known])
        columns = (
            np.array([getattr(p, name) for p in known]) * MA for name in ("current_mA_per_cm2", "slope_mA_per_cm2_V")
        )
        voltage = _best_voltage(falling_curve(voltages, *columns))
        if abs(voltage - last) < NEAR_V:
            return at(last)
        near = voltages[np.argmin(np.abs(voltages - voltage))]
        voltage = float(near) if abs(near - voltage) < 1e-9 else voltage
        at(voltage)
        last = voltage
    raise SolverError("not converged", "The maximum-power voltage did not settle.")


def _best_voltage(law: Any) -> float:
    from scipy.optimize import brentq

    def rise(voltage_V: float) -> float:
        current, slope = law(np.array([voltage_V]))
        return float(current[0] + voltage_V * slope[0])

    return float(brentq(rise, 0.0, float(law.voltage_V[-1]), xtol=1e-10))
