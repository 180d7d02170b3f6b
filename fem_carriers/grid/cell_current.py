"""The local law J(u) of a cell: photocurrent density against local cell voltage, photocurrent positive."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..errors import Complaints
from ..units import MA
from .falling_curve import FallingCurve

if TYPE_CHECKING:
    from numpy.typing import NDArray

Law = Callable[[Any], "tuple[NDArray[np.float64], NDArray[np.float64]]"]
"""Voltages in V to J in A/cm² and dJ/dV in S/cm², of the same shape."""


@dataclass(frozen=True, eq=False)
class CellCurrent:
    """J(u) of a piece of cell.

    Made by `diode_current`, `current_from_curve` and `current_from_table`.

    Parameters
    ----------
    law, dark : Law
        Under light and without.
    incident_power_mW_per_cm2 : float
        Light on the cell, for efficiencies; 0 if unknown.
    lateral : bool or None
        Whether J contains the losses of the sheet between fingers, of the contacts and of the fingers' shading
        (a unit cell does); None if not stated.
    parts : mapping of str to (voltage_V, power_mW_per_cm2)
        Losses inside the unit cell against voltage, for the budget.
    """

    law: Law
    dark: Law
    incident_power_mW_per_cm2: float = 100.0
    lateral: bool | None = None
    parts: Mapping[str, tuple[NDArray[np.float64], NDArray[np.float64]]] = field(default_factory=dict)

    def at(self, voltage_V: Any) -> Any:
        """J in mA/cm² at local voltages."""
        value = self.law(np.asarray(voltage_V, dtype=float))[0] / MA
        return float(value) if np.ndim(voltage_V) == 0 else value

    @property
    def jsc_mA_per_cm2(self) -> float:
        """J at 0 V."""
        return float(self.at(0.0))

    @property
    def voc_V(self) -> float:
        """Where J vanishes, at most 5 V; infinite if it does not."""
        from scipy.optimize import brentq

        if self.at(5.0) >= 0:
            return math.inf
        return float(brentq(self.at, 0.0, 5.0, xtol=1e-12)) if self.at(0.0) > 0 else 0.0

    @property
    def maximum_power_voltage_V(self) -> float:
        """Where u J(u) is largest; 0 in the dark."""
        from scipy.optimize import brentq

        if not 0 < self.voc_V < math.inf:
            return 0.0
        return float(brentq(self._rise, 0.0, self.voc_V, xtol=1e-12))

    @property
    def maximum_power_mW_per_cm2(self) -> float:
        """Largest u J(u); 0 in the dark."""
        best = self.maximum_power_voltage_V
        return float(best * self.at(best))

    def _rise(self, voltage_V: float) -> float:
        """d(uJ)/du, A/cm²."""
        current, slope = self.law(np.asarray(voltage_V, dtype=float))
        return float(current + voltage_V * slope)

    def with_light(self, factor: float) -> CellCurrent:
        """The same cell with the light current scaled: J_dark + factor (J − J_dark).

        Parameters
        ----------
        factor : float
            0 is dark.
        """
        problems = Complaints("light on a part of the cell")
        checks.positive(problems, "factor", factor, zero=True)
        problems.raise_if_any()
        return replace(self, law=mixed((factor, self.law), (1 - factor, self.dark)), parts={})

    def with_series_resistance(self, series_resistance_ohm_cm2: float) -> CellCurrent:
        """The same cell behind a lumped resistance: J(u) = J_here(u + R J).

        Parameters
        ----------
        series_resistance_ohm_cm2 : float

        Returns
        -------
        CellCurrent
        """
        problems = Complaints("with_series_resistance")
        checks.positive(problems, "series_resistance_ohm_cm2", series_resistance_ohm_cm2, zero=True)
        problems.raise_if_any()
        resistance = float(series_resistance_ohm_cm2)
        if resistance == 0:
            return self
        return replace(self, law=_behind(self.law, resistance), dark=_behind(self.dark, resistance), parts={})

    def __str__(self) -> str:
        return (
            f"jsc {self.jsc_mA_per_cm2:.5g} mA/cm², voc {self.voc_V:.5g} V, "
            f"maximum power {self.maximum_power_mW_per_cm2:.5g} mW/cm²"
        )

    __repr__ = __str__


def mixed(*terms: tuple[Any, Law]) -> Law:
    """Σ factor · law; factors are numbers or arrays of the shape of the voltages."""

    def law(voltage_V: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        values = [(factor, one(voltage_V)) for factor, one in terms]
        return sum(f * j for f, (j, _) in values), sum(f * s for f, (_, s) in values)

    return law


def nothing(voltage_V: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """No current."""
    return np.zeros_like(voltage_V), np.zeros_like(voltage_V)


def straight(voltage_V: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """1 S/cm² times the voltage."""
    return np.asarray(voltage_V, dtype=float), np.ones_like(voltage_V)


def constant(voltage_V: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """1 A/cm²."""
    return np.ones_like(voltage_V), np.zeros_like(voltage_V)


def _behind(law: Law, resistance_ohm_cm2: float) -> Law:
    """The law behind a resistance, tabulated against the inner voltage w: u = w − R J(w)."""
    w = np.linspace(-1.0, 1.5, 5001)
    current, slope = law(w)
    keep = np.append(True, np.diff(w - resistance_ohm_cm2 * current) > 0)
    keep &= np.abs(current) < 1e3 * max(1.0, float(np.abs(current[:2000]).max()))
    w, current, slope = w[keep], current[keep], slope[keep]
    return FallingCurve(w - resistance_ohm_cm2 * current, current, slope / (1 - resistance_ohm_cm2 * slope))
