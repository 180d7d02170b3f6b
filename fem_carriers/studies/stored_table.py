"""Rows of a store as a table."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    import pandas as pd

Row = tuple[int, str, int, bytes, str, str, float, str, str]
"""Position, inputs (JSON), layout, numbers, failure, note, seconds, field file, key."""


def table_of(
    rows: Sequence[Any], names: Sequence[str], layouts: Mapping[int, Sequence[Sequence[str]]], details: bool = False
) -> pd.DataFrame:
    """Rows as a table.

    Parameters
    ----------
    rows : sequence of Row
    names : sequence of str
        Of the variables.
    layouts : mapping of int to sequence of (name, kind)
        Columns of the results, by number; kind is "float", "int" or "bool".
    details : bool
        Also number, key, seconds and field file of the points.

    Returns
    -------
    pandas.DataFrame
        Variables, results (NaN where there are none), `failure`, `note`; `fields` where there are field files.
    """
    import pandas as pd

    inputs = json.loads("[" + ",".join(row[1] for row in rows) + "]")
    columns: dict[str, Any] = {name: [values[i] for values in inputs] for i, name in enumerate(names)}
    columns |= {name: v for name, v in _results(rows, layouts).items() if name not in columns}
    columns |= {"failure": [row[4] for row in rows], "note": [row[5] for row in rows]}
    if details or any(row[7] for row in rows):
        columns["fields"] = [row[7] for row in rows]
    if details:
        columns["point"] = [row[0] for row in rows]
        columns |= {"time_s": [row[6] for row in rows], "key": [row[8] for row in rows]}
    return pd.DataFrame(columns)


def _results(rows: Sequence[Any], layouts: Mapping[int, Sequence[Sequence[str]]]) -> dict[str, Any]:
    """Columns of the results in the order in which they first appear."""
    which = np.array([row[2] for row in rows], dtype=int)
    columns: dict[str, Any] = {}
    kinds: dict[str, str] = {}
    for number in dict.fromkeys(which.tolist()):
        here = np.flatnonzero(which == number)
        layout = layouts[number]
        block = np.frombuffer(b"".join(rows[int(i)][3] for i in here), dtype="<f8").reshape(len(here), len(layout))
        for (name, kind), values in zip(layout, block.T, strict=True):
            columns.setdefault(name, np.full(len(rows), np.nan))[here] = values
            kinds[name] = kind if kinds.get(name, kind) == kind else "float"
    return {name: _as_kind(values, kinds[name]) for name, values in columns.items()}


def _as_kind(values: Any, kind: str) -> Any:
    known = np.isfinite(values)
    if kind != "float" and known.all():
        return values.astype(kind)
    if kind == "bool":
        return np.where(known, values == 1, np.array(np.nan, dtype=object))
    return values
