"""What a cell predicts for measured curves, on one mesh that moves with its sizes; and how that changes with inputs."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.held import HeldBipolar, system_like
from ..analysis.quantum_efficiency import quantum_efficiency
from ..analysis.scan import prepared_scan, spot_signals
from ..analysis.spot import BeamSpot
from ..analysis.tracer import Tracer
from ..cell.light import Monochromatic, Sunlight
from ..transport.build import problem
from ..transport.moved import described_by, with_cell
from .paths import changed

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..analysis.tracer import Point
    from ..cell.unit_cell import UnitCell
    from ..transport.problem import Problem
    from .measured import Measurement

OWN = ("reflectance_factor", "spot_diameter_um")
"""Parameters of the measurement, not of the cell."""
KEPT = 4
MOST_HELD = 400
STEP = 1e-4
"""Of an input in the derivative of a current at held unknowns, relative."""


@dataclass(frozen=True, eq=False)
class FitModel:
    """Predictions of a cell.

    Parameters
    ----------
    cell : UnitCell
    measurements : sequence of Measurement
    level : float
        Fineness of the mesh; see `problem`.
    """

    cell: UnitCell
    measurements: Sequence[Measurement]
    level: float
    _kept: dict[Any, list[NDArray[np.float64]]] = field(default_factory=dict)
    _traced: dict[Any, list[Point]] = field(default_factory=dict)
    _adjoint: dict[Point, HeldBipolar] = field(default_factory=dict)

    @cached_property
    def _first(self) -> tuple[Problem, UnitCell]:
        posed = problem(self.cell, level=self.level)
        return posed, described_by(posed)

    def problem(self, values: Mapping[str, float]) -> Problem:
        """The problem at these values of parameters."""
        posed, described = self._first
        inputs = {name: value for name, value in values.items() if name not in OWN}
        return with_cell(posed, described, changed(described, inputs)) if inputs else posed

    def predict(self, values: Mapping[str, float]) -> NDArray[np.float64]:
        """All curves, one after the other, (n,)."""
        return np.concatenate(self._curves(values))

    def _curves(self, values: Mapping[str, float]) -> list[NDArray[np.float64]]:
        """One per measurement; the last few are kept."""
        key = tuple(values.items())
        if key not in self._kept:
            posed = self.problem(values)
            self._kept[key] = [self._curve(m, posed, values) for m in self.measurements]
            while len(self._kept) > KEPT:
                del self._kept[next(iter(self._kept))]
        return self._kept[key]

    def _curve(self, measured: Measurement, posed: Problem, values: Mapping[str, float]) -> NDArray[np.float64]:
        x = measured.table[measured.x].to_numpy(dtype=float)
        if measured.kind == "current-voltage curve":
            points = self._points(measured, posed, values)
            return np.array([point.current_mA_per_cm2 for point in points])
        how = self._how(measured, values)
        if measured.kind == "scan":
            return scan_at(posed, x, measured.y, how)
        return quantum_efficiency(posed, x, losses=False, **how)[measured.y].to_numpy(dtype=float)

    def _how(self, measured: Measurement, values: Mapping[str, float]) -> dict[str, Any]:
        """Settings with the parameters of the measurement in them."""
        how = dict(measured.settings)
        if "reflectance_factor" in values:
            how["reflectance"] = _scaled(how.get("reflectance", self._own_reflectance), values["reflectance_factor"])
        if "spot_diameter_um" in values and measured.kind == "scan":
            how["spot_diameter_um"] = values["spot_diameter_um"]
        return how

    @property
    def _own_reflectance(self) -> Any:
        sources = self.cell.light.sources if self.cell.light is not None else ()
        beams = [s for s in sources if isinstance(s, Sunlight | Monochromatic)]
        return beams[0].reflectance if beams else 0.0

    def slopes(self, values: Mapping[str, float], name: str, step: float) -> NDArray[np.float64]:
        """Derivative of all curves by one parameter, (n,).

        Currents of a current-voltage curve by the adjoint at every voltage; the rest by a difference.

        Parameters
        ----------
        values : mapping of str to float
        name : str
        step : float
            For the difference; its sign is the side on which it is taken.
        """
        if all(m.kind == "current-voltage curve" for m in self.measurements):
            pairs: list[Any] = [(None, None)] * len(self.measurements)
        else:
            moved = {**values, name: values[name] + step}
            pairs = list(zip(self._curves(values), self._curves(moved), strict=True))
        return np.concatenate(
            [
                self._current_slopes(m, values, name) if m.kind == "current-voltage curve" else (after - before) / step
                for m, (before, after) in zip(self.measurements, pairs, strict=True)
            ]
        )

    def _points(self, measured: Measurement, posed: Problem, values: Mapping[str, float]) -> list[Point]:
        """Points of the curve at the measured voltages; the last curve is kept for its derivatives."""
        key = (id(measured), *values.items())
        if key not in self._traced:
            self._traced.clear()
            tracer, voltages = Tracer(posed), measured.table[measured.x].to_numpy(dtype=float)
            self._traced[key] = [tracer.at(float(v)) for v in voltages[::-1]][::-1]
        return self._traced[key]

    def _current_slopes(self, measured: Measurement, values: Mapping[str, float], name: str) -> NDArray[np.float64]:
        if name in OWN:
            return np.zeros(len(measured.table))
        h = STEP * (abs(values[name]) or 1.0)
        points = self._points(measured, self.problem(values), values)
        first = points[0].state.system
        sides = [system_like(first, self.problem({**values, name: values[name] + s * h})) for s in (1, -1)]
        return np.array([_slope(self._held(point), sides, h) for point in points])

    def _held(self, point: Point) -> HeldBipolar:
        """With its multipliers, kept as long as the point."""
        if point not in self._adjoint:
            if not any(point in kept for kept in self._traced.values()) or len(self._adjoint) > MOST_HELD:
                self._adjoint.clear()
            state = point.state
            self._adjoint[point] = HeldBipolar(state, state.system.conductors.hole_terminals)
        return self._adjoint[point]


def _slope(held: HeldBipolar, sides: Sequence[Any], h: float) -> float:
    return (held.at(sides[0]) - held.at(sides[1])) / (2 * h)


def scan_at(posed: Problem, x_um: NDArray[np.float64], column: str, how: Mapping[str, Any]) -> NDArray[np.float64]:
    """A column of `scan_line` at any positions."""
    given = {"wavelength_nm": None, "absorption_per_cm": None, "terminal": None, "reflectance": None, "path": None,
             "enters": None, "voltage_V": 0.0, "form": "excess"} | dict(how)  # fmt: skip
    spot = BeamSpot(given.pop("spot_diameter_um"), given.pop("spot_shape", "gaussian"))
    _, response, spot = prepared_scan("scan", posed, spot, **given)
    signals = spot_signals(response, spot, x_um[:, None])
    return np.asarray(signals[0 if column.startswith("external") else 1])


def _scaled(reflectance: Any, factor: float) -> Any:
    if isinstance(reflectance, tuple | list):
        wavelength, share = reflectance
        return tuple(wavelength), tuple(factor * s for s in share)
    return factor * reflectance
