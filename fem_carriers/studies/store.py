"""Results point by point in one SQLite file: what was finished stays, whatever happens to the process.

Every point is one transaction (write-ahead logging, synchronous=NORMAL): killing the process loses nothing that was
written, a power failure at most the last moments. Numbers are kept as they are, eight bytes each; nothing in the file
is ever executed.
"""

from __future__ import annotations

import json
import sqlite3
import struct
from collections.abc import Iterator, Mapping, Sequence
from contextlib import ExitStack, contextmanager, suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import Complaint, FemCarriersError, InputError
from ..files.disks import file_system, is_full, is_network_disk, only_one
from .point import Point

if TYPE_CHECKING:
    import pandas as pd

FORMAT = "1"
SCHEMA = """
CREATE TABLE IF NOT EXISTS about (name TEXT PRIMARY KEY, value TEXT);
CREATE TABLE IF NOT EXISTS layouts (number INTEGER PRIMARY KEY, names TEXT UNIQUE);
CREATE TABLE IF NOT EXISTS points (key TEXT PRIMARY KEY, layout INTEGER, numbers BLOB, failure TEXT, note TEXT,
                                   seconds REAL, fields TEXT);
CREATE TABLE IF NOT EXISTS plan (position INTEGER PRIMARY KEY, key TEXT, inputs TEXT);
CREATE TABLE IF NOT EXISTS deaths (key TEXT PRIMARY KEY, times INTEGER);
CREATE TABLE IF NOT EXISTS runs (number INTEGER PRIMARY KEY, record TEXT);
"""


class StoreError(FemCarriersError, OSError):
    """The store cannot be written or read: full disk, another run on it, or not a store. What was finished is kept."""


class Store:
    """Results of a study.

    Parameters
    ----------
    connection : sqlite3.Connection
    path : Path
    """

    def __init__(self, connection: sqlite3.Connection, path: Path) -> None:
        self.connection, self.path = connection, path
        self._layouts: dict[str, int] = dict(self._rows("SELECT names, number FROM layouts"))

    def _rows(self, command: str, values: Sequence[Any] = ()) -> list[tuple[Any, ...]]:
        return self.connection.execute(command, values).fetchall()

    def keep(self, key: str, point: Point, seconds: float = 0.0, fields: str = "") -> None:
        """Write one point; on return it is kept even if the process is killed.

        Parameters
        ----------
        key : str
        point : Point
        seconds : float
            Time it took.
        fields : str
            Name of its field file.

        Raises
        ------
        StoreError
            No room on the disk.
        """
        numbers = struct.pack(f"<{len(point.results)}d", *point.results.values())
        with self._writing():
            layout = self._layout(point.results)
            row = (key, layout, numbers, point.failure, point.note, seconds, fields)
            self.connection.execute("INSERT OR REPLACE INTO points VALUES (?, ?, ?, ?, ?, ?, ?)", row)

    def _layout(self, results: Mapping[str, Any]) -> int:
        """Number of the set of columns that these results have."""
        names = json.dumps([[name, _kind(value)] for name, value in results.items()])
        if names not in self._layouts:
            self.connection.execute("INSERT OR IGNORE INTO layouts (names) VALUES (?)", (names,))
            found = self._rows("SELECT number FROM layouts WHERE names = ?", (names,))
            self._layouts[names] = found[0][0]
        return self._layouts[names]

    def count_death(self, key: str) -> None:
        """Count a process that died on this point."""
        with self._writing():
            command = "INSERT INTO deaths VALUES (?, 1) ON CONFLICT (key) DO UPDATE SET times = times + 1"
            self.connection.execute(command, (key,))

    def deaths(self) -> dict[str, int]:
        """How many processes died on points that are not finished, by key."""
        return dict(self._rows("SELECT key, times FROM deaths WHERE key NOT IN (SELECT key FROM points)"))

    def forget_failures(self, keys: Sequence[str]) -> None:
        """Drop those of the points that failed or were set aside, so that they are computed again."""
        with self._writing():
            for command in ("DELETE FROM points WHERE key = ? AND failure <> ''", "DELETE FROM deaths WHERE key = ?"):
                self.connection.executemany(command, ((key,) for key in keys))

    def finished(self, fields: bool = False) -> set[str]:
        """Keys of all points that have a result or a failure; with `fields` only results that have a field file."""
        wanted = " WHERE failure <> '' OR fields <> ''" if fields else ""
        return {key for (key,) in self._rows(f"SELECT key FROM points{wanted}")}

    def set_plan(self, keys: Sequence[str], names: Sequence[str], inputs: Sequence[Sequence[Any]]) -> None:
        """State which points the table holds, in order, in place of an earlier plan.

        Parameters
        ----------
        keys : sequence of str
        names : sequence of str
            Of the variables.
        inputs : sequence of sequences
            Their values, point by point.
        """
        rows = ((i, key, json.dumps(list(values))) for i, (key, values) in enumerate(zip(keys, inputs, strict=True)))
        with self._writing():
            self.connection.execute("DELETE FROM plan")
            self.connection.executemany("INSERT INTO plan VALUES (?, ?, ?)", rows)
            self._state("variables", json.dumps(list(names)))

    def describe(self, **about: str) -> None:
        """Keep texts about the study, such as its file and title."""
        with self._writing():
            for name, value in about.items():
                self._state(name, value)

    def _state(self, name: str, value: str) -> None:
        self.connection.execute("INSERT OR REPLACE INTO about VALUES (?, ?)", (name, value))

    def about(self) -> dict[str, str]:
        """The texts kept by `describe`."""
        return dict(self._rows("SELECT name, value FROM about"))

    def record_run(self, record: Mapping[str, Any]) -> None:
        """Add a line to the history of runs: when, how long, how many points, versions."""
        with self._writing():
            self.connection.execute("INSERT INTO runs (record) VALUES (?)", (json.dumps(dict(record)),))

    def runs(self) -> list[dict[str, Any]]:
        """The history of runs, oldest first."""
        return [json.loads(record) for (record,) in self._rows("SELECT record FROM runs ORDER BY number")]

    def counts(self) -> tuple[int, int, int]:
        """Points in the plan, finished ones among them, and those without a result."""
        command = "SELECT count(*), count(points.key), total(failure <> '') FROM plan LEFT JOIN points USING (key)"
        total, finished, failed = self._rows(command)[0]
        return total, finished, int(failed)

    def seconds_per_point(self) -> float:
        """Mean time of the points of the plan that have a result; NaN without any."""
        mean = self._rows("SELECT avg(seconds) FROM plan JOIN points USING (key) WHERE failure = ''")[0][0]
        return float("nan") if mean is None else float(mean)

    def table(self, details: bool = False) -> pd.DataFrame:
        """Finished points of the plan in its order: variables, results, `failure`, `note`.

        Parameters
        ----------
        details : bool
            Also the number of the point, its key, the seconds it took and its field file.

        Returns
        -------
        pandas.DataFrame
        """
        from .stored_table import table_of

        command = (
            "SELECT position, inputs, layout, numbers, failure, note, seconds, fields, key "
            "FROM plan JOIN points USING (key) ORDER BY position"
        )
        names = json.loads(self.about().get("variables", "[]"))
        layouts = {number: json.loads(text) for text, number in self._layouts.items()}
        return table_of(self._rows(command), names, layouts, details)

    @contextmanager
    def _writing(self) -> Iterator[None]:
        """One transaction."""
        try:
            with self.connection:
                self.connection.execute("BEGIN IMMEDIATE")
                yield
        except sqlite3.DatabaseError as error:
            raise self._stopped(error) from error

    def _stopped(self, error: Exception) -> StoreError:
        full = "full" in str(error) or "disk I/O" in str(error) or is_full(error)
        reason = f"no room to write {self.path}" if full else f"{self.path} cannot be written"
        advice = "make room and run again: only what is missing will be computed" if full else "see the reason"
        return StoreError(f"{reason} ({error}). Finished points are kept; {advice}.")


