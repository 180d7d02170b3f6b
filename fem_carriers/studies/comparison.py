"""Two studies side by side: what differs in the inputs, and what in the results beyond the error bars."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..analysis.uncertainty import with_bar
from ..units import split_name
from .identity import plain_form
from .store import read_store
from .study_file import Study, read_study
from .study_run import study_outcome

if TYPE_CHECKING:
    import pandas as pd

LEFT_OUT = ("error_bar_", "unknowns", "ledger_residual", "misclosure", "injection_ratio")
"""Columns that say something about the computation, not about the cell."""
ROUND_OFF = 1e-9


@dataclass(frozen=True, eq=False, repr=False)
class Comparison:
    """What differs between two studies.

    Parameters
    ----------
    names : (str, str)
        Of the study files.
    inputs : pandas.DataFrame
        ``input``, and its two values; "—" where a study does not have it.
    results : pandas.DataFrame
        By ``quantity`` over the points that both have: how many points differ beyond the sum of their error bars, the
        point with the largest difference, both values, the difference and the sum of the bars there.
    points : (int, int, int)
        Of the first study, of the second, in both.
    outcomes : (str, str)
        What each found.
    """

    names: tuple[str, str]
    inputs: pd.DataFrame
    results: pd.DataFrame
    points: tuple[int, int, int]
    outcomes: tuple[str, str]

    @property
    def changed(self) -> pd.DataFrame:
        """Rows of `results` that differ beyond the bars at one point or more."""
        return self.results[self.results["points_beyond_bars"] > 0]

    def __str__(self) -> str:
        first, second = self.names
        lines = [f"{first} and {second}", "", "inputs that differ:"]
        lines += [f"  {r.input}: {r.first} → {r.second}" for r in self.inputs.itertuples()] or ["  none"]
        lines += ["", f"results at the {self.points[2]} points in both ({self.points[0]} and {self.points[1]}):"]
        for row in self.changed.itertuples():
            lines.append(f"  {row.quantity}: {row.text}")
        same = [str(r.quantity) for r in self.results.itertuples() if not r.points_beyond_bars]
        lines += [f"  the same within the error bars: {', '.join(same)}"] if same else []
        for name, outcome in zip(self.names, self.outcomes, strict=True):
            lines += ["", f"{name}:", *(f"  {line}" for line in outcome.splitlines())] if outcome else []
        return "\n".join(lines)

    def __repr__(self) -> str:
        return f"Comparison\n{self}"


def compare_studies(first: str | Path, second: str | Path) -> Comparison:
    """Compare the inputs and the results of two studies that have been run.

    Parameters
    ----------
    first, second : str or Path
        Study files.

    Returns
    -------
    Comparison

    Raises
    ------
    InputError
        Mistakes of a file, or a study that has not been run.
    """
    import pandas as pd

    studies = [read_study(first), read_study(second)]
    tables = [_table(study) for study in studies]
    rows = list(_differing(*(_inputs(study) for study in studies)))
    names = _file_names(studies)
    results, both = _results(studies, tables)
    outcomes = [str(study_outcome(s, t) or "") if len(t) else "" for s, t in zip(studies, tables, strict=True)]
    return Comparison(
        names, pd.DataFrame(rows, columns=["input", "first", "second"]), results,
        (len(tables[0]), len(tables[1]), both), (outcomes[0], outcomes[1]),
    )  # fmt: skip


def _file_names(studies: list[Study]) -> tuple[str, str]:
    first, second = (study.path.name for study in studies)
    return (first, second) if first != second else (str(studies[0].path), str(studies[1].path))


def _table(study: Study) -> pd.DataFrame:
    with read_store(study.store_path) as store:
        return store.table()


def _inputs(study: Study) -> dict[str, Any]:
    """Everything that decides the results, by name."""
    found = dict(_flat("", plain_form(study.cell))) | {"compute": study.compute}
    found |= dict(_flat("accuracy", plain_form(dict(study.accuracy))))
    found |= {f"sweep.{'+'.join(names)}": f"{len(rows)} values" for names, rows in study.axes.groups}
    if study.goal is not None:
        scales = study.goal.region.scales
        for name, low, high in zip(scales.names, scales.lowest, scales.highest, strict=True):
            found[f"optimum.{name}"] = f"{low:g} to {high:g}"
        found["optimum.constraints"] = "; ".join(map(str, study.goal.region.limits)) or "none"
    if study.scatter is not None:
        scatter = study.scatter.scatter
        found |= {f"tolerance.{n}": str(d) for n, d in zip(scatter.inputs, scatter.distributions, strict=True)}
    return found


def _flat(name: str, value: Any) -> Iterator[tuple[str, Any]]:
    """Names and plain values of a nested form; parts of a list go by their names."""
    if isinstance(value, Mapping):
        for key, part in value.items():
            if key not in ("", "name"):
                yield from _flat(f"{name}.{key}".strip("."), part)
    elif isinstance(value, list) and any(isinstance(v, Mapping) for v in value):
        for i, part in enumerate(value):
            label = part.get("name", i) if isinstance(part, Mapping) else i
            yield from _flat(f"{name.removesuffix('.patches')}.{label}", part)
    elif value != {"taken from": "below"}:
        yield name, value


def _differing(first: Mapping[str, Any], second: Mapping[str, Any]) -> Iterator[tuple[str, str, str]]:
    for name in dict.fromkeys([*first, *second]):
        a, b = first.get(name, "—"), second.get(name, "—")
        if a != b:
            yield name, _shown(a), _shown(b)


def _shown(value: Any) -> str:
    return f"{value:g}" if isinstance(value, float) else "none" if value is None else str(value)


def _results(studies: list[Study], tables: list[pd.DataFrame]) -> tuple[pd.DataFrame, int]:
    """Rows of the comparison, and the number of points in both."""
    import pandas as pd

    variables = [n for n in studies[0].plan.names if n in studies[1].plan.names]
    a, b = (t.drop_duplicates(variables) if variables else t.head(1) for t in tables)
    both = a.merge(b, on=variables, suffixes=("", " of second")) if variables else a.join(b.add_suffix(" of second"))
    names = [str(c) for c in a if c in b and c not in variables and not str(c).startswith(LEFT_OUT)]
    numeric = [c for c in names if f"{c} of second" in both and pd.api.types.is_numeric_dtype(both[c])]
    rows = [row for c in numeric if (row := _row(both, variables, c)) is not None]
    columns = ["quantity", "points_beyond_bars", "point", "first", "second", "difference", "bars", "text"]
    return pd.DataFrame(rows, columns=columns), len(both)


def _row(both: pd.DataFrame, variables: list[str], name: str) -> tuple[Any, ...] | None:
    """One quantity: where it differs most, measured in bars (in itself, where there are none)."""
    import numpy as np

    a, b = both[name].to_numpy(dtype=float), both[f"{name} of second"].to_numpy(dtype=float)
    difference = b - a
    if not np.isfinite(difference).any():
        return None
    nothing = np.full(len(both), math.nan)
    bars = [both.get(f"error_bar_{name}{end}", nothing) for end in ("", " of second")]
    bar = np.asarray(bars[0], dtype=float) + np.asarray(bars[1], dtype=float)
    limit = np.where(np.isfinite(bar), bar, ROUND_OFF * np.maximum(np.abs(a), np.abs(b)))
    beyond = np.abs(difference) > limit
    k = int(np.nanargmax(np.abs(difference)))
    where = ", ".join(f"{v} = {both[v].iloc[k]:g}" for v in variables) or "the point"
    unit = split_name(name)[1]
    known = math.isfinite(bar[k])
    text = f"{a[k]:.5g} → {b[k]:.5g} {unit} at {where}; difference " + (
        f"{with_bar(difference[k], bar[k], 3)} {unit}" if known else f"{difference[k]:.3g} {unit}, without error bars"
    )
    if len(both) > 1:
        text += f"; beyond the bars at {int(beyond.sum())} of {len(both)} points"
    return name, int(beyond.sum()), where, a[k], b[k], difference[k], bar[k], text
