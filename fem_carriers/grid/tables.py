"""J(u) from a table, and from a curve of a unit cell."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.curve import CurrentVoltage
from ..errors import Complaints
from ..units import MA
from .cell_current import CellCurrent, Law, constant, mixed
from .falling_curve import falling_curve

if TYPE_CHECKING:
    from numpy.typing import NDArray


def current_from_table(
    voltage_V: Sequence[float] | NDArray[np.float64],
    current_mA_per_cm2: Sequence[float] | NDArray[np.float64],
    *,
    dark: CellCurrent | None = None,
    lateral: bool | None = None,
    incident_power_mW_per_cm2: float = 100.0,
) -> CellCurrent:
    """J(u) through the points of a table, measured or calculated.

    Interpolated as described in `falling_curve`, with slopes from neighbouring points.

    Parameters
    ----------
    voltage_V : sequence of float
        Ascending.
    current_mA_per_cm2 : sequence of float
        Photocurrent positive; must not rise with voltage.
    dark : CellCurrent, optional
        The same cell without light; by default the curve less its value at 0 V.
    lateral : bool, optional
        Whether the curve contains the losses between fingers, as that of a unit cell does.
    incident_power_mW_per_cm2 : float

    Raises
    ------
    InputError
        For lists that differ in length, are not finite, do not ascend, or a current that rises.
    """
    v, j = _checked_table(voltage_V, current_mA_per_cm2)
    lit = falling_curve(v, j * MA)
    return CellCurrent(lit, _dark_law(lit, dark), incident_power_mW_per_cm2, lateral)


def _checked_table(voltage_V: Any, current: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    problems = Complaints("table of current against voltage")
    try:
        v, j = np.asarray(voltage_V, dtype=float), np.asarray(current, dtype=float)
    except (TypeError, ValueError):
        v = j = np.zeros(0)
    shape = v.ndim == 1 and v.shape == j.shape and v.size >= 2 and bool(np.isfinite(v).all() and np.isfinite(j).all())
    problems.unless(shape, "voltage_V and current_mA_per_cm2", "two lists of equally many finite numbers, 2 or more")
    problems.raise_if_any()
    if (np.diff(v) <= 0).any():
        k = int(np.argmax(np.diff(v) <= 0))
        problems.add(f"voltage_V = {v[k]:g} followed by {v[k + 1]:g}", "rising voltages", "sort the table")
    elif (np.diff(j) > 0).any():
        k = int(np.argmax(np.diff(j) > 0))
        given = f"a current that rises from {j[k]:g} mA/cm² at {v[k]:g} V to {j[k + 1]:g} at {v[k + 1]:g} V"
        problems.add(given, "a photocurrent (positive at 0 V) that falls with voltage", "smooth measured noise first")
    problems.raise_if_any()
    return v, j


def _dark_law(lit: Law, dark: CellCurrent | None) -> Law:
    if dark is not None:
        return dark.law
    at_zero = float(lit(np.zeros(1))[0][0])
    return mixed((1.0, lit), (-at_zero, constant))


def current_from_curve(
    curve: CurrentVoltage, *, dark: CurrentVoltage | CellCurrent | None = None, lateral: bool = True
) -> CellCurrent:
    """J(u) from a curve of `current_voltage`, with the slopes its points carry.

    Parameters
    ----------
    curve : CurrentVoltage
    dark : CurrentVoltage or CellCurrent, optional
        The same cell without light; by default the curve less its short-circuit current.
    lateral : bool
        True for a unit cell with its fingers (for ``mode="smeared"``); False for one without lateral transport, for
        example with a contact all over and the finger's shading left out (for ``mode="resolved"``).

    Raises
    ------
    InputError
        For something else than a curve, or one that rises.
    """
    problems = Complaints("current_from_curve")
    problems.unless(
        isinstance(curve, CurrentVoltage), f"curve = {curve!r}", "a CurrentVoltage", "current_voltage(cell)"
    )
    problems.raise_if_any()
    v, j = _checked_table([p.voltage_V for p in curve.points], [p.current_mA_per_cm2 for p in curve.points])
    lit = falling_curve(v, j * MA, np.array([p.slope_mA_per_cm2_V for p in curve.points]) * MA)
    other = current_from_curve(dark) if isinstance(dark, CurrentVoltage) else dark
    parts = _unit_cell_losses(curve) if lateral else {}
    return CellCurrent(lit, _dark_law(lit, other), curve.incident_power_mW_per_cm2, lateral, parts)


def _unit_cell_losses(curve: CurrentVoltage) -> dict[str, tuple[NDArray[np.float64], NDArray[np.float64]]]:
    """The unit cell's own losses against voltage, mW/cm²."""
    budgets = [point.solution.losses for point in curve.points]
    voltage = np.array([point.voltage_V for point in curve.points])
    surfaces = curve.points[0].state.system.problem.surfaces
    metal = {name for name, surface in surfaces.items() if surface.contact is not None}
    rows = {"sheet": "sheet", "contact": "contact", "transport in the base": "transport"}
    found = {name: np.array([b.sum_of(kind) for b in budgets]) for name, kind in rows.items()}
    found["shading by fingers"] = np.array([b.optical["shaded"] for b in budgets])
    found["recombination under metal"] = np.array(
        [sum(v for (kind, name), v in b.rows.items() if kind == "surface" and name in metal) for b in budgets]
    )
    return {name: (voltage, power) for name, power in found.items()}
