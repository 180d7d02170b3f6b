"""Tables that describe light: reflectance against wavelength, generation rate against depth."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from typing import Any

from ..errors import Complaints
from . import checks


def reflectance_table(problems: Complaints, value: Any) -> Any:
    """A constant in [0, 1], or a table (wavelength_nm, reflectance) as tuples."""
    if not isinstance(value, tuple | list):
        problems.unless(checks.is_number(value) and 0 <= value <= 1, f"reflectance = {value!r}", "0 to 1, or a table")
        return value
    columns = [numbers_of(column) for column in value]
    good = len(columns) == 2 and None not in columns
    if not problems.unless(good, f"reflectance = {value!r}", "a pair of lists (wavelength_nm, reflectance)"):
        return value
    wavelength, share = columns
    assert wavelength is not None
    assert share is not None
    rising = len(wavelength) == len(share) >= 2 and all(b > a for a, b in pairwise(wavelength))
    problems.unless(rising, "reflectance table", "rising wavelengths, as many shares as wavelengths")
    problems.unless(all(0 <= s <= 1 for s in share), "reflectance table", "shares from 0 to 1")
    return wavelength, share


def numbers_of(column: Any) -> tuple[float, ...] | None:
    """A column as numbers; None if it is no list of numbers."""
    try:
        return tuple(float(v) for v in column)
    except (TypeError, ValueError):
        return None


def read_profile(path: Any) -> tuple[Sequence[float], Sequence[float]]:
    """(depth_um, rate_per_cm3_s) from a CSV file with these two columns.

    Raises
    ------
    InputError
        A file that cannot be read, other columns, or entries that are no numbers.
    """
    import pandas as pd

    problems = Complaints(f"depth profile {path!s}")
    wanted = ["depth_um", "rate_per_cm3_s"]
    try:
        table = pd.read_csv(path)
    except Exception as error:
        problems.add(f"a file that cannot be read as CSV ({error})", "columns depth_um,rate_per_cm3_s")
        problems.raise_if_any()
    given = f"columns {', '.join(map(str, table.columns))}"
    if problems.unless(list(table.columns) == wanted, given, "columns depth_um,rate_per_cm3_s"):
        numbers = table.apply(pd.to_numeric, errors="coerce")
        problems.unless(not numbers.isna().any(axis=None), "entries that are no numbers", "numbers only")
        table = numbers
    problems.raise_if_any()
    return table["depth_um"].tolist(), table["rate_per_cm3_s"].tolist()
