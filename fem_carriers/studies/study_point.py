"""One point of a study again: its field file, or its solution."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from ..errors import Complaints
from .field_files import field_folder
from .plan import solution_of
from .store import read_store
from .study_file import read_study
from .study_run import store_of


def field_file_of(path: Path, point: int | None) -> Path | None:
    """Field file of a point of a study; None if it has none and can be computed again.

    Parameters
    ----------
    path : Path
        A study file, or a store.
    point : int
        Its number, from 0.

    Raises
    ------
    InputError
        No such point, or a store without its study file and without field files.
    """
    problems = Complaints("view")
    problems.unless(path.suffix in (".toml", ".sqlite"), f"file {str(path)!r}", "a .vtu, .toml or .sqlite file")
    problems.unless(point is not None, "a study without --point", "the number of a point, from 0", "--point 0")
    problems.raise_if_any()
    store_path = store_of(path)
    if path.suffix == ".toml" and not store_path.exists():
        return None
    with read_store(store_path) as store:
        rows = store.table(details=True)
    found = rows[rows["point"] == point]
    name = found["fields"].iloc[0] if len(found) else ""
    if not name and path.suffix == ".toml":
        return None
    problems.unless(len(found) > 0, f"point {point}", f"one of the {len(rows)} finished points")
    problems.unless(not len(found) or bool(name), f"point {point} without a field file", "its study file instead")
    problems.raise_if_any()
    return field_folder(store_path) / str(name)


def solution_at(path: Path, point: int | None) -> Any:
    """Compute a point of a study again, for its fields.

    Returns
    -------
    Solution
        Of a curve, the one at maximum power.

    Raises
    ------
    InputError, MeshError, SolverError
    """
    study = read_study(path)
    result = study.subject.compute_fields(study.cell_at(point or 0))
    return solution_of(result)
