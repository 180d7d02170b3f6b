"""Measured curves from CSV files with the unit in every column's name, checked before anything is computed."""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints, InputError
from ..units import split_name

if TYPE_CHECKING:
    import pandas as pd

PERCENT = ("external_quantum_efficiency_percent", "internal_quantum_efficiency_percent")
KINDS = {
    "quantum efficiency": ("wavelength_nm", PERCENT),
    "scan": ("x_um", PERCENT),
    "current-voltage curve": ("voltage_V", ("current_mA_per_cm2",)),
}
"""Kind by its first column, and what may be measured against it."""
ERRORS = {"error_percent": PERCENT, "error_mA_per_cm2": ("current_mA_per_cm2",)}
"""Columns of standard deviations, and whose they may be."""
FEWEST = 4
SETTINGS = {
    "quantum efficiency": ("terminal", "reflectance", "path", "enters", "voltage_V", "form"),
    "scan": ("spot_diameter_um", "spot_shape", "wavelength_nm", "absorption_per_cm", "terminal", "reflectance", "path",
             "enters", "voltage_V", "form"),
    "current-voltage curve": (),
}  # fmt: skip


@dataclass(frozen=True, eq=False)
class Measurement:
    """A measured curve.

    Parameters
    ----------
    kind : {"quantum efficiency", "scan", "current-voltage curve"}
    table : pandas.DataFrame
        Ascending in its first column; then what was measured, then its standard deviation if that is known.
    settings : mapping
        How it was measured: arguments of `quantum_efficiency` or `scan_line`.
    name : str
    """

    kind: str
    table: pd.DataFrame
    settings: Mapping[str, Any] = field(default_factory=dict)
    name: str = ""

    @property
    def x(self) -> str:
        """Name of the first column."""
        return str(self.table.columns[0])

    @property
    def y(self) -> str:
        """Name of what was measured."""
        return str(self.table.columns[1])

    @property
    def errors(self) -> Any:
        """Standard deviations (n,), or None."""
        return self.table.iloc[:, 2].to_numpy(dtype=float) if self.table.shape[1] > 2 else None

    def __repr__(self) -> str:
        first, last = self.table[self.x].astype(float).iloc[[0, -1]]
        return f"Measurement: {self.kind} of {len(self.table)} points, {self.x} {first:g} to {last:g}"


def read_measurement(path: str | Path, **settings: Any) -> Measurement:
    """A measured curve from a CSV file; lines that begin with # are remarks.

    The first line names the columns with their units: ``wavelength_nm,external_quantum_efficiency_percent`` (or
    internal), ``x_um,external_quantum_efficiency_percent`` for a light-beam scan, or
    ``voltage_V,current_mA_per_cm2`` (photocurrent positive); a third column ``error_percent`` or
    ``error_mA_per_cm2`` may hold standard deviations.

    Parameters
    ----------
    path : str or Path
    **settings
        How it was measured, as for `quantum_efficiency`; a scan also needs ``spot_diameter_um`` and ``wavelength_nm``
        (or ``absorption_per_cm``), as for `scan_line`.

    Returns
    -------
    Measurement

    Raises
    ------
    InputError
        One sentence for the first defect found.
    """
    import pandas as pd

    problems = Complaints(f"measured data {Path(str(path)).name}")
    try:
        raw = pd.read_csv(path, dtype=str, comment="#", skipinitialspace=True, index_col=False, on_bad_lines="error")
    except Exception as error:
        problems.add(f"a file that cannot be read as CSV ({_short(error)})", "commas between columns, a header line")
        problems.raise_if_any()
    return measurement(raw, name=Path(path).stem, **settings)


def measurement(table: pd.DataFrame, *, name: str = "", **settings: Any) -> Measurement:
    """A measured curve from a table with the columns that `read_measurement` expects.

    Parameters
    ----------
    table : pandas.DataFrame
    name : str
    **settings

    Raises
    ------
    InputError
        One sentence for the first defect found.
    """
    what = f"measured data {name}".strip()
    named = table.rename(columns=lambda c: str(c).strip())
    kind, columns = _columns(what, [str(c) for c in named.columns])
    _check_settings(what, kind, settings)
    numbers = _numbers(what, named[columns])
    x = numbers[columns[0]].to_numpy()
    _need(what, len(x) >= FEWEST, f"{len(x)} points", f"at least {FEWEST}")
    steps = np.diff(x)
    turn = int(np.argmax(np.sign(steps) != np.sign(steps[0]))) if len(steps) else 0
    allowed = "values that only rise, or only fall, without repeats"
    steady = bool((steps > 0).all() or (steps < 0).all())
    _need(what, steady, f"{columns[0]} that turns or repeats after {x[turn]:g}", allowed)
    _check_ranges(what, numbers)
    ordered = numbers.sort_values(columns[0]).reset_index(drop=True)
    return Measurement(kind, ordered, dict(settings), name)


