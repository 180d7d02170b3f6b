"""Tables as Parquet and NetCDF, with the unit of every column as an attribute."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import Complaints
from ..units import split_name

if TYPE_CHECKING:
    import pandas as pd

SUFFIXES = (".csv", ".json", ".parquet", ".nc")


def write_parquet(table: pd.DataFrame, path: Path) -> None:
    """Write a table as Parquet; the unit of a column stands in its field's metadata under ``units``.

    Raises
    ------
    InputError
        The package `pyarrow` is not installed.
    """
    try:
        import pyarrow as pa
        import pyarrow.parquet as pq
    except ImportError:
        problems = Complaints("write_table")
        problems.add("a name ending in .parquet", "the package `pyarrow`", "pip install 'fem-carriers[parquet]'")
        problems.raise_if_any()
    arrow = pa.Table.from_pandas(table, preserve_index=False)
    fields = [f.with_metadata({"units": unit}) if (unit := split_name(f.name)[1]) else f for f in arrow.schema]
    pq.write_table(arrow.cast(pa.schema(fields, metadata=arrow.schema.metadata)), path)


def to_dataset(table: pd.DataFrame) -> Any:
    """A table as an xarray Dataset along ``point``, with units and names as attributes.

    Parameters
    ----------
    table : pandas.DataFrame

    Returns
    -------
    xarray.Dataset
        A variable per column: attribute ``units`` as printed (``"µm"``), ``long_name`` in words.
    """
    import numpy as np
    import xarray as xr

    variables = {}
    for column in map(str, table.columns):
        name, unit = split_name(column)
        attributes = {"long_name": name.replace("_", " ")} | ({"units": unit} if unit else {})
        values = table[column].to_numpy()
        if not np.issubdtype(values.dtype, np.number):
            values = np.array([str(v) for v in values], dtype=object)
        variables[column] = ("point", values, attributes)
    return xr.Dataset(variables, coords={"point": np.arange(len(table))})


def write_netcdf(table: pd.DataFrame, path: Path) -> None:
    """Write a table as NetCDF 4 (HDF5), see `to_dataset`. Dots of column names stay."""
    to_dataset(table).to_netcdf(path, engine="h5netcdf")
