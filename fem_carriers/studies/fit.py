"""Least-squares fits of a cell's inputs to measured curves, and what the data can and cannot tell."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..errors import Complaints
from ..units import split_name
from .fit_model import OWN, FitModel
from .fit_search import Search, Span, Verdict, best, verdicts
from .measured import Measurement
from .paths import changed, check_paths, value_at

if TYPE_CHECKING:
    import pandas as pd

    from ..cell.unit_cell import UnitCell

COARSE = 0.5
"""Standard deviations of the data by which the mesh may be off before that is said."""
WIDE = 10.0
"""Bounds at least this factor apart make a parameter logarithmic by default."""


@dataclass(frozen=True, eq=False, repr=False)
class Fit:
    """A fit of inputs to measured curves.

    Parameters
    ----------
    cell : UnitCell
        With the fitted values.
    values : mapping of str to float
        Fitted parameters.
    verdicts : tuple of Verdict
        One per parameter: standard deviation, and whether the data determine it.
    covariance, correlation : pandas.DataFrame
        Of the parameters (logarithmic ones are linearised); at a bound as if there were none.
    chi_square : float
        Sum of squared residuals over their standard deviations; where these are not known, of residuals.
    degrees_of_freedom : int
    curves : mapping of str to pandas.DataFrame
        Per measurement: position, measured, fitted, residual and error columns.
    mesh_error : float
        Largest change of a fitted value on a finer mesh, over the standard deviation of its datum.
    errors_known : bool
        Whether standard deviations of the data were given; else they are taken from the residuals.
    """

    cell: UnitCell
    values: Mapping[str, float]
    verdicts: tuple[Verdict, ...]
    covariance: pd.DataFrame
    correlation: pd.DataFrame
    chi_square: float
    degrees_of_freedom: int
    curves: Mapping[str, pd.DataFrame]
    mesh_error: float
    errors_known: bool

    @cached_property
    def table(self) -> pd.DataFrame:
        """parameter, value, standard_deviation, lowest and highest value within 2 standard deviations, determined,
        inseparable_from."""
        import pandas as pd

        rows = [
            (v.name, v.value, v.deviation, v.low, v.high, v.determined, ", ".join(v.partners)) for v in self.verdicts
        ]
        columns = ["parameter", "value", "standard_deviation", "lowest", "highest", "determined", "inseparable_from"]
        return pd.DataFrame(rows, columns=columns)

    @property
    def statements(self) -> tuple[str, ...]:
        """What the data say of every parameter, in words."""
        return tuple(statement(v) for v in self.verdicts)

    def __str__(self) -> str:
        reduced = self.chi_square / self.degrees_of_freedom
        if self.errors_known:
            last = f"reduced chi-square {reduced:.3g} with {self.degrees_of_freedom} degrees of freedom"
            last += " (the model misses the data by more than their errors)" if reduced > 2 else ""
        else:
            last = f"scatter about the fit {math.sqrt(reduced):.3g} (in the unit of the data)"
        coarse = f"the mesh is off by up to {self.mesh_error:.2g} standard deviations of the data; raise level"
        return "\n".join([*self.statements, last, *([coarse] if self.mesh_error > COARSE else [])])

    __repr__ = __str__


def statement(verdict: Verdict) -> str:
    """One parameter in words: "base.lifetime = 41.2 ± 1.3 µs", or why there is no such number."""
    label, unit = split_name(verdict.name)
    unit = f" {unit}" if unit else ""
    if verdict.determined:
        return f"{label} = {with_deviation(verdict.value, verdict.deviation)}{unit}"
    reach = f"{label} from {verdict.low:.3g} to {verdict.high:.3g}{unit}"
    reach += f" ({_ends(verdict)})" if verdict.at_low or verdict.at_high else ""
    if verdict.partners:
        others = " and ".join(split_name(p)[0] for p in verdict.partners)
        return f"{label} cannot be separated from {others}: {reach} fits as well"
    return f"{label} is not determined by these data: {reach} fits as well"


def with_deviation(value: float, deviation: float) -> str:
    """A number with its standard deviation, to two digits of the latter: "41.2 ± 1.3"."""
    if not (math.isfinite(deviation) and deviation > 0):
        return f"{value:.5g}"
    places = 1 - math.floor(math.log10(deviation))
    if places <= 0:
        return f"{round(value, places):.0f} ± {round(deviation, places):.0f}"
    return f"{value:.{places}f} ± {deviation:.{places}f}"


def _ends(verdict: Verdict) -> str:
    ends = [word for word, at in (("lower", verdict.at_low), ("upper", verdict.at_high)) if at]
    return f"up to the {' and '.join(ends)} bound"


def fit(
    cell: UnitCell,
    data: Measurement | Sequence[Measurement],
    parameters: Mapping[str, tuple[float, ...]],
    *,
    log_scaled: Sequence[str] | None = None,
    error: float | None = None,
    level: float = -1.0,
) -> Fit:
    """Fit inputs of a cell to measured quantum efficiency, light-beam scans or current-voltage curves.

    Minimises Σ ((measured − fitted)/error)² within bounds by a trust-region method (M. A. Branch, T. F. Coleman, Y. Li,
    SIAM J. Sci. Comput. 21, 1 (1999)). Derivatives of currents come from the adjoint, the rest from differences. The
    covariance is (JᵀJ)⁻¹ at the best fit. A parameter that this leaves uncertain, or that ends at a bound, is followed
    over its range with the others refitted; those that move with it cannot be separated from it.

    Parameters
    ----------
    cell : UnitCell
        Where the fit starts, and what is held.
    data : Measurement or several
        See `read_measurement`; several are fitted together.
    parameters : mapping of str to (lowest, highest) or (lowest, highest, start)
        Inputs by path as for `changed`, e.g. ``{"base.lifetime_us": (1, 1000)}``; also ``reflectance_factor`` (times
        the stated reflectance) and ``spot_diameter_um`` (of scans). The start is the cell's own value, brought inside.
    log_scaled : sequence of str, optional
        Parameters varied in their logarithm; default are those whose bounds are a factor of 10 or more apart.
    error : float, optional
        Standard deviation of data without an error column, in their unit; without it residuals are weighted alike and
        the scatter about the fit takes its place.
    level : float
        Fineness of the mesh as for `problem`. It stays the same throughout; sizes that are fitted move it.

    Returns
    -------
    Fit

    Raises
    ------
    InputError
        Unknown parameters, bounds that do not fit, or fewer points than parameters.
    """
    measurements = [data] if isinstance(data, Measurement) else list(data)
    spans = _spans(cell, measurements, parameters, log_scaled)
    _check(measurements, spans, error)
    model = FitModel(cell, measurements, level)
    measured, errors = _gathered(measurements, error)
    search = Search(model.predict, model.slopes, measured, errors, spans)
    known = error is not None or all(m.errors is not None for m in measurements)
    found = best(search, known)
    values = search.values(found.position)
    inputs = {name: value for name, value in values.items() if name not in OWN}
    covariance, correlation = _frames(spans, found.covariance(search))
    finer = FitModel(cell, measurements, level + 1).predict(values)
    deviations = errors * math.sqrt(found.noise)
    return Fit(
        cell=changed(cell, inputs) if inputs else cell,
        values=values,
        verdicts=verdicts(search, found),
        covariance=covariance,
        correlation=correlation,
        chi_square=found.chi_square,
        degrees_of_freedom=measured.size - len(spans),
        curves=_curves(measurements, measured, found.fitted, errors, known),
        mesh_error=float(np.max(np.abs(finer - found.fitted) / deviations)),
        errors_known=known,
    )


def _spans(
    cell: UnitCell, measurements: Sequence[Measurement], parameters: Mapping[str, Any], log_scaled: Any
) -> list[Span]:
    problems = Complaints("fit")
    good = isinstance(parameters, Mapping) and bool(parameters)
    problems.unless(good, f"parameters = {parameters!r}", "names with bounds", '{"base.lifetime_us": (1, 1000)}')
    problems.raise_if_any()
    check_paths(cell, [name for name in parameters if name not in OWN])
    spans = []
    for name, limits in parameters.items():
        fine = isinstance(limits, tuple | list) and len(limits) in (2, 3) and all(map(_finite, limits))
        if problems.unless(fine, f"{name}: {limits!r}", "(lowest, highest) or (lowest, highest, start), finite"):
            low, high = float(limits[0]), float(limits[1])
            problems.unless(low < high, f"{name}: {limits!r}", "the lower bound first")
            log = name in log_scaled if log_scaled is not None else low > 0 and high / low >= WIDE
            problems.unless(not log or low > 0, f"{name}: {limits!r} on a logarithmic scale", "bounds above 0")
            start = limits[2] if len(limits) == 3 else _start(cell, measurements, name)
            if problems.unless(_finite(start), f"{name} without a value to start from", "(lowest, highest, start)"):
                spans.append(Span(name, low, high, min(max(float(start), low), high), log))
    problems.raise_if_any()
    return spans


def _finite(value: Any) -> bool:
    return bool(checks.is_number(value) and math.isfinite(value))


def _start(cell: UnitCell, measurements: Sequence[Measurement], name: str) -> Any:
    if name == "reflectance_factor":
        return 1.0
    if name == "spot_diameter_um":
        return next((m.settings["spot_diameter_um"] for m in measurements if m.kind == "scan"), None)
    return value_at(cell, name)


def _check(measurements: Sequence[Measurement], spans: Sequence[Span], error: Any) -> None:
    problems = Complaints("fit")
    good = bool(measurements) and all(isinstance(m, Measurement) for m in measurements)
    problems.unless(good, f"data = {measurements!r:.80}", "what read_measurement gives, or a list of it")
    problems.raise_if_any()
    points = sum(len(m.table) for m in measurements)
    given = f"{points} points for {len(spans)} parameters"
    problems.unless(points > len(spans), given, "more points than parameters")
    problems.unless(error is None or (_finite(error) and error > 0), f"error = {error!r}", "a number above 0")
    problems.raise_if_any()


def _gathered(measurements: Sequence[Measurement], error: float | None) -> tuple[Any, Any]:
    """All measured values and their standard deviations."""
    values = np.concatenate([m.table[m.y].to_numpy(dtype=float) for m in measurements])
    parts = [np.full(len(m.table), error or 1.0) if m.errors is None else m.errors for m in measurements]
    return values, np.concatenate(parts)


def _frames(spans: Sequence[Span], covariance: Any) -> tuple[pd.DataFrame, pd.DataFrame]:
    import pandas as pd

    names = [s.name for s in spans]
    deviation = np.sqrt(np.diag(covariance))
    correlation = covariance / np.outer(deviation, deviation)
    return pd.DataFrame(covariance, names, names), pd.DataFrame(correlation, names, names)


def _curves(
    measurements: Sequence[Measurement], measured: Any, fitted: Any, errors: Any, known: bool
) -> dict[str, pd.DataFrame]:
    """Position, measured, fitted, residual (and error) of every measurement."""
    found, first = {}, 0
    for i, m in enumerate(measurements):
        part = slice(first, first + len(m.table))
        first = part.stop
        ending = "_percent" if m.y.endswith("_percent") else "_mA_per_cm2"
        table = m.table[[m.x]].copy()
        table[f"measured_{m.y}"], table[f"fitted_{m.y}"] = measured[part], fitted[part]
        table[f"residual{ending}"] = measured[part] - fitted[part]
        if known:
            table[f"error{ending}"] = errors[part]
        key = m.name or m.kind
        found[key if key not in found else f"{key} {i + 1}"] = table
    return found
