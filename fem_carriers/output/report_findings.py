"""What a report is about: a study with its results, or a table."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.curve import current_voltage
from ..errors import Complaints
from ..studies.identity import versions
from ..studies.optimum import Optimum
from ..studies.paths import changed
from ..studies.plan import solution_of
from ..studies.point import guarded
from ..studies.store import read_store
from ..studies.study_file import Study, read_study
from ..studies.study_run import judged_by, study_outcome
from ..studies.tolerance import Tolerance

if TYPE_CHECKING:
    import pandas as pd

    from ..cell.unit_cell import UnitCell


@dataclass(frozen=True, eq=False)
class AtBest:
    """The best point solved once more.

    Parameters
    ----------
    values : mapping of str to float
        Of the variables.
    result : object
        None if it failed.
    failure, note : str
    """

    values: Mapping[str, float]
    result: Any
    failure: str = ""
    note: str = ""

    @property
    def solution(self) -> Any:
        """At maximum power, or at 0 V."""
        return None if self.result is None else solution_of(self.result)


@dataclass(frozen=True, eq=False)
class Findings:
    """Everything a report shows.

    Parameters
    ----------
    title, question : str
    table : pandas.DataFrame
        Of the points.
    variables : tuple of str
    outcome : Best, Optimum, Tolerance or None
    cell : UnitCell or None
    study : Study or None
    runs : sequence of mappings
        History of the store.
    times_s : float
        Computing time of all points together.
    """

    title: str
    question: str
    table: pd.DataFrame
    variables: tuple[str, ...]
    outcome: Any
    cell: UnitCell | None
    study: Study | None = None
    runs: Sequence[Mapping[str, Any]] = field(default_factory=tuple)
    times_s: float = float("nan")

    @property
    def when(self) -> str:
        """Date of the report."""
        return f"{datetime.now().astimezone():%d %B %Y, %H:%M}"

    @cached_property
    def judged(self) -> str | None:
        """The column by which points are compared."""
        return self.outcome.quantity if hasattr(self.outcome, "quantity") else judged_by(self.table)

    @cached_property
    def best_row(self) -> int | None:
        """Position of the best point in the table."""
        if self.judged is None or self.judged not in self.table or self.table[self.judged].isna().all():
            return None
        sign = -1 if isinstance(self.outcome, Optimum) and not self.outcome.maximized else 1
        return int(np.nanargmax(sign * self.table[self.judged].to_numpy(dtype=float)))

    @property
    def best_values(self) -> dict[str, float]:
        """Variables at the point that is shown in detail: the optimum, nominal inputs, or the best row."""
        if isinstance(self.outcome, Optimum):
            return dict(self.outcome.location)
        if isinstance(self.outcome, Tolerance):
            scatter = self.outcome.scatter
            return dict(zip(scatter.inputs, scatter.medians.tolist(), strict=True)) | dict(self.outcome.design)
        row = self.table.iloc[self.best_row or 0]
        return {name: float(row[name]) for name in self.variables}

    @cached_property
    def best_cell(self) -> UnitCell | None:
        """The cell of that point."""
        if self.cell is None:
            return None
        made, _ = guarded(changed, self.cell, self.best_values)
        return self.cell if made is None else made

    def at_best(self) -> AtBest | None:
        """Solve that point; None without a study."""
        if self.study is None:
            return None
        values = self.best_values
        result, point = guarded(_solved, self.study, values)
        return AtBest(values, result, point.failure, point.note)


def _solved(study: Study, values: Mapping[str, float]) -> Any:
    """A point with its fields; of a curve all of it, where points of a study stop at the key points."""
    cell = study.subject.built(values)
    if study.compute == "current_voltage":
        return current_voltage(cell, **study.accuracy, progress=False)
    return study.subject.compute_fields(cell)


def findings_of_study(study: str | Path | Study) -> Findings:
    """A study with the results in its store.

    Raises
    ------
    InputError
        Mistakes of the file, a study that has not been run, or no results in it.
    """
    study = study if isinstance(study, Study) else read_study(study)
    with read_store(study.store_path) as store:
        table, runs = store.table(details=True), store.runs()
    _need_rows(table)
    outcome = study_outcome(study, table) if study.plan.names else None
    title = study.title or study.path.stem.replace("_", " ")
    return Findings(
        title, study.question, table, tuple(study.plan.names), outcome, study.cell, study, tuple(runs),
        float(table["time_s"].sum()),
    )  # fmt: skip


def findings_of_table(table: pd.DataFrame, cell: UnitCell | None, title: str, question: str, outcome: Any) -> Findings:
    """A table and what was said about it."""
    _need_rows(table)
    if isinstance(outcome, Optimum):
        names = tuple(outcome.location)
    elif isinstance(outcome, Tolerance):
        names = outcome.scatter.names
    else:
        columns = [str(c) for c in table]
        known = outcome.variable if hasattr(outcome, "variable") else None
        names = (known,) if known else tuple(columns[: _first_result(columns)])
    return Findings(title or "Report", question, table, names, outcome, cell)


def _first_result(columns: Sequence[str]) -> int:
    """Number of columns before the results: those of a sweep begin with currents or generation."""
    starts = ("jsc_", "incident_", "voltage_V", "points", "error_bar_", "failure")
    return next((i for i, name in enumerate(columns) if name.startswith(starts)), 1)


def _need_rows(table: pd.DataFrame) -> None:
    problems = Complaints("report")
    problems.unless(len(table) > 0, "a table without rows", "results of one point or more", "run the study first")
    problems.raise_if_any()


def software() -> dict[str, str]:
    """Versions that decide the numbers, and of what draws."""
    import platform
    from importlib.metadata import version

    drawn = {name: version(name) for name in ("matplotlib", "pyvista")}
    return (
        versions()
        | drawn
        | {"python": platform.python_version(), "system": f"{platform.system()} {platform.machine()}"}
    )