@contextmanager
def open_store(path: str | Path) -> Iterator[Store]:
    """The store at a path, made if it is not there, for this process alone to write.

    Raises
    ------
    InputError
        The folder does not exist, or lies on a network disk.
    StoreError
        Another run holds it, or it is no store.
    """
    path = Path(path)
    _check_place(path)
    with ExitStack() as stack:
        alone = stack.enter_context(only_one(path.with_name(path.name + ".lock")))
        if not alone:
            raise StoreError(f"{path} is in use by another run; wait for it, or use another store")
        connection = sqlite3.connect(path, isolation_level=None, timeout=60)
        stack.callback(_close, connection)
        try:
            connection.execute("PRAGMA journal_mode = WAL")
            connection.execute("PRAGMA synchronous = NORMAL")
            connection.executescript(SCHEMA)
            connection.execute("INSERT OR IGNORE INTO about VALUES ('format', ?)", (FORMAT,))
            store = Store(connection, path)
        except sqlite3.Error as error:
            raise _unusable(path, error) from error
        _check_format(store)
        yield store


@contextmanager
def read_store(path: str | Path) -> Iterator[Store]:
    """The store at a path, to be read only; a run may write to it meanwhile.

    Raises
    ------
    InputError
        No such file.
    StoreError
        It is no store.
    """
    path = Path(path)
    if not path.is_file():
        complaint = Complaint(f"no file {str(path)!r}", "a store that a run has made", "`fem-carriers run STUDY` first")
        raise InputError("store", [complaint])
    connection = sqlite3.connect(f"{path.resolve().as_uri()}?mode=ro", uri=True, timeout=60)
    try:
        try:
            store = Store(connection, path)
        except sqlite3.Error as error:
            raise _unusable(path, error) from error
        _check_format(store)
        yield store
    finally:
        connection.close()


def _kind(value: Any) -> str:
    return "bool" if isinstance(value, bool) else "int" if isinstance(value, int) else "float"


def _unusable(path: Path, error: Exception) -> StoreError:
    if "full" in str(error) or "disk I/O" in str(error):
        return StoreError(f"no room to write {path} ({error}). Finished points are kept; make room and run again.")
    return StoreError(f"{path} is not a store of results ({error}); give the file that a run has made, or a new name")


def _check_format(store: Store) -> None:
    found = store.about().get("format")
    if found != FORMAT:
        raise StoreError(f"{store.path} has format {found}, this version reads {FORMAT}; use a new name")


def _check_place(path: Path) -> None:
    complaints = []
    if not path.parent.is_dir():
        complaints.append(Complaint(f"folder {str(path.parent)!r}", "an existing folder", "create it first"))
    elif is_network_disk(path.parent):
        given = f"{str(path)!r} on a network disk ({file_system(path.parent)})"
        advice = "store = a path on this machine; copy the file when the run is over"
        complaints.append(Complaint(given, "a disk of this machine: network disks lose results", advice))
    if complaints:
        raise InputError("store", complaints)


def _close(connection: sqlite3.Connection) -> None:
    with suppress(sqlite3.Error):  # a full disk: what was written stays beside the file until the next run
        connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    connection.close()
