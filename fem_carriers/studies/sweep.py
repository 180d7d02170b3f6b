"""Solve a cell for many values of its inputs; one row per point."""

from __future__ import annotations

import inspect
import itertools
import sys
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..cell.unit_cell import UnitCell
from ..errors import Complaints, SweepInterrupted
from .columns import collected_current
from .engine import Workers, run_plan
from .paths import changed, check_paths, plain
from .plan import Subject, check_storable, plan_of, plan_of_cells, subject_digest
from .point import Compute, Point, guarded, solved
from .progress import points_bar
from .store import open_store
from .workers import SpreadError, available_cores, check_processes, run_spread

if TYPE_CHECKING:
    import pandas as pd

Values = dict[str, Any]


def sweep(
    cell_or_function: UnitCell | Callable[..., UnitCell],
    variables: Mapping[str, Sequence[Any]],
    *,
    compute: Callable[..., Any] = collected_current,
    paired: bool = False,
    processes: int | None = None,
    first_step_um: float | None = None,
    growth: float | None = None,
    target_error_percent: float | None = None,
    progress: bool = True,
    store: str | Path | None = None,
    scheduler: str | None = None,
) -> pd.DataFrame:
    """Compute a cell for many values of its inputs.

    Points are independent and run on all cores, one thread each. What cannot be sent to other processes (lambdas,
    functions of a notebook) runs in this one. A point that fails is a row with the reason; the others go on.

    Parameters
    ----------
    cell_or_function : UnitCell, or function of the variables that returns one
        A function for sizes that depend on each other.
    variables : mapping of str to sequence
        Values by path for a cell (``"pitch_um"``, ``"front.finger.width_um"``; see `studies.paths.changed`), by
        argument for a function.
    compute : callable
        Takes a UnitCell, or a Problem if its first argument is called ``problem`` (as of `solve_excess`); returns a
        mapping of names to numbers, a solution, or an object with a ``summary``.
    paired : bool
        Take the first values together, then the second, …; default is every combination, the last variable fastest.
    processes : int, optional
        Default is one per core.
    first_step_um, growth : float, optional
        Of the mesh; as for `problem`.
    target_error_percent : float, optional
        Error bars to reach, as for `current_voltage`; `collected_current`, `solve_excess`, `solve_bipolar` and
        `current_voltage` reach 0.1 % by default and fill the columns ``error_bar_…``.
    progress : bool
        Show a progress bar on a terminal.
    store : str or Path, optional
        SQLite file on a local disk that keeps every point as soon as it is finished. The same sweep over the same store
        goes on where an earlier one ended; points that need not be computed again are recognised by all of their
        inputs, the versions, and (for a `compute` of your own) its text, but not by what that calls.
    scheduler : str, optional
        Address of a Dask scheduler whose workers compute, e.g. ``"tcp://192.168.0.7:8786"``; needs a store.

    Returns
    -------
    pandas.DataFrame
        One row per point in the order of the input: the variables, the results (NaN where there are none), ``failure``
        (the reason, else empty) and ``note`` (warnings of the model).

    Raises
    ------
    InputError
        Unknown paths or arguments, no values, lists of different lengths that are paired, or (with a store) an input
        that cannot be recognised again, such as a lambda.
    StoreError
        The store is in use, or its disk is full; finished points are kept.
    SweepInterrupted
        Ctrl-C; holds the finished rows.
    """
    function = _as_function(cell_or_function, variables)
    points = _points(variables, paired)
    check_processes("sweep", processes)
    options = {"first_step_um": first_step_um, "growth": growth, "target_error_percent": target_error_percent}
    run = Compute(compute, {name: value for name, value in options.items() if value is not None})
    if store is not None or scheduler is not None:
        return _stored(cell_or_function, function, points, run, store, Workers(processes, scheduler), progress)
    rows: dict[int, Point] = {}
    try:
        with points_bar(len(points), progress) as advance:
            _run(function, points, run, processes, rows, advance)
    except KeyboardInterrupt:
        interrupted = SweepInterrupted(_table(points, rows), len(points))
        print(interrupted, file=sys.stderr)
        raise interrupted from None
    return _table(points, rows)


def _run(
    function: Callable[..., UnitCell], points: list[Values], compute: Compute, processes: int | None,
    rows: dict[int, Point], advance: Callable[[str], None],
) -> None:  # fmt: skip
    """Fill `rows`: build the cells here, compute them on several processes where that is possible."""
    jobs, notes = [], {}
    for index, values in enumerate(points):
        cell, built = guarded(_built, function, values)
        notes[index] = built.note
        if cell is None:
            rows[index] = built
            advance("")
        else:
            jobs.append((index, cell))

    def done(index: int, point: Point) -> None:
        note = "; ".join(dict.fromkeys(n for n in (notes[index], point.note) if n))
        rows[index] = Point(point.results, point.failure, note)
        advance("")

    count = min(processes or available_cores(), len(jobs))
    if count > 1:
        try:
            run_spread(solved, compute, jobs, count, done, lambda index, why: done(index, Point(failure=why)))
            return
        except SpreadError as reason:
            advance(f"sweep runs in one process: {reason}")
    for index, cell in jobs:
        done(index, solved(compute, cell))


