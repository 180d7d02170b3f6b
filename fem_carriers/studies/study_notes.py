"""What is wrong with a study file, each with its line; and tables of the file made into descriptions."""

from __future__ import annotations

import difflib
import inspect
import re
import warnings
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from ..cell.patches import BELOW
from ..errors import Complaint, InputError
from .study_lines import KeyPath

Converter = Callable[["Notes", KeyPath, Any], Any]
NOTHING = "none"
"""Stands in a file for Python's None."""
PLACEHOLDERS: dict[str, Any] = {
    "name": "unnamed", "doping_type": "p", "terminal": "unnamed", "points_um": ((0, 0), (1, 0), (0, 1)),
    "depth_um": (0.0, 1.0), "rate_per_cm3_s": (1.0, 1.0), "resistivity_ohm_cm": 1.0,
}  # fmt: skip
"""What stands in for a missing input, so that the others are checked too; 1 for a number."""


class Broken:
    """Stands for a part that was refused; what needs it is not checked further."""


BROKEN = Broken()


@dataclass
class Notes:
    """Complaints about a file.

    Parameters
    ----------
    lines : mapping of KeyPath to int
    elsewhere : mapping of str to str
        Where a key belongs, for keys that stand in a wrong table.
    """

    lines: Mapping[KeyPath, int]
    elsewhere: dict[str, str] = field(default_factory=dict)
    found: list[tuple[int, Complaint]] = field(default_factory=list)

    def add(self, where: KeyPath, given: str, allowed: str, try_: str = "") -> None:
        """Note a problem at a key (or at the nearest table around it)."""
        self.add_at(self.line(where), given, allowed, try_)

    def add_at(self, line: int, given: str, allowed: str, try_: str = "") -> None:
        """Note a problem on a line."""
        complaint = Complaint(f"line {line}: {given}", allowed, try_)
        if complaint not in [c for _, c in self.found]:
            self.found.append((line, complaint))

    def line(self, where: KeyPath) -> int:
        """Line of a key, or of the nearest table around it."""
        while where not in self.lines and where:
            where = where[:-1]
        return self.lines.get(where, 1)

    def unknown(self, where: KeyPath, value: Any, allowed: Iterable[str]) -> None:
        """Note a key that does not exist, with the nearest one that does."""
        key, known = str(where[-1]), sorted(allowed)
        near = difflib.get_close_matches(key, known, 1, cutoff=0.6)
        other = self.elsewhere.get(key)
        advice = near[0] if near and near[0] != key else f"put it under {other}" if other else ""
        given = f"unknown key {dotted(where)} = {shown(value)}"
        self.add(where, given, f"one of {', '.join(known)}" if known else "nothing here", advice)

    def raise_if_any(self, what: str) -> None:
        """Raise `InputError` with everything noted, by line."""
        if self.found:
            raise InputError(what, [complaint for _, complaint in sorted(self.found, key=lambda f: f[0])])


def shown(value: Any) -> str:
    """A value as it stands in a file, shortened."""
    text = "true" if value is True else "false" if value is False else repr(value)
    return text if len(text) <= 60 else text[:57] + "..."


def dotted(where: KeyPath) -> str:
    """``front.patches[0].width_um``."""
    text = ""
    for key in where:
        text += f"[{key}]" if isinstance(key, int) else f".{key}" if text else key
    return text


def inputs_of(maker: Callable[..., Any], leave_out: Iterable[str] = ()) -> dict[str, inspect.Parameter]:
    """Inputs of a description or function by name."""
    parameters = inspect.signature(maker).parameters
    return {name: p for name, p in parameters.items() if name not in leave_out and p.kind is not p.VAR_KEYWORD}


def is_table(notes: Notes, where: KeyPath, value: Any, example: str) -> bool:
    """Note anything that is not a table."""
    if isinstance(value, Mapping):
        return True
    notes.add(where, f"{dotted(where)} = {shown(value)}", "a table", example)
    return False


def made(
    notes: Notes, where: KeyPath, table: Any, maker: Callable[..., Any], convert: Mapping[str, Converter] | None = None,
    *, ignore: Iterable[str] = (), leave_out: Iterable[str] = (), given: Mapping[str, Any] | None = None,
) -> Any:  # fmt: skip
    """A description from a table of the file; its keys are the maker's own inputs.

    Parameters
    ----------
    notes : Notes
    where : KeyPath
        Of the table.
    table : object
        From the file.
    maker : callable
        A description's class or a function that returns one.
    convert : mapping of str to callable
        For inputs that are descriptions themselves.
    ignore : iterable of str
        Keys of the table that are read elsewhere.
    leave_out : iterable of str
        Inputs that a file cannot state.
    given : mapping
        Inputs stated elsewhere.

    Returns
    -------
    object
        `BROKEN` if anything was wrong.
    """
    if not is_table(notes, where, table, f"[{dotted(where)}] with keys below it"):
        return BROKEN
    known = inputs_of(maker, {*leave_out, *(given or ())})
    before = len(notes.found)
    inputs: dict[str, Any] = dict(given or {})
    for key, value in table.items():
        if key in ignore:
            continue
        if key not in known:
            notes.unknown((*where, key), value, {*known, *ignore})
            continue
        reader = (convert or {}).get(key, plain_value)
        result = reader(notes, (*where, key), _none(value, known[key]))
        if result is not BROKEN:
            inputs[key] = result
    for key, parameter in known.items():
        if parameter.default is parameter.empty and key not in inputs:
            if key not in table:
                notes.add(where, f"{key} missing in {dotted(where) or 'the file'}", f"{key} is needed")
            inputs[key] = PLACEHOLDERS.get(key, 1.0)
    built = attempt(notes, where, table, lambda: maker(**inputs))
    return built if len(notes.found) == before else BROKEN


def attempt(notes: Notes, where: KeyPath, table: Mapping[str, Any], build: Callable[[], Any]) -> Any:
    """Build a description; note what it refuses at the keys it names."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # warnings belong to the points
        try:
            return build()
        except InputError as error:
            for c in error.complaints:
                place = _key_named(c.given, table)
                if place is None and any(c.given.startswith(f"{key} not given") for key in PLACEHOLDERS):
                    continue
                at = (*where, *place) if place else where
                notes.add(at, f"{error.what}: {c.given}", c.allowed, c.try_)
        except (TypeError, ValueError, OSError) as error:
            notes.add(
                where, f"{dotted(where)}: {' '.join(str(error).split())}", "values of the kind named in the manual"
            )
    return BROKEN


def _key_named(given: str, table: Mapping[str, Any]) -> KeyPath | None:
    """The key of a table that a complaint speaks of: the one it names first."""
    places = [(found.start(), key) for key in table if (found := re.search(rf"\b{re.escape(key)}\b", given))]
    return (min(places)[1],) if places else None


def _none(value: Any, parameter: inspect.Parameter) -> Any:
    optional = parameter.default is None or parameter.default is BELOW or "None" in str(parameter.annotation)
    return None if value == NOTHING and optional else value


def plain_value(notes: Notes, where: KeyPath, value: Any) -> Any:
    """A number, text, or list as Python takes it: lists become tuples."""
    if isinstance(value, list):
        return tuple(plain_value(notes, where, v) for v in value)
    if isinstance(value, Mapping):
        notes.add(where, f"{dotted(where)} = {shown(value)}", "a number, a text or a list")
        return BROKEN
    return value
