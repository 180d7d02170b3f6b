"""The variables of a study file: lists and ranges crossed or paired, samples, inputs that follow."""

from __future__ import annotations

import difflib
from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import Any

from ..cell import checks
from .axes import MOST_POINTS, Axes, Follow, Range, Sampled
from .sampling import DISTRIBUTIONS, samples
from .study_lines import KeyPath
from .study_notes import BROKEN, Notes, dotted, inputs_of, is_table, made, plain_value, shown

SPECIAL = ("paired", "sampled", "follow")
"""Keys under [sweep] that are no paths."""
PathCheck = Callable[[str], tuple[str, str] | None]


RANGE, FOLLOW = frozenset(inputs_of(Range)), frozenset(inputs_of(Follow))
DISTRIBUTION = frozenset({"distribution", *(key for d in DISTRIBUTIONS.values() for key in inputs_of(d))})


def read_axes(notes: Notes, table: Any, path_check: PathCheck) -> Any:
    """The variables from [sweep].

    Parameters
    ----------
    notes : Notes
    table : object
        From the file.
    path_check : callable
        What is allowed in place of a path and the nearest one; None for a path that exists.

    Returns
    -------
    Axes
        `BROKEN` if anything was wrong.
    """
    where: KeyPath = ("sweep",)
    before = len(notes.found)
    if not is_table(notes, where, table, "[sweep] with paths and their values"):
        return BROKEN
    groups = [((path,), [(v,) for v in values]) for path, values in _values_below(notes, where, table, SPECIAL)]
    groups += _paired(notes, table.get("paired", []))
    sampled = table.get("sampled")
    groups += [] if sampled is None else _sampled(notes, sampled)
    follow = _follow(notes, table.get("follow", {}), [name for names, _ in groups for name in names])
    _check_paths(notes, table, [name for names, _ in groups for name in names] + list(follow), path_check)
    found = Axes(tuple(groups), follow)
    if len(notes.found) == before and len(found) > MOST_POINTS:
        notes.add(where, f"{len(found)} points", f"at most {MOST_POINTS}", "fewer values, or samples")
    return BROKEN if len(notes.found) > before else found


def _values_below(notes: Notes, where: KeyPath, table: Mapping[str, Any], leave: Sequence[str] = ()) -> Iterator[Any]:
    """(path, values) of all lists and ranges in a table, dotted keys included."""
    for path, place, value in leaves(where, table, RANGE, leave):
        values = _values(notes, place, path, value)
        yield path, [] if values is BROKEN else values


def leaves(
    where: KeyPath, table: Mapping[str, Any], ends: frozenset[str], leave: Sequence[str] = (), above: str = ""
) -> Iterator[Any]:
    """(path, place, value) of what stands at the ends of dotted keys; a table with one of the keys `ends` is an end."""
    for key, value in table.items():
        if not above and key in leave:
            continue
        path = f"{above}.{key}" if above else key
        if isinstance(value, Mapping) and value and not ends & value.keys():
            yield from leaves((*where, key), value, ends, (), path)
        else:
            yield path, (*where, key), value


def _values(notes: Notes, where: KeyPath, path: str, value: Any) -> Any:
    if isinstance(value, Mapping):
        found = made(notes, where, value, Range)
        return found if found is BROKEN else found.values()
    if not isinstance(value, list) or not value:
        example = (
            f"[{shown(value)}]"
            if checks.is_number(value)
            else "[500, 1000] or { lowest = 500, highest = 1000, points = 5 }"
        )
        notes.add(where, f"{path} = {shown(value)}", "a list of one or more numbers, or a range", example)
        return BROKEN
    wrong = [(i, v) for i, v in enumerate(value) if not checks.is_number(v)]
    for i, v in wrong:
        notes.add((*where, i), f"{path}[{i}] = {shown(v)}", "a number")
    return BROKEN if wrong else [float(v) for v in value]


def _paired(notes: Notes, rows: Any) -> list[Any]:
    """Groups of inputs whose first values belong together, the second ones, …"""
    where: KeyPath = ("sweep", "paired")
    tables = rows if isinstance(rows, list) else [rows]
    groups = []
    for i, table in enumerate(tables):
        place = (*where, i) if isinstance(rows, list) else where
        if not is_table(notes, place, table, "[[sweep.paired]] with two paths or more and lists of equal length"):
            continue
        columns = dict(_values_below(notes, place, table))
        lengths = {path: len(values) for path, values in columns.items()}
        if len(set(lengths.values()) - {0}) > 1:
            given = ", ".join(f"{n} values of {path}" for path, n in lengths.items())
            notes.add(place, given, "as many values of each where they are paired")
        elif columns and all(lengths.values()):
            groups.append((tuple(columns), list(zip(*columns.values(), strict=True))))
    return groups


