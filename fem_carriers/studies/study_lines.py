"""On which line of a TOML text every key stands; and the syntax errors of a text, as many as can be told apart."""

from __future__ import annotations

import re
import tomllib
from contextlib import suppress
from typing import Any

KeyPath = tuple[str | int, ...]
"""Keys from the top, with the number of the element in lists: ``("front", "patches", 0, "width_um")``."""
MOST_ERRORS = 30


def parsed(text: str) -> tuple[dict[str, Any], list[tuple[int, str]]]:
    """Content of a TOML text without the lines that are no TOML.

    Parameters
    ----------
    text : str

    Returns
    -------
    (dict, list of (line, reason))
    """
    lines = text.split("\n")
    errors: list[tuple[int, str]] = []
    while True:
        try:
            return tomllib.loads("\n".join(lines)), errors
        except tomllib.TOMLDecodeError as error:
            last, reason = _place(error, lines)
            number = _opening(lines, last) if reason.startswith("Unclosed") else last
            errors.append((number, reason))
            again = len(errors) > 1 and errors[-2][0] == number
            if again or len(errors) == MOST_ERRORS or not lines[number - 1].strip():
                return {}, errors  # not the fault of one line alone
            lines[number - 1 : max(number, last - 1)] = [""] * max(1, last - number)


def _place(error: tomllib.TOMLDecodeError, lines: list[str]) -> tuple[int, str]:
    """Line of a syntax error, and the reason."""
    found = re.search(r"^(.*) \((?:at line (\d+), column \d+|at end of document)\)$", str(error), re.DOTALL)
    number = int(found[2]) if found and found[2] else len(lines)
    while number > 1 and not lines[number - 1].strip():
        number -= 1
    return number, found[1] if found else str(error)


def _opening(lines: list[str], last: int) -> int:
    """The line up to `last` that opens a bracket which it does not close."""
    for number in range(last, 0, -1):
        line = lines[number - 1]
        if "=" in line and sum(map(line.count, "[{")) > sum(map(line.count, "]}")):
            return number
    return last


def key_lines(text: str) -> dict[KeyPath, int]:
    """Line (from 1) of every key, table and list element of a sound TOML text."""
    scan = _Scan(text)
    with suppress(IndexError):  # the end of a text that is not sound
        scan.document()
    return scan.lines


class _Scan:
    """Walks over a text from key to key; values are skipped, except for what stands in lists and inline tables."""

    def __init__(self, text: str) -> None:
        self.text, self.at = text + "\n", 0
        self.lines: dict[KeyPath, int] = {(): 1}
        self.last: dict[KeyPath, int] = {}

    def document(self) -> None:
        """All of the text."""
        table: KeyPath = ()
        while True:
            self._blank("\n")
            if self.text[self.at] == "[":
                table = self._header()
            else:
                self._entry(table)

    def _header(self) -> KeyPath:
        many = self.text.startswith("[[", self.at)
        self.at += 2 if many else 1
        keys = self._keys()
        self.at += 2 if many else 1
        path = (*self._resolved(tuple(keys[:-1])), keys[-1])
        if many:
            self.last[path] = self.last.get(path, -1) + 1
            self.lines.setdefault(path, self._line())
            path = (*path, self.last[path])
        else:
            path = self._resolved(tuple(keys))
        self.lines.setdefault(path, self._line())
        return path

    def _resolved(self, keys: tuple[str, ...]) -> KeyPath:
        """A path with the number of the present element wherever it names a list of tables."""
        path: KeyPath = ()
        for key in keys:
            path = (*path, key)
            self.lines.setdefault(path, self._line())
            path = (*path, self.last[path]) if path in self.last else path
        return path

    def _entry(self, table: KeyPath) -> None:
        path = table
        for key in self._keys():
            path = (*path, key)
            self.lines.setdefault(path, self._line())
        self.at += 1  # the equals sign
        self._value(path)

    def _value(self, path: KeyPath) -> None:
        self._blank()
        self.lines.setdefault(path, self._line())
        first = self.text[self.at]
        if first in "\"'":
            self._quoted()
        elif first == "[":
            self._items("]", lambda number: self._value((*path, number)))
        elif first == "{":
            self._items("}", lambda number: self._entry(path))
        else:
            while self.text[self.at] not in ",]}\n#":
                self.at += 1

    def _items(self, end: str, item: Any) -> None:
        self.at += 1
        number = 0
        while True:
            self._blank("\n,")
            begun = self.at
            if self.text[self.at] == end:
                self.at += 1
                return
            item(number)
            number += 1
            if self.at == begun:
                raise IndexError  # no item: the text is not sound

    def _keys(self) -> list[str]:
        """A key, dotted or not, with what is around it."""
        keys = []
        while True:
            self._blank()
            if self.text[self.at] in "\"'":
                keys.append(self._quoted())
            else:
                found = re.compile(r"[\w-]*").match(self.text, self.at)
                keys.append(found[0] if found else "")
                self.at += len(keys[-1])
            self._blank()
            if self.text[self.at] != ".":
                if not keys[-1] and self.text[self.at] not in "=]":
                    raise IndexError  # no key: the text is not sound
                return keys
            self.at += 1

    def _quoted(self) -> str:
        quote = self.text[self.at]
        mark = quote * 3 if self.text.startswith(quote * 3, self.at) else quote
        begin = self.at = self.at + len(mark)
        while not self.text.startswith(mark, self.at):
            self.at += 2 if quote == '"' and self.text[self.at] == "\\" else 1
            if self.at >= len(self.text):
                raise IndexError
        content = self.text[begin : self.at]
        self.at += len(mark)
        return content

    def _blank(self, also: str = "") -> None:
        """Over spaces and comments."""
        while self.text[self.at] in " \t\r" + also or (self.text[self.at] == "#" and "\n" in also):
            if self.text[self.at] == "#":
                self.at = self.text.index("\n", self.at)
            else:
                self.at += 1

    def _line(self) -> int:
        return self.text.count("\n", 0, self.at) + 1
