"""Run a study file: compute what is missing, and hand over the table."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from ..files.tables import write_table
from .best import Best, best_point
from .engine import Workers, run_plan
from .optimum import Optimum, optimum_of
from .search import search
from .spread import learn
from .store import Store, open_store, read_store
from .study_file import Study, read_study
from .tolerance import Tolerance, tolerance_of
from .workers import check_processes

if TYPE_CHECKING:
    import pandas as pd


def run_study(
    study: str | Path | Study, *, processes: int | None = None, scheduler: str | None = None, retry: bool = False,
    progress: bool = True, lines: bool = False,
) -> pd.DataFrame:  # fmt: skip
    """Compute the points of a study that are missing, write the tables it asks for, and return the whole table.

    A study with [optimum] or [tolerance] asks for points until it knows enough; see `study_outcome`.

    Every point is kept in the store as soon as it is finished. After an interruption or a crash the same call goes on
    where the run ended.

    Parameters
    ----------
    study : path of a study file, or Study
    processes : int, optional
        On this machine; default is one per core.
    scheduler : str, optional
        Address of a Dask scheduler, e.g. ``"tcp://192.168.0.7:8786"``; its workers compute instead.
    retry : bool
        Compute points again that failed or were set aside.
    progress : bool
        Show progress on the error stream.
    lines : bool
        Without a terminal, say how far the run is every half minute.

    Returns
    -------
    pandas.DataFrame
        One row per point: variables, results (NaN where there are none), `failure`, `note`.

    Raises
    ------
    InputError
        Mistakes of the file, or no scheduler at the address.
    StoreError
        The store is in use, or its disk is full; finished points are kept.
    SweepInterrupted
        Ctrl-C; holds the finished rows.
    """
    study = study if isinstance(study, Study) else read_study(study)
    check_processes("run_study", processes)
    with open_store(study.store_path) as store:
        store.describe(study=study.text, title=study.title, question=study.question, compute=study.compute)
        workers = Workers(processes, scheduler)
        how = {"retry": retry, "progress": progress, "lines": lines}
        evaluate = lambda points: _computed(study, store, workers, points, how)
        if study.goal is not None:
            table = search(study.goal, evaluate)
        elif study.scatter is not None:
            table = learn(study.scatter.scatter, evaluate)
        else:
            run_plan(study.plan, study.subject, store, workers, **how)
            table = store.table()
    for path in study.table_paths:
        write_table(table, path)
    return table


def _computed(
    study: Study, store: Store, workers: Workers, points: list[tuple[float, ...]], how: dict[str, bool]
) -> pd.DataFrame:
    """The points of a search so far; those that the store has are not computed again."""
    run_plan(study.plan_with(study.plan.names, points), study.subject, store, workers, **how)
    return store.table()


def study_outcome(study: str | Path | Study, table: pd.DataFrame | None = None) -> Best | Optimum | Tolerance | None:
    """What a study found: its optimum, its tolerance, or the best point of a sweep of one variable.

    Parameters
    ----------
    study : path of a study file, or Study
    table : pandas.DataFrame, optional
        Its results; default is those in its store.

    Returns
    -------
    Best, Optimum, Tolerance or None
        None for a sweep of several variables, or of one without efficiency or two results.

    Raises
    ------
    InputError
        A study that has not been run.
    SolverError
        Too few points have a result.
    """
    study = study if isinstance(study, Study) else read_study(study)
    if table is None:
        with read_store(study.store_path) as store:
            table = store.table()
    if study.goal is not None:
        return optimum_of(study.goal, table)
    if study.scatter is not None:
        return tolerance_of(study.scatter.scatter, table, study.scatter.percentiles)
    names, y = study.axes.names, judged_by(table)
    alone = len(study.axes.groups) == 1 and len(study.axes.groups[0][0]) == 1
    if not alone or y is None or table[y].notna().sum() < 2:
        return None
    return best_point(table, names[0], y)


def judged_by(table: pd.DataFrame) -> str | None:
    """The column by which points are compared: efficiency, or else the only collected current."""
    if "efficiency_percent" in table:
        return "efficiency_percent"
    collected = [str(c) for c in table if str(c).startswith("collected_") and str(c).endswith("_mA_per_cm2")]
    return collected[0] if len(collected) == 1 else None


def read_results(path: str | Path, *, details: bool = False) -> pd.DataFrame:
    """The table of a study, also while it runs.

    Parameters
    ----------
    path : str or Path
        A study file, or a store.
    details : bool
        Also number, key, time and field file of every point.

    Returns
    -------
    pandas.DataFrame
        Finished points.

    Raises
    ------
    InputError
        No such file, or a study that has not been run.
    StoreError
        Not a store.
    """
    with read_store(store_of(path)) as store:
        return store.table(details)


def store_of(path: str | Path) -> Path:
    """The store of a study file; a store itself."""
    path = Path(path)
    return read_study(path).store_path if path.suffix == ".toml" else path