def _sampled(notes: Notes, table: Any) -> list[Any]:
    """One group of inputs sampled from distributions."""
    where: KeyPath = ("sweep", "sampled")
    how = made(notes, where, table, Sampled, ignore=("inputs",))
    inputs = table.get("inputs") if isinstance(table, Mapping) else None
    if not isinstance(inputs, Mapping) or not inputs:
        example = 'inputs.pitch_um = { distribution = "normal", mean = 30, standard_deviation = 2 }'
        notes.add(where, f"sweep.sampled.inputs = {shown(inputs)}", "paths with their distributions", example)
        return []
    found = {
        path: read_distribution(notes, place, v) for path, place, v in leaves((*where, "inputs"), inputs, DISTRIBUTION)
    }
    if how is BROKEN or BROKEN in found.values():
        return [(tuple(found), [])]
    drawn = samples(list(found.values()), how.points, how.method, how.seed)
    return [(tuple(found), [tuple(row) for row in drawn.tolist()])]


def read_distribution(notes: Notes, where: KeyPath, table: Any) -> Any:
    """A distribution from a table of the file; `BROKEN` if anything was wrong."""
    names = " or ".join(f'"{name}"' for name in DISTRIBUTIONS)
    if not is_table(notes, where, table, '{ distribution = "normal", mean = 30, standard_deviation = 2 }'):
        return BROKEN
    kind = table.get("distribution")
    if not isinstance(kind, str) or kind not in DISTRIBUTIONS:
        near = difflib.get_close_matches(str(kind), list(DISTRIBUTIONS), 1)
        notes.add((*where, "distribution"), f"distribution = {shown(kind)}", names, near[0] if near else "")
        return BROKEN
    return made(notes, where, table, DISTRIBUTIONS[kind], {"values": plain_value}, ignore=("distribution",))


def _follow(notes: Notes, table: Any, swept: Sequence[str]) -> dict[str, Follow]:
    where: KeyPath = ("sweep", "follow")
    rules: dict[str, Follow] = {}
    if not is_table(notes, where, table, 'pitch_y_um = { equals = "pitch_um" }'):
        return rules
    for path, place, value in leaves(where, table, FOLLOW):
        rule = made(notes, place, value, Follow)
        if rule is not BROKEN:
            rules[path] = rule
            if rule.equals not in swept:
                near = [*difflib.get_close_matches(rule.equals, swept, 1, cutoff=0.5), ""][0]
                allowed = f"one of the swept inputs {', '.join(swept)}" if swept else "a swept input; there is none"
                notes.add((*place, "equals"), f"{dotted(place)}: equals = {shown(rule.equals)}", allowed, near)
    return rules


def _check_paths(notes: Notes, table: Mapping[str, Any], names: Sequence[str], path_check: PathCheck) -> None:
    places = _path_places(table)
    for name in dict.fromkeys(names):
        found = places.get(name, [("sweep",)])
        if len(found) > 1:
            notes.add(found[-1], f"{name}, swept {len(found)} times", "every input once")
        complaint = path_check(name)
        if complaint is not None:
            notes.add(found[0], f"path {name!r}", *complaint)


def _path_places(table: Mapping[str, Any]) -> dict[str, list[KeyPath]]:
    """Where every path stands under [sweep]."""
    where: KeyPath = ("sweep",)
    places = list(leaves(where, table, RANGE, SPECIAL))
    paired = table.get("paired", [])
    for i, row in enumerate(paired if isinstance(paired, list) else []):
        places += list(leaves((*where, "paired", i), row, RANGE)) if isinstance(row, Mapping) else []
    for special, below, ends in (("sampled", "inputs", DISTRIBUTION), ("follow", "", FOLLOW)):
        inner = table.get(special, {})
        inner = inner.get(below, {}) if below and isinstance(inner, Mapping) else inner
        place = (*where, special, below) if below else (*where, special)
        places += list(leaves(place, inner, ends)) if isinstance(inner, Mapping) else []
    found: dict[str, list[KeyPath]] = {}
    for path, place, _ in places:
        found.setdefault(path, []).append(place)
    return found