def _columns(what: str, given: list[str]) -> tuple[str, list[str]]:
    """Kind of the data, and the columns to take: position, value and, if there, error."""
    lone = given[0] if len(given) == 1 else ""
    for mark, word in ((";", "semicolons"), ("\t", "tabs"), (" ", "blanks")):
        _need(what, mark not in lone, f"columns separated by {word}", "commas between columns and points in numbers")
    known = [*(x for x, _ in KINDS.values()), *PERCENT, "current_mA_per_cm2", *ERRORS]
    for column in given:
        near = [k for k in known if split_name(k)[0] == column or k.rpartition("_")[0] == column]
        _need(what, column in known or not near, f"the column {column!r} without its unit", " or ".join(near))
        hint = difflib.get_close_matches(column, known, 1, cutoff=0.5)
        _need(what, column in known, f"the column {column!r}", ", ".join(hint or known))
    for kind, (x, values) in KINDS.items():
        found = [c for c in given if c in values]
        if x in given and found:
            _need(what, len(found) == 1, f"columns {' and '.join(found)}", "one of them at a time")
            errors = [c for c, owners in ERRORS.items() if c in given and found[0] in owners]
            return kind, [x, found[0], *errors]
    options = "; or ".join(f"{x} with {' or '.join(values)}" for x, values in KINDS.values())
    _need(what, False, f"columns {', '.join(given)}", options)
    raise AssertionError


def _check_settings(what: str, kind: str, settings: Mapping[str, Any]) -> None:
    for name in settings:
        allowed = ", ".join(SETTINGS[kind]) or "none for this kind"
        _need(what, name in SETTINGS[kind], f"the setting {name!r} for a {kind}", allowed)
    if kind == "scan":
        _need(what, "spot_diameter_um" in settings, "a scan without spot_diameter_um", "the diameter of the spot")
        lit = {"wavelength_nm", "absorption_per_cm"} & set(settings)
        _need(what, len(lit) == 1, "a scan without its wavelength", "wavelength_nm, or absorption_per_cm")


def _numbers(what: str, table: pd.DataFrame) -> pd.DataFrame:
    """The columns as numbers."""
    import pandas as pd

    numbers: pd.DataFrame = table.apply(pd.to_numeric, errors="coerce").astype(float)
    bad = ~np.isfinite(numbers.to_numpy(dtype=float))
    if bad.any():
        row, column = (int(i) for i in np.argwhere(bad)[0])
        entry = table.iloc[row, column]
        shown = repr(entry) if isinstance(entry, str) else "an empty field"
        given = f"{shown} in row {row + 1} of {table.columns[column]}"
        _need(what, False, given, "a finite number, with a point for the decimals")
    return numbers


def _check_ranges(what: str, table: pd.DataFrame) -> None:
    y = str(table.columns[1])
    if y in PERCENT:
        worst = table[y][(table[y] < 0) | (table[y] > 100)]
        _need(what, worst.empty, f"{y} = {worst.iloc[0] if len(worst) else 0:g}", "0 to 100 %")
    if "wavelength_nm" in table:
        low = float(table["wavelength_nm"].min())
        _need(what, low >= 100, f"wavelength_nm = {low:g}", "wavelengths in nm, 100 or more")
    for name in [str(c) for c in table.columns[2:]]:
        low = float(table[name].min())
        _need(what, low > 0, f"{name} = {low:g}", "standard deviations above 0")


def _need(what: str, condition: bool, given: str, allowed: str) -> None:
    problems = Complaints(what)
    problems.unless(condition, given, allowed)
    problems.raise_if_any()


def _short(error: Exception) -> str:
    if isinstance(error, InputError):
        return str(error)
    return " ".join(str(error).split()) or type(error).__name__
