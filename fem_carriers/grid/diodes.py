"""J(u) of one or two diodes."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..constants import STANDARD_TEMPERATURE_K, thermal_voltage_V
from ..errors import Complaints
from ..units import FA, MA, NA
from .cell_current import CellCurrent, constant, mixed, straight

if TYPE_CHECKING:
    from numpy.typing import NDArray

LARGEST_EXPONENT = 60.0
"""Exponentials go on as straight lines beyond this exponent, so that no step of Newton's method overflows."""


def exponential(
    saturation: float, ideality: float, temperature_K: float
) -> Callable[[Any], tuple[NDArray[np.float64], NDArray[np.float64]]]:
    """Recombination current J0 (exp(u/(n V_T)) − 1) and its slope."""
    scale = ideality * thermal_voltage_V(temperature_K)
    end = LARGEST_EXPONENT * scale

    def law(voltage_V: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        inside = np.minimum(voltage_V, end)
        slope = saturation / scale * np.exp(inside / scale)
        return saturation * np.expm1(inside / scale) + slope * (voltage_V - inside), slope

    return law


def diode_current(
    photocurrent_mA_per_cm2: float,
    J01_fA_per_cm2: float,
    *,
    ideality: float = 1.0,
    J02_nA_per_cm2: float = 0.0,
    ideality2: float = 2.0,
    shunt_ohm_cm2: float = math.inf,
    series_resistance_ohm_cm2: float = 0.0,
    temperature_K: float = STANDARD_TEMPERATURE_K,
    incident_power_mW_per_cm2: float = 100.0,
) -> CellCurrent:
    """J(u) of one or two diodes, J = J_L − J01 (e^(u/n1 V_T) − 1) − J02 (e^(u/n2 V_T) − 1) − u/R_shunt.

    With a series resistance R (a lumped one of the cell's own, not of its grid) u on the right is u + R J.

    Parameters
    ----------
    photocurrent_mA_per_cm2 : float
        0 for a dark part.
    J01_fA_per_cm2, ideality, J02_nA_per_cm2, ideality2 : float
        At the cell's temperature.
    shunt_ohm_cm2, series_resistance_ohm_cm2 : float
    temperature_K : float
    incident_power_mW_per_cm2 : float
        For efficiencies.

    Returns
    -------
    CellCurrent

    Raises
    ------
    InputError
        Every number that is negative or not finite.
    """
    problems = Complaints("diode_current")
    checks.positive(problems, "photocurrent_mA_per_cm2", photocurrent_mA_per_cm2, zero=True)
    checks.positive(problems, "J01_fA_per_cm2", J01_fA_per_cm2, zero=True)
    checks.positive(problems, "J02_nA_per_cm2", J02_nA_per_cm2, zero=True)
    checks.positive(problems, "ideality", ideality)
    checks.positive(problems, "ideality2", ideality2)
    checks.positive(problems, "shunt_ohm_cm2", shunt_ohm_cm2, inf=True)
    checks.positive(problems, "temperature_K", temperature_K)
    checks.positive(problems, "series_resistance_ohm_cm2", series_resistance_ohm_cm2, zero=True)
    checks.positive(problems, "incident_power_mW_per_cm2", incident_power_mW_per_cm2, zero=True)
    problems.raise_if_any()
    first = exponential(J01_fA_per_cm2 * FA, ideality, temperature_K)
    second = exponential(J02_nA_per_cm2 * NA, ideality2, temperature_K)
    dark = mixed((-1.0, first), (-1.0, second), (-1 / shunt_ohm_cm2, straight))
    lit = mixed((1.0, dark), (photocurrent_mA_per_cm2 * MA, constant))
    return CellCurrent(lit, dark, incident_power_mW_per_cm2).with_series_resistance(series_resistance_ohm_cm2)
