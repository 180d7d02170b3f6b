"""The command line ``fem-carriers``: check, run, show, view and export a study; check the installation.

Data go to the standard output, everything else to the error stream. Libraries are imported where they are used, so that
the help is quick.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

if TYPE_CHECKING:
    import pandas as pd

DONE, REFUSED, INCOMPLETE, STOPPED, FAILED_CHECK, INTERRUPTED = 0, 2, 3, 4, 5, 130
EXIT_CODES = """Exit codes: 0 done; 2 refused input (study file, option, name, network disk); 3 the run is over but some
points have no result; 4 the run cannot go on (full disk, store in use by another run, cluster lost); 5 a check of the
installation failed; 130 interrupted."""

app = typer.Typer(
    name="fem-carriers",
    help="Carrier transport for contact layouts of solar cells: studies from files (TOML).",
    epilog=EXIT_CODES,
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
)

StudyFile = Annotated[Path, typer.Argument(metavar="STUDY", help="Study file (.toml).")]
Results = Annotated[Path, typer.Argument(metavar="STUDY", help="Study file (.toml), or its store (.sqlite).")]
Processes = Annotated[int | None, typer.Option(help="Processes on this machine; default is one per core.")]
Quiet = Annotated[bool, typer.Option("--quiet", "-q", help="Say nothing unless something is wrong.")]


def main() -> None:
    """Entry point of ``fem-carriers``."""
    app(prog_name="fem-carriers")


def say(text: str) -> None:
    """A message for the person, not for the next program."""
    print(text, file=sys.stderr, flush=True)


@contextmanager
def _answers() -> Iterator[None]:
    """Errors that help, as text and exit code instead of a traceback."""
    from .errors import FemCarriersError, SweepInterrupted
    from .studies.cluster import ClusterError
    from .studies.store import StoreError

    try:
        yield
    except SweepInterrupted as stopped:
        say(f"interrupted: {len(stopped.table)} of {stopped.points} points are finished and kept; run again to go on")
        raise typer.Exit(INTERRUPTED) from None
    except KeyboardInterrupt:
        say("interrupted")
        raise typer.Exit(INTERRUPTED) from None
    except (StoreError, ClusterError) as error:
        say(str(error))
        raise typer.Exit(STOPPED) from None
    except FemCarriersError as error:
        say(str(error))
        raise typer.Exit(REFUSED) from None


@app.command(short_help="Check a study file; forecast points, time and memory.")
def check(study: StudyFile, processes: Processes = None) -> None:
    """Check a study file and say what it will take: points, time, memory. Nothing is solved."""
    with _answers():
        from .studies.forecast import forecast
        from .studies.study_file import read_study

        found = forecast(read_study(study), processes)
        print(found)
        if found.refused:
            say("Refused cells become rows without results.")


@app.command(short_help="Run a study, or go on with it.")
def run(
    study: StudyFile,
    processes: Processes = None,
    scheduler: Annotated[str | None, typer.Option(help="Address of a Dask scheduler whose workers compute.")] = None,
    retry: Annotated[bool, typer.Option("--retry", help="Compute points again that failed or were set aside.")] = False,
    quiet: Quiet = False,
) -> None:
    """Run a study, or go on with it: only what is missing is computed."""
    with _answers(), _ended_by_signals():
        from .studies.study_file import read_study
        from .studies.study_run import run_study

        described = read_study(study)
        table = run_study(
            described, processes=processes, scheduler=scheduler, retry=retry, progress=not quiet, lines=True
        )
        failed = int((table["failure"] != "").sum())
        if not quiet:
            total = described.most_points if described.goal is None and described.scatter is None else len(table)
            say(f"{described.store_path}: {len(table)} of {total} points, {failed} without a result")
            for path in described.table_paths:
                say(f"written: {path}")
            _print_outcome(described, table)
        if failed:
            raise typer.Exit(INCOMPLETE)


def _print_outcome(study: Any, table: pd.DataFrame) -> None:
    """What a search found."""
    from .studies.study_run import study_outcome

    if study.goal is not None or study.scatter is not None:
        print(study_outcome(study, table))


@contextmanager
def _ended_by_signals() -> Iterator[None]:
    """A request to end (as a batch system sends it) counts as Ctrl-C."""
    import signal

    def interrupt(number: int, frame: Any) -> None:
        raise KeyboardInterrupt

    before = signal.signal(signal.SIGTERM, interrupt)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


@app.command(short_help="Show the results so far.")
def show(
    study: Results,
    columns: Annotated[str, typer.Option(help="Columns, separated by commas; default is a choice that fits.")] = "",
    sort: Annotated[str, typer.Option(help="Column to sort by, largest first.")] = "",
    rows: Annotated[int | None, typer.Option(min=1, help="At most so many rows.")] = None,
    failed: Annotated[bool, typer.Option("--failed", help="Only points without a result, with the reason.")] = False,
    details: Annotated[bool, typer.Option("--details", help="Also number, time and field file of points.")] = False,
) -> None:
    """Show the results so far, also while a run is on: a table on a terminal, CSV with all digits in a pipe."""
    with _answers():
        from .studies.study_run import read_results

        table = read_results(study, details=details)
        table = table[table["failure"] != ""] if failed else table
        table = _chosen(table, sort, columns)
        table = table if rows is None else table.head(rows)
        if sys.stdout.isatty():
            _print_table(table, all_columns=bool(columns) or details)
        else:
            table.to_csv(sys.stdout, index=False)


def _chosen(table: pd.DataFrame, sort: str, columns: str) -> pd.DataFrame:
    """Rows in the order and with the columns asked for."""
    from difflib import get_close_matches

    from .errors import Complaints

    wanted = [c.strip() for c in columns.split(",") if c.strip()]
    problems = Complaints("show")
    for name in [*wanted, *filter(None, [sort])]:
        near = " or ".join(get_close_matches(name, list(table.columns), 3))
        problems.unless(name in table, f"column {name!r}", f"one of {', '.join(map(str, table.columns))}", near)
    problems.raise_if_any()
    table = table.sort_values(sort, ascending=False) if sort else table
    return table[wanted] if wanted else table


def _print_table(table: pd.DataFrame, all_columns: bool) -> None:
    """A table on the terminal; of many columns those that fit, the first ones and failures first."""
    from rich.console import Console
    from rich.table import Table

    from .units import split_name

    console = Console()
    names = [str(c) for c in table.columns if c not in ("failure", "note") or (table[c] != "").any()]
    most = len(names) if all_columns else max(3, console.width // 14)
    shown = names[: most - 1] + [c for c in names[most - 1 :] if c == "failure"]
    printed = Table(box=None, header_style="bold")
    for name in shown:
        plain, unit = split_name(name)
        printed.add_column(plain.replace("_", " ") + (f"\n({unit})" if unit else ""), overflow="fold")
    for values in table[shown].itertuples(index=False):
        printed.add_row(*(f"{v:.6g}" if isinstance(v, float) else str(v) for v in values))
    console.print(printed)
    if len(shown) < len(names):
        say(f"{len(names) - len(shown)} more columns: --columns {names[-1]}, or pipe into a file for all")


@app.command(short_help="Write the results as CSV, JSON, Parquet or NetCDF.")
def export(
    study: Results,
    table: Annotated[Path, typer.Argument(metavar="TABLE", help="File ending in .csv, .json, .parquet or .nc.")],
    details: Annotated[bool, typer.Option("--details", help="Also number, key, time and field file.")] = False,
    quiet: Quiet = False,
) -> None:
    """Write the results so far as a table; Parquet and NetCDF carry the units as attributes."""
    with _answers():
        from .files.tables import write_table
        from .studies.study_run import read_results

        found = read_results(study, details=details)
        write_table(found, table)
        if not quiet:
            say(f"written: {table}, {len(found)} rows")


@app.command(short_help="Look at the fields of a file or of a point.")
def view(
    what: Annotated[Path, typer.Argument(metavar="FILE", help="Field file (.vtu), study file, or store.")],
    point: Annotated[int | None, typer.Option(min=0, help="Number of a point of the study, from 0.")] = None,
    field: Annotated[str | None, typer.Option(help="Field to begin with.")] = None,
    picture: Annotated[Path | None, typer.Option(help="Save a picture (.png) instead of opening a window.")] = None,
) -> None:
    """Open the window on a field file, or on a point of a study (computed again where it has no field file)."""
    with _answers():
        from .output.field_file import view_field_file
        from .studies.study_point import field_file_of, solution_at

        file = what if what.suffix == ".vtu" else field_file_of(what, point)
        if file is not None:
            saved = view_field_file(file, field, picture=picture)
        else:
            from .output.window import view as view_solution

            say(f"point {point} has no field file; computing it")
            saved = view_solution(solution_at(what, point), field, picture=picture)
        if saved is not None:
            say(f"written: {saved}")


@app.command("check-installation", short_help="Check that everything is installed and works.")
def check_installation() -> None:
    """Check that everything needed is installed and works: packages, a solution, the store, pictures."""
    with _answers():
        from .output.installation import checks

        good = True
        for check in checks():
            good &= check.passed or check.optional
            word = "ok" if check.passed else "missing" if check.optional else "FAILED"
            print(f"{word:8}{check.name:24}{check.text}", flush=True)
        if not good:
            raise typer.Exit(FAILED_CHECK)


@app.command(short_help="Write the report of a study as one HTML file.")
def report(
    study: StudyFile,
    html: Annotated[
        Path | None, typer.Argument(metavar="REPORT", help="File ending in .html; default: beside the study.")
    ] = None,
    details: Annotated[
        bool, typer.Option(help="Solve the best point once more for its curve, losses and fields.")
    ] = True,
    quiet: Quiet = False,
) -> None:
    """Write the report of a study that has been run: one file, readable without a network, to hand over or print."""
    with _answers():
        from .output.report import write_report

        written = write_report(study, html, details=details)
        if not quiet:
            say(f"written: {written}")


@app.command(short_help="Say what differs between two studies.")
def compare(
    first: StudyFile, second: Annotated[Path, typer.Argument(metavar="STUDY", help="Study file (.toml).")]
) -> None:
    """Say what differs between two studies that have been run: in the inputs, and in the results beyond the bars."""
    with _answers():
        from .studies.comparison import compare_studies

        print(compare_studies(first, second))
