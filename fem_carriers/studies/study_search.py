"""The tables [optimum] and [tolerance] of a study file."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from ..cell import checks
from ..errors import Complaints
from .limits import Limit
from .optimum import goal_of
from .sampling import Distribution
from .scales import Scales
from .search import Goal, first_points
from .spread import Scatter, planned_points
from .study_axes import DISTRIBUTION, PathCheck, leaves, read_distribution
from .study_lines import KeyPath
from .study_notes import BROKEN, Notes, dotted, is_table, made, shown
from .tolerance import PERCENTILES, check_percentiles, scatter_of

SPAN = frozenset({"lowest", "highest"})
RANGE_EXAMPLE = "pitch_um = { lowest = 500, highest = 3000 }"
SCATTER_EXAMPLE = 'pitch_um = { distribution = "normal", mean = 1200, standard_deviation = 5 }'


@dataclass(frozen=True)
class Span:
    """From where to where an input may go."""

    lowest: float
    highest: float

    def __post_init__(self) -> None:
        problems = Complaints("range")
        good = [checks.finite(problems, name, getattr(self, name)) for name in ("lowest", "highest")]
        given = f"lowest = {self.lowest!r}, highest = {self.highest!r}"
        problems.unless(not all(good) or self.lowest < self.highest, given, "lowest below highest")
        problems.raise_if_any()


@dataclass(frozen=True)
class TolerancePlan:
    """What scatters, and which percentiles are asked for."""

    scatter: Scatter
    percentiles: tuple[float, ...] = PERCENTILES


def read_optimum(notes: Notes, table: Any, path_check: PathCheck) -> Any:
    """What is searched for, from [optimum].

    Parameters
    ----------
    notes : Notes
    table : object
        From the file.
    path_check : callable
        What is allowed in place of a path and the nearest one; None for a path that exists.

    Returns
    -------
    Goal
        `BROKEN` if anything was wrong.
    """
    where: KeyPath = ("optimum",)
    if not is_table(notes, where, table, f"[optimum.variables] with {RANGE_EXAMPLE}"):
        return BROKEN
    before = len(notes.found)
    ranges = _spans(notes, (*where, "variables"), table.get("variables"), path_check, RANGE_EXAMPLE)
    limits = _limits(notes, (*where, "constraints"), table.get("constraints", []), ranges)

    def goal(
        maximize: str | None = None, minimize: str | None = None, within: float = 0.05, most_points: int | None = None
    ) -> Goal:
        scales = _scales(ranges or {"any": (0.0, 1.0)})
        found = goal_of(scales, maximize, minimize, limits if ranges else (), within, most_points)
        first_points(found.region)  # constraints that leave no room
        return found

    found = _made(notes, where, table, goal, ("variables", "constraints"))
    return BROKEN if len(notes.found) > before else found


def read_tolerance(notes: Notes, table: Any, path_check: PathCheck) -> Any:
    """What scatters, from [tolerance]; as `read_optimum`.

    Returns
    -------
    TolerancePlan
        `BROKEN` if anything was wrong.
    """
    where: KeyPath = ("tolerance",)
    if not is_table(notes, where, table, f"[tolerance.inputs] with {SCATTER_EXAMPLE}"):
        return BROKEN
    before = len(notes.found)
    inputs: dict[str, Distribution] = {}
    place: KeyPath = (*where, "inputs")
    for path, at, value in _paths(notes, place, table.get("inputs"), DISTRIBUTION, path_check, SCATTER_EXAMPLE):
        found = read_distribution(notes, at, value)
        inputs |= {} if found is BROKEN else {path: found}
    designs: dict[str, tuple[float, float]] | None = None
    if "designs" in table:
        designs = _spans(notes, (*where, "designs"), table["designs"], path_check, RANGE_EXAMPLE)

    def plan(
        quantity: str = "efficiency_percent", percentiles: Any = PERCENTILES, most_points: int | None = None,
        seed: int = 0,
    ) -> TolerancePlan:  # fmt: skip
        check_percentiles(percentiles)
        ready = inputs or {"any": _Any()}
        return TolerancePlan(scatter_of(ready, quantity, designs or None, most_points, seed), tuple(percentiles))

    result = _made(notes, where, table, plan, ("inputs", "designs"))
    return BROKEN if len(notes.found) > before else result


class _Any:
    """Stands for a distribution that was refused."""

    def quantile(self, share: Any) -> Any:
        """The share itself."""
        return share


def _made(notes: Notes, where: KeyPath, table: Any, maker: Any, ignore: tuple[str, ...]) -> Any:
    """As `made`; a search that cannot begin is noted as well."""
    from ..errors import SolverError

    try:
        return made(notes, where, table, maker, ignore=ignore)
    except SolverError as error:
        notes.add((*where, "constraints"), str(error.args[1]), "constraints that leave room")
        return BROKEN


def _paths(
    notes: Notes, where: KeyPath, table: Any, ends: frozenset[str], path_check: PathCheck, example: str
) -> Iterator[tuple[str, KeyPath, Any]]:
    """(path, place, value) of all inputs named in a table; paths that do not exist are noted."""
    if not isinstance(table, Mapping) or not table:
        notes.add(where, f"{dotted(where)} = {shown(table)}", "a table of paths", example)
        return
    for path, place, value in leaves(where, table, ends):
        complaint = path_check(path)
        if complaint is not None:
            notes.add(place, f"path {path!r}", *complaint)
        yield path, place, value


def _spans(
    notes: Notes, where: KeyPath, table: Any, path_check: PathCheck, example: str
) -> dict[str, tuple[float, float]]:
    found = {}
    for path, place, value in _paths(notes, where, table, SPAN, path_check, example):
        if not isinstance(value, Mapping):
            notes.add(place, f"{path} = {shown(value)}", "a range", "{ lowest = 500, highest = 3000 }")
            continue
        span = made(notes, place, value, Span)
        if span is not BROKEN:
            found[path] = (span.lowest, span.highest)
    return found


def _limits(notes: Notes, where: KeyPath, rows: Any, ranges: Mapping[str, Any]) -> tuple[Limit, ...]:
    example = 'name = "gap", at_least = 300, terms.pitch_um = 1'
    if not isinstance(rows, list):
        notes.add(where, f"{dotted(where)} = {shown(rows)}", f"tables [[{dotted(where)}]]", example)
        return ()
    found = []
    for i, row in enumerate(rows):
        place = (*where, i)
        if not is_table(notes, place, row, example):
            continue
        limit = made(notes, place, row, Limit, {"terms": _terms})
        terms = row.get("terms")
        names = [path for path, *_ in leaves(place, terms, frozenset())] if isinstance(terms, Mapping) else []
        unknown = [name for name in names if name not in ranges]
        for name in unknown:
            known = ", ".join(ranges) or "none yet"
            notes.add((*place, "terms"), f"{dotted(place)}: terms of {name!r}", f"variables of the search: {known}")
        found += [] if unknown or limit is BROKEN else [limit]
    return tuple(found)


def _terms(notes: Notes, where: KeyPath, value: Any) -> Any:
    if not is_table(notes, where, value, "{ pitch_um = 1, front.finger.width_um = -1 }"):
        return BROKEN
    return {path: factor for path, _, factor in leaves(where, value, frozenset())}


def _scales(ranges: Mapping[str, tuple[float, float]]) -> Scales:
    return Scales(tuple(ranges), tuple(r[0] for r in ranges.values()), tuple(r[1] for r in ranges.values()))


def search_points(goal: Goal | None, plan: TolerancePlan | None) -> tuple[tuple[str, ...], list[tuple[float, ...]]]:
    """Variables, and the points that are known before the first result: of a search only its first ones."""
    if goal is not None:
        scales = goal.region.scales
        return scales.names, [tuple(row) for row in scales.values(first_points(goal.region)).tolist()]
    assert plan is not None
    return plan.scatter.names, planned_points(plan.scatter)
