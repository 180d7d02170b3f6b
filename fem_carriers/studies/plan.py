"""What is to be computed: the subject of a study and its points, each with the key that it is known by."""

from __future__ import annotations

import tempfile
import time
import warnings
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import Complaints, FemCarriersError, ModelWarning
from ..files.disks import is_full
from .columns import collected_current, result_columns
from .identity import cell_form, digest, function_form, point_key, versions
from .paths import changed
from .point import Compute, Point, guarded

if TYPE_CHECKING:
    from ..cell.unit_cell import UnitCell


class RefusedCellError(FemCarriersError):
    """A function that made no cell; the text is its reason."""


@dataclass(frozen=True)
class Subject:
    """What is computed at every point.

    Parameters
    ----------
    compute : Compute
    cell : UnitCell, optional
        The cell whose inputs a point changes; without it a job is a cell itself.
    fields : bool
        Whether field files are made.
    """

    compute: Compute
    cell: UnitCell | None = None
    fields: bool = False

    def compute_fields(self, cell: UnitCell) -> Any:
        """The result with its fields, also where the computation itself returns mere numbers."""
        if self.compute.function is not collected_current:
            return self.compute(cell)
        from ..analysis.solve import solve_excess

        return Compute(solve_excess, self.compute.mesh_options)(cell)

    def built(self, job: Any) -> UnitCell:
        """The cell of a job: values by path, or (without a cell of its own) what `guarded` made of a function."""
        if self.cell is not None:
            return changed(self.cell, job)
        cell, made = job
        if cell is None:
            raise RefusedCellError(made.failure)
        if made.note:
            warnings.warn(made.note, ModelWarning, stacklevel=2)
        return cell  # type: ignore[no-any-return]


@dataclass(frozen=True)
class Outcome:
    """What comes back from a process.

    Parameters
    ----------
    point : Point
    seconds : float
    files : mapping of str to bytes
        Contents of field files by the end of their name.
    stop : str
        Why the whole run must stop; empty if it need not.
    """

    point: Point
    seconds: float = 0.0
    files: Mapping[str, bytes] = field(default_factory=dict)
    stop: str = ""


@dataclass(frozen=True)
class Plan:
    """The points of a study.

    Parameters
    ----------
    names : tuple of str
        Of the variables.
    values : sequence of tuples
        Point by point.
    keys : sequence of str
        Point by point; equal points have equal keys.
    job : callable
        What to send to a process for the point of that number.
    """

    names: tuple[str, ...]
    values: Sequence[tuple[Any, ...]]
    keys: Sequence[str]
    job: Callable[[int], Any]

    def __len__(self) -> int:
        return len(self.keys)


def plan_of(names: Sequence[str], values: Sequence[tuple[Any, ...]], subject_digest: str) -> Plan:
    """A plan whose points change the inputs of one cell.

    Parameters
    ----------
    names : sequence of str
    values : sequence of tuples
    subject_digest : str
        Of everything else; see `studies.identity`.

    Returns
    -------
    Plan
    """

    def job(index: int) -> dict[str, Any]:
        return dict(zip(names, values[index], strict=True))

    keys = [point_key(subject_digest, job(i)) for i in range(len(values))]
    return Plan(tuple(names), values, keys, job)


def plan_of_cells(
    names: Sequence[str], values: Sequence[tuple[Any, ...]], cells: Sequence[tuple[Any, Point]], subject: Subject
) -> Plan:
    """A plan whose points are cells of their own, as a function made them.

    Parameters
    ----------
    names : sequence of str
    values : sequence of tuples
    cells : sequence of (UnitCell or None, Point)
        With the failure where there is no cell, and the warnings on the way.
    subject : Subject
        Without a cell.

    Returns
    -------
    Plan
    """
    whole = subject_digest(subject)
    keys = [
        point_key(whole, {"cell": cell, "note": made.note} if cell is not None else {"refused": made.failure})
        for cell, made in cells
    ]
    return Plan(tuple(names), values, keys, lambda i: cells[i])


def subject_digest(subject: Subject, names: Sequence[str] = ()) -> str:
    """Digest of everything besides the variables that decides the numbers: cell, computation, options, versions."""
    cell = None if subject.cell is None else cell_form(subject.cell, names)
    compute = function_form(subject.compute.function)
    options = dict(subject.compute.mesh_options)
    return digest({"cell": cell, "compute": compute, "options": options, "versions": versions()})


def check_storable(names: Sequence[str], values: Sequence[tuple[Any, ...]]) -> None:
    """Refuse values of variables that a store cannot hold.

    Raises
    ------
    InputError
    """
    problems = Complaints("store")
    for name, column in zip(names, zip(*values, strict=True), strict=True):
        wrong = [v for v in column if not isinstance(v, bool | int | float | str | None)]
        if wrong:
            problems.add(f"{name} = {wrong[0]!r}", "numbers and texts as values of variables", "a sweep without store")
    problems.raise_if_any()


def compute_point(subject: Subject, job: Any) -> Outcome:
    """In a process: build the cell of a point, compute, and make its field files.

    Parameters
    ----------
    subject : Subject
    job : mapping of str to number, or UnitCell

    Returns
    -------
    Outcome
    """
    begun = time.perf_counter()
    stop: list[str] = []
    done, point = guarded(_computed, subject, job, stop)
    columns, files = done or ({}, {})
    result = Point(columns, point.failure, point.note)
    return Outcome(result, time.perf_counter() - begun, files, stop[0] if stop else "")


def _computed(subject: Subject, job: Any, stop: list[str]) -> tuple[dict[str, float], dict[str, bytes]]:
    cell = subject.built(job)
    if not subject.fields:
        return result_columns(subject.compute(cell)), {}
    result = subject.compute_fields(cell)
    columns = result_columns(result)
    try:
        return columns, dict(_field_files(solution_of(result)))
    except OSError as error:
        if is_full(error):
            stop.append(f"no room for field files in {tempfile.gettempdir()}; make room and run again")
        raise


def solution_of(result: Any) -> Any:
    """The solution of a result: itself, or of a curve the one at maximum power; None of mere numbers."""
    best = getattr(result, "maximum_power", None)
    solution = result if best is None else best.solution
    return solution if hasattr(solution, "nodal_fields") else None


def _field_files(solution: Any) -> Iterator[tuple[str, bytes]]:
    """Ends of names and contents of the field files of a solution."""
    from ..files.fields import write_fields

    if solution is not None:
        with tempfile.TemporaryDirectory() as folder:
            write_fields(solution, Path(folder) / "fields.vtu")
            for file in sorted(Path(folder).iterdir()):
                yield file.name.removeprefix("fields"), file.read_bytes()
