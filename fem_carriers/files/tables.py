"""Tables as CSV, JSON, Parquet or NetCDF; units stay in the column names."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from ..errors import Complaints
from .atomic import target, write_atomically
from .table_formats import SUFFIXES, write_netcdf, write_parquet

if TYPE_CHECKING:
    import pandas as pd


def write_table(table: pd.DataFrame, path: str | Path) -> Path:
    """Write a table, complete or not at all.

    Numbers are written with all their digits. A named index (as of a ledger) becomes columns; a plain row count is
    left out. CSV keeps ``inf`` and writes NaN as an empty field; JSON (a list of rows) has no infinity, so both become
    ``null``. Parquet and NetCDF keep the types of the columns and carry their units as attributes as well.

    Parameters
    ----------
    table : pandas.DataFrame
        Columns named with their units.
    path : str or Path
        Ends in .csv, .json, .parquet or .nc; the folder must exist.

    Returns
    -------
    Path

    Raises
    ------
    InputError
        Another suffix, no such folder, not a table, a column name used twice, or a package that is not installed.
    """
    import pandas as pd

    path = target("write_table", path, SUFFIXES)
    problems = Complaints("write_table")
    if not problems.unless(isinstance(table, pd.DataFrame), f"table of type {type(table).__name__}", "a DataFrame"):
        problems.raise_if_any()
    named = any(name is not None for name in table.index.names)
    flat = table.reset_index() if named else table
    problems.unless(flat.columns.is_unique, f"columns {list(flat.columns)}", "every column name once")
    problems.raise_if_any()
    if path.suffix in (".parquet", ".nc"):
        write = write_parquet if path.suffix == ".parquet" else write_netcdf
        return write_atomically(path, lambda p: write(flat, p))
    if path.suffix == ".csv":
        return write_atomically(path, lambda p: flat.to_csv(p, index=False))
    return write_atomically(path, lambda p: flat.to_json(p, orient="records", indent=1, double_precision=15))
