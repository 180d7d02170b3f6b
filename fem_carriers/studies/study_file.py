"""A study as one file: the cell, its light, what to compute, what to vary, how accurately, and what to write."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

from ..cell import checks
from ..cell.unit_cell import UnitCell
from ..errors import Complaint, Complaints, InputError
from ..files.table_formats import SUFFIXES
from .axes import Axes
from .plan import Plan, Subject, plan_of, subject_digest
from .point import Compute
from .quantities import QUANTITIES, accuracy_options, quantity
from .search import Goal
from .study_axes import read_axes
from .study_cell import cell_sections, path_complaints, paths_stated, read_cell
from .study_lines import key_lines, parsed
from .study_notes import BROKEN, Notes, inputs_of, is_table, made, shown
from .study_search import TolerancePlan, read_optimum, read_tolerance, search_points

TEXTS = ("title", "question", "compute")
WAYS = ("sweep", "optimum", "tolerance")
"""Tables of which a study has one: which points are computed."""
TABLES = (
    "cell", "base", "front", "rear", "sides", "inner", "light", "sweep", "optimum", "tolerance", "accuracy", "outputs",
)  # fmt: skip
"""Tables of a study file, in their usual order."""


@dataclass(frozen=True)
class Outputs:
    """What a run writes.

    Parameters
    ----------
    store : str, optional
        File of the results, beside the study file; default is its name with .sqlite.
    fields : bool
        Field files (VTU) of every point, in a folder beside the store.
    tables : sequence of str
        Tables written when the run is over: names ending in .csv, .json, .parquet or .nc.
    """

    store: str | None = None
    fields: bool = False
    tables: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        problems = Complaints("outputs")
        good = self.store is None or (isinstance(self.store, str) and self.store.strip() != "")
        problems.unless(good, f"store = {self.store!r}", "a file name", '"results.sqlite"')
        problems.unless(isinstance(self.fields, bool), f"fields = {self.fields!r}", "true or false")
        names = (self.tables,) if isinstance(self.tables, str) else self.tables
        sound = isinstance(names, tuple | list) and all(isinstance(n, str) for n in names)
        if problems.unless(sound, f"tables = {self.tables!r}", 'a list of file names, e.g. ["pitch.csv"]'):
            object.__setattr__(self, "tables", tuple(names))
            for name in names:
                problems.unless(Path(name).suffix in SUFFIXES, f"tables: {name!r}", f"names in {', '.join(SUFFIXES)}")
        problems.raise_if_any()


@dataclass(frozen=True, eq=False)
class Study:
    """What a study file says.

    Parameters
    ----------
    path : Path
    text : str
        Of the file.
    cell : UnitCell
    compute : str
        A name of `QUANTITIES`.
    axes : Axes
    accuracy : mapping
        Options of mesh and error.
    outputs : Outputs
    title, question : str
    goal : Goal, optional
        Of a search for the best.
    scatter : TolerancePlan, optional
        Of inputs that scatter.
    """

    path: Path
    text: str
    cell: UnitCell
    compute: str
    axes: Axes = field(default_factory=Axes)
    accuracy: Mapping[str, Any] = field(default_factory=dict)
    outputs: Outputs = field(default_factory=Outputs)
    title: str = ""
    question: str = ""
    goal: Goal | None = None
    scatter: TolerancePlan | None = None

    @property
    def most_points(self) -> int:
        """Of a sweep all points, else the most that may be computed."""
        if self.goal is not None:
            return self.goal.most_points
        return len(self.plan)

    @property
    def store_path(self) -> Path:
        """File of the results."""
        name = self.outputs.store or f"{self.path.stem}.sqlite"
        return self.path.parent / name

    @property
    def table_paths(self) -> list[Path]:
        """Tables to write."""
        return [self.path.parent / name for name in self.outputs.tables]

    @cached_property
    def subject(self) -> Subject:
        """What is computed at every point."""
        return Subject(Compute(quantity(self.compute), self.accuracy), self.cell, self.outputs.fields)

    @cached_property
    def plan(self) -> Plan:
        """All points; of a search for the best the first ones."""
        if self.goal is not None or self.scatter is not None:
            return self.plan_with(*search_points(self.goal, self.scatter))
        return self.plan_with(self.axes.names, self.axes.points())

    def plan_with(self, names: tuple[str, ...], values: list[tuple[float, ...]]) -> Plan:
        """These values of these variables as points of the study."""
        return plan_of(names, values, subject_digest(self.subject, names))

    def cell_at(self, point: int) -> UnitCell:
        """The cell of a point.

        Raises
        ------
        InputError
            No such point, or a cell that is not allowed.
        """
        problems = Complaints("point")
        problems.unless(0 <= point < len(self.plan), f"point {point}", f"a number from 0 to {len(self.plan) - 1}")
        problems.raise_if_any()
        return self.subject.built(self.plan.job(point))


def read_study(path: str | Path) -> Study:
    """Read a study file (TOML).

    Keys are the names of the Python inputs. Nothing in the file is evaluated.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    Study

    Raises
    ------
    InputError
        Every mistake at once, each with its line, what was given, what is allowed, and the nearest known key.
    """
    path = Path(path)
    text = _text_of(path)
    data, errors = parsed(text)
    notes = Notes(key_lines(text), _elsewhere())
    for line, why in errors:
        notes.add_at(
            line, f"{shown(text.splitlines()[line - 1].strip())}: {why}", "TOML", 'texts in quotes: key = "text"'
        )
    study = _read(notes, data, path, text) if data or not errors else None
    if errors:  # a line that was not understood is not a missing one
        notes.found = [f for f in notes.found if "missing" not in f[1].given and "no light" not in f[1].given]
    notes.raise_if_any(f"study {path.name}")
    assert study is not None
    return study


def _text_of(path: Path) -> str:
    problems = Complaints("study")
    if path.suffix != ".toml":
        problems.add(f"file {str(path)!r}", "a study file, with a name ending in .toml")
    elif not path.is_file():
        problems.add(f"no file {str(path)!r}", "an existing study file")
    problems.raise_if_any()
    try:
        return path.read_bytes().decode("utf-8-sig").replace("\r\n", "\n")
    except (UnicodeDecodeError, OSError) as error:
        raise InputError(f"study {path.name}", [Complaint(f"unreadable ({error})", "a text in UTF-8")]) from error


def _elsewhere() -> dict[str, str]:
    """Tables by the keys that belong into them."""
    sections = cell_sections() | {"[outputs]": set(inputs_of(Outputs))}
    sections |= {"[accuracy]": {key for name in QUANTITIES for key in accuracy_options(name)}}
    return {key: table for table, keys in reversed(sections.items()) for key in keys}


def _read(notes: Notes, data: Mapping[str, Any], path: Path, text: str) -> Study | None:
    for key, value in data.items():
        if key not in (*TEXTS, *TABLES):
            notes.unknown((key,), value, (*TEXTS, *TABLES))
    for key in ("cell", "base"):
        if key not in data:
            notes.add((), f"table [{key}] missing", f"[{key}] with {'pitch_um' if key == 'cell' else 'doping_type, …'}")
    compute = _compute(notes, data)
    cell = read_cell(notes, data, path.parent)
    stated = paths_stated(data)
    check = (lambda p: path_complaints(cell, p)) if cell is not BROKEN else (lambda p: _nearest(p, stated))
    axes = read_axes(notes, data["sweep"], check) if "sweep" in data else Axes()
    goal = read_optimum(notes, data["optimum"], check) if "optimum" in data else None
    scatter = read_tolerance(notes, data["tolerance"], check) if "tolerance" in data else None
    ways = [f"[{name}]" for name in WAYS if name in data]
    if len(ways) > 1:
        notes.add((ways[-1][1:-1],), f"{' and '.join(ways)} in one study", "one of them", "a study file for each")
    accuracy = _accuracy(notes, data.get("accuracy", {}), compute)
    outputs = made(notes, ("outputs",), data.get("outputs", {}), Outputs)
    texts = {key: data.get(key, "") for key in ("title", "question")}
    for key, value in texts.items():
        if not isinstance(value, str):
            notes.add((key,), f"{key} = {shown(value)}", "a text")
    if notes.found:
        return None
    return Study(path, text, cell, compute, axes, accuracy, outputs, **texts, goal=goal, scatter=scatter)


def _nearest(path: str, known: set[str]) -> tuple[str, str] | None:
    from difflib import get_close_matches

    if path in known:
        return None
    return "the path of an input of this cell", " or ".join(get_close_matches(path, sorted(known), 3, cutoff=0.5))


def _compute(notes: Notes, data: Mapping[str, Any]) -> str:
    from difflib import get_close_matches

    name = data.get("compute")
    allowed = " or ".join(f'"{q}"' for q in QUANTITIES)
    if isinstance(name, str) and name in QUANTITIES:
        return name
    if "compute" not in data:
        notes.add((), "compute missing at the top of the file", allowed)
    else:
        near = get_close_matches(str(name), list(QUANTITIES), 1)
        notes.add(("compute",), f"compute = {shown(name)}", allowed, near[0] if near else "")
    return ""


def _accuracy(notes: Notes, table: Any, compute: str) -> dict[str, Any]:
    where = ("accuracy",)
    if not is_table(notes, where, table, "[accuracy] with first_step_um = 2"):
        return {}
    if compute:
        known = set(accuracy_options(compute))
    else:
        known = {key for name in QUANTITIES for key in accuracy_options(name)}
    for key, value in table.items():
        problems = Complaints("accuracy")
        if key not in known:
            notes.unknown((*where, key), value, known)
        elif key == "level":
            checks.finite(problems, key, value)
        elif key == "target_error":
            sound = isinstance(value, Mapping) and all(checks.is_number(v) and v > 0 for v in value.values())
            problems.unless(sound, f"{key} = {shown(value)}", "a table of results and numbers", "{ voc_V = 1e-4 }")
        elif key == "order":
            checks.one_of(problems, key, value, (1, 2))
        elif key == "growth":
            good = checks.is_number(value) and 1 < value <= 10
            problems.unless(good, f"{key} = {value!r}", "a number above 1, up to 10")
        else:
            checks.positive(problems, key, value)
        for c in problems.items:
            notes.add((*where, key), c.given, c.allowed, c.try_)
    return dict(table)
