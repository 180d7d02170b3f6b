"""J(u) of a unit cell for every pitch and finger width, interpolated between a few current-voltage curves."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np

from ..analysis.curve import CurrentVoltage, current_voltage
from ..errors import Complaints
from ..grid.cell_current import CellCurrent, constant, mixed
from ..grid.falling_curve import falling_curve
from ..grid.tables import current_from_curve
from ..units import MA
from .interpolation import Interpolant
from .paths import changed
from .sweep import sweep

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from ..cell.unit_cell import UnitCell

SHARES = np.array(
    [0.0, 3e-6, 1e-4, 1e-3, 4e-3, 0.01, 0.02, 0.035, 0.055, 0.08, 0.115, 0.17, 0.25, 0.4, 0.6, 0.8, 1.0, 1.25, 1.6]
)
"""Recombined shares of the short-circuit current at which voltages are compared; 1 is open circuit."""
PLACES = [f"{k:02d}" for k in range(SHARES.size)]
PITCH_POWERS, WIDTH_POWERS = (0, -1, 2, 1, -2, 3), (0, 1, -1, 2, -2, 3)
"""Shading and recombination under metal go as width/pitch, the sheet's loss as pitch², the contact's as pitch/width."""


@dataclass(frozen=True, eq=False)
class UnitCellCurrent(CellCurrent):
    """J(u) of a unit cell with the error bar of its maximum power.

    Parameters
    ----------
    error_bar_percent : float
        Half width, of the maximum power; NaN where the curves have none.
    """

    error_bar_percent: float = field(default=np.nan)


@dataclass(frozen=True, eq=False, repr=False)
class UnitCellLaws:
    """J(u) against pitch and finger width; called as ``laws(pitch_um, width_um)``.

    The short-circuit current and, where equal shares of it recombine, the voltage, the logarithm of −dJ/dV and the
    losses of the unit cell are interpolated by powers of pitch and width (`PITCH_POWERS`, `WIDTH_POWERS`): a series
    resistance shifts voltages at a given current in proportion to itself, but not currents at a given voltage.

    Parameters
    ----------
    table : pandas.DataFrame
        One row per curve: pitch_um, width_um, the headline numbers and error bars, and the curve at `SHARES`.
    interpolation_percent : float
        How far the maximum power of a curve solved half-way between others lies from the interpolated one; it is added
        to the error bars.
    """

    table: pd.DataFrame
    interpolation_percent: float = 0.0

    @property
    def pitches_um(self) -> NDArray[np.float64]:
        """Solved pitches."""
        return np.unique(self.table["pitch_um"].to_numpy(dtype=float))

    @property
    def widths_um(self) -> NDArray[np.float64]:
        """Solved widths."""
        return np.unique(self.table["width_um"].to_numpy(dtype=float))

    @property
    def loss_names(self) -> list[str]:
        """Losses inside the unit cell."""
        return [str(c).removesuffix("@00") for c in self.table if str(c).endswith("@00")]

    def __call__(self, pitch_um: float, width_um: float) -> UnitCellCurrent:
        """The law at a pitch and a width.

        Raises
        ------
        InputError
            Outside the solved range.
        """
        self._check(pitch_um, width_um)
        headline = ["jsc_mA_per_cm2", "incident_power_mW_per_cm2", "error_bar_percent"]
        jsc, incident, bar = self._at(headline, pitch_um, width_um)
        voltage, steepness = (
            self._at([f"{name}_{k}" for k in PLACES], pitch_um, width_um) for name in ("voltage", "log_slope")
        )
        lit = falling_curve(voltage, jsc * (1 - SHARES) * MA, -np.exp(steepness) * MA)
        at_zero = float(lit(np.zeros(1))[0][0])
        parts = {
            name: (voltage, self._at([f"{name}@{k}" for k in PLACES], pitch_um, width_um)) for name in self.loss_names
        }
        dark = mixed((1.0, lit), (-at_zero, constant))
        return UnitCellCurrent(lit, dark, float(incident), True, parts, float(bar) + self.interpolation_percent)

    def _at(self, columns: list[str], pitch_um: float, width_um: float) -> NDArray[np.float64]:
        rows = self.table.sort_values(["pitch_um", "width_um"])
        shape = self.pitches_um.size, self.widths_um.size
        values = rows[columns].to_numpy(dtype=float).T.reshape(-1, *shape)
        return Interpolant((self.pitches_um, self.widths_um), values, (PITCH_POWERS, WIDTH_POWERS)).at(
            pitch_um, width_um
        )

    def _check(self, pitch_um: float, width_um: float) -> None:
        problems = Complaints("laws of unit cells")
        for name, value, known in (
            ("pitch_um", pitch_um, self.pitches_um), ("width_um", width_um, self.widths_um),
        ):  # fmt: skip
            inside = known[0] * (1 - 1e-9) <= value <= known[-1] * (1 + 1e-9)
            allowed = f"{known[0]:g} to {known[-1]:g}, the range of the curves"
            problems.unless(bool(inside), f"{name} = {value:g}", allowed)
        problems.raise_if_any()

    def __repr__(self) -> str:
        return (
            f"J(u) of {len(self.table)} unit cells, pitch {self.pitches_um[0]:g} to {self.pitches_um[-1]:g} µm, "
            f"finger width {self.widths_um[0]:g} to {self.widths_um[-1]:g} µm"
        )


def unit_cell_laws(
    cell: UnitCell | Callable[[float, float], UnitCell],
    pitches_um: Sequence[float],
    widths_um: Sequence[float],
    *,
    width_path: str = "front.finger.width_um",
    target_error_percent: float | None = None,
    processes: int | None = None,
) -> UnitCellLaws:
    """Solve a unit cell for a grid of pitches and finger widths.

    Parameters
    ----------
    cell : UnitCell, or function (pitch_um, width_um) that returns one
        With fingers, sheet and contacts as they will be.
    pitches_um, widths_um : sequence of float
        Three of each cover a factor of 2.5 to within a few 1e-4 of the power; one more is solved half-way between two.
    width_path : str
        Path of the finger's width in a UnitCell, as of `sweep`.
    target_error_percent : float, optional
        As for `current_voltage`.
    processes : int, optional
        As for `sweep`.

    Returns
    -------
    UnitCellLaws

    Raises
    ------
    InputError
        Unknown paths, values that are not above 0 or repeated, or a curve that could not be solved.
    """
    _check_values(pitches_um, widths_um)

    def built(pitch_um: float, width_um: float) -> UnitCell:
        if callable(cell):
            return cell(pitch_um, width_um)
        return changed(cell, {"pitch_um": pitch_um, width_path: width_um})

    places = [(float(p), float(w)) for p in sorted(pitches_um) for w in sorted(widths_um)]
    between = _half_way(pitches_um), _half_way(widths_um)
    checked = [*places, between] if len(places) > 1 else places
    values = {"pitch_um": [p for p, _ in checked], "width_um": [w for _, w in checked]}
    table = sweep(
        built, values, compute=law_columns, paired=True, target_error_percent=target_error_percent, processes=processes,
    )  # fmt: skip
    problems = Complaints("unit_cell_laws")
    for _, row in table[table["failure"] != ""].iterrows():
        problems.add(f"pitch {row['pitch_um']:g} µm, width {row['width_um']:g} µm: {row['failure']}", "a solvable cell")
    problems.raise_if_any()
    laws = UnitCellLaws(table.drop(columns="failure").iloc[: len(places)])
    if len(places) == 1:
        return laws
    solved = float(table["maximum_power_mW_per_cm2"].iloc[-1])
    return replace(laws, interpolation_percent=100 * abs(laws(*between).maximum_power_mW_per_cm2 / solved - 1))


def _half_way(values: Sequence[float]) -> float:
    """Between the two neighbours that are furthest apart, geometrically."""
    x = np.sort(np.asarray(values, dtype=float))
    k = int(np.argmax(np.diff(np.log(x)))) if x.size > 1 else 0
    return float(np.sqrt(x[k] * x[min(k + 1, x.size - 1)]))


def _check_values(pitches_um: Sequence[float], widths_um: Sequence[float]) -> None:
    problems = Complaints("unit_cell_laws")
    for name, values in (("pitches_um", pitches_um), ("widths_um", widths_um)):
        numbers = np.asarray(values, dtype=float)
        good = numbers.ndim == 1 and numbers.size > 0 and bool((numbers > 0).all())
        good = good and np.unique(numbers).size == numbers.size
        problems.unless(good, f"{name} = {list(values)!r}", "different numbers above 0")
    problems.raise_if_any()


def law_columns(cell: UnitCell, target_error_percent: float | None = None) -> dict[str, float]:
    """Headline numbers and the curve of a unit cell as columns of a table.

    Parameters
    ----------
    cell : UnitCell
    target_error_percent : float, optional

    Returns
    -------
    dict of str to float
    """
    curve = current_voltage(cell, target_error_percent=target_error_percent, progress=False)
    law = current_from_curve(curve)
    volts = np.array([_voltage_at(law, share, curve.voc_V) for share in SHARES])
    slope = law.law(volts)[1]
    columns = {str(name): float(value) for name, value in curve.summary.items()}
    columns |= {"incident_power_mW_per_cm2": curve.incident_power_mW_per_cm2, "error_bar_percent": _bar(curve)}
    columns |= {f"voltage_{k}": float(v) for k, v in zip(PLACES, volts, strict=True)}
    columns |= {f"log_slope_{k}": float(np.log(-v / MA)) for k, v in zip(PLACES, slope, strict=True)}
    for name, (voltage, power) in law.parts.items():
        values = np.interp(volts, voltage, power)
        columns |= {f"{name}@{k}": float(v) for k, v in zip(PLACES, values, strict=True)}
    return columns


def _voltage_at(law: CellCurrent, share: float, voc_V: float) -> float:
    """Where a share of the short-circuit current recombines."""
    from scipy.optimize import brentq

    if share == 0:
        return 0.0
    goal = (1 - share) * law.jsc_mA_per_cm2
    return float(brentq(lambda voltage_V: law.at(voltage_V) - goal, 0.0, voc_V + 0.3, xtol=1e-13))


def _bar(curve: CurrentVoltage) -> float:
    """Half width of the error bar of the maximum power, in percent of it."""
    bars: Mapping[str, float] = curve.uncertainty or {}
    best = curve.maximum_power
    assert best is not None
    return 100 * float(bars.get("maximum_power_mW_per_cm2", np.nan)) / best.power_mW_per_cm2