def _stored(
    source: Any, function: Callable[..., UnitCell], points: list[Values], compute: Compute, path: Any,
    workers: Workers, progress: bool,
) -> pd.DataFrame:  # fmt: skip
    """The same through a store. Cells that a function makes are made here, and recognised as a whole."""
    problems = Complaints("sweep")
    problems.unless(path is not None, "scheduler without store", "a file for the results", 'store="results.sqlite"')
    problems.raise_if_any()
    names, values = tuple(points[0]), [tuple(point.values()) for point in points]
    check_storable(names, values)
    if isinstance(source, UnitCell):
        subject = Subject(compute, source)
        plan = plan_of(names, values, subject_digest(subject, names))
    else:
        subject = Subject(compute)
        plan = plan_of_cells(names, values, [guarded(_built, function, point) for point in points], subject)
    with open_store(path) as store:
        try:
            run_plan(plan, subject, store, workers, progress=progress)
        except SweepInterrupted as interrupted:
            print(interrupted, file=sys.stderr)
            raise
        return store.table()


def _built(function: Callable[..., UnitCell], values: Values) -> UnitCell:
    cell = function(**values)
    problems = Complaints("sweep")
    allowed = "a function that returns a UnitCell"
    problems.unless(isinstance(cell, UnitCell), f"a function that returns {cell!r}", allowed)
    problems.raise_if_any()
    return cell


def _as_function(source: Any, variables: Mapping[str, Any]) -> Callable[..., UnitCell]:
    """The cell as a function of the variables; refuses variables it does not have."""
    problems = Complaints("sweep")
    sound = isinstance(variables, Mapping) and bool(variables)
    if not problems.unless(sound, f"variables = {variables!r}", 'a mapping such as {"pitch_um": [400, 600, 800]}'):
        problems.raise_if_any()
    if isinstance(source, UnitCell):
        check_paths(source, variables)
        return lambda **values: changed(source, values)
    allowed = "a UnitCell, or a function that returns one"
    if problems.unless(callable(source), f"cell_or_function = {source!r}", allowed):
        _check_arguments(problems, source, variables)
    problems.raise_if_any()
    return source  # type: ignore[no-any-return]


def _check_arguments(problems: Complaints, function: Callable[..., Any], variables: Mapping[str, Any]) -> None:
    try:
        signature = inspect.signature(function)
        signature.bind(**dict.fromkeys(variables))
    except TypeError as error:
        given = f"variables {', '.join(map(repr, variables))} for {getattr(function, '__name__', 'the function')}"
        problems.add(f"{given}: {error}", f"its arguments {signature}")
    except ValueError:  # a compiled function that does not tell; calling it will
        pass


def _points(variables: Mapping[str, Sequence[Any]], paired: bool) -> list[Values]:
    """The values of every point, in order."""
    problems = Complaints("sweep")
    columns = []
    for name, values in variables.items():
        listed = list(values) if hasattr(values, "__iter__") and not isinstance(values, str) else []
        problems.unless(bool(listed), f"{name} = {values!r}", "a list of one or more values", f"[{values!r}]")
        columns.append([plain(v) for v in listed])
    lengths = {len(c) for c in columns}
    if paired:
        given = ", ".join(f"{len(c)} values of {name}" for name, c in zip(variables, columns, strict=True))
        problems.unless(len(lengths) == 1, given, "as many values of each where they are paired")
    problems.raise_if_any()
    combined = zip(*columns, strict=True) if paired else itertools.product(*columns)
    return [dict(zip(variables, values, strict=True)) for values in combined]


def _table(points: list[Values], rows: Mapping[int, Point]) -> pd.DataFrame:
    """Finished points as a table."""
    import pandas as pd

    done = sorted(rows)
    variables = list(points[0])
    names = list(dict.fromkeys(name for i in done for name in rows[i].results if name not in variables))
    table = pd.DataFrame({v: [points[i][v] for i in done] for v in variables})
    results = {name: [rows[i].results.get(name, float("nan")) for i in done] for name in names}
    texts = {what: [getattr(rows[i], what) for i in done] for what in ("failure", "note")}
    return pd.concat([table, pd.DataFrame(results | texts)], axis=1)
