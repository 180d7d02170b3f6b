"""Progress on the error stream: a bar on a terminal, now and then a line elsewhere."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

LINE_EVERY_S = 30.0
REDRAW_EVERY_S = 0.1
Advance = Callable[[str], None]


@contextmanager
def points_bar(total: int, shown: bool, what: str = "sweep", done: int = 0, lines: bool = False) -> Iterator[Advance]:
    """A function that counts a point, or prints a message.

    Parameters
    ----------
    total : int
    shown : bool
    what : str
        In front of the bar.
    done : int
        Points finished before; they do not count for the rate.
    lines : bool
        Without a terminal, print a line every half minute.

    Yields
    ------
    callable
        Takes "" for one more point, or a message.
    """
    from rich.console import Console
    from rich.progress import Progress

    console = Console(stderr=True)
    on_terminal = shown and console.is_terminal
    with Progress(*_columns(), console=console, transient=True, disable=not on_terminal) as bar:
        counter = Counter(total, done)
        task = bar.add_task(what, total=total, completed=done, pace="")
        drawn = 0.0

        def advance(message: str) -> None:
            nonlocal drawn
            if message:
                if shown:
                    console.print(message, style="yellow", highlight=False)
                return
            counter.add()
            now = time.monotonic()
            if on_terminal and (now - drawn > REDRAW_EVERY_S or counter.done == total):
                drawn = now
                bar.update(task, completed=counter.done, pace=counter.pace())
            elif shown and lines and not on_terminal and counter.line_due():
                print(f"{what}: {counter}", file=sys.stderr, flush=True)

        yield advance


def _columns() -> tuple[Any, ...]:
    from rich.progress import BarColumn, MofNCompleteColumn, TextColumn

    return (
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TextColumn("{task.fields[pace]}"),
    )


class Counter:
    """Points so far, their rate and the time left.

    Parameters
    ----------
    total, done : int
        All points, and those finished before.
    """

    def __init__(self, total: int, done: int = 0) -> None:
        self.total, self.before, self.done = total, done, done
        self.begun = self.said = time.monotonic()

    def add(self) -> None:
        """One more."""
        self.done += 1

    def pace(self) -> str:
        """Rate and time left, as text."""
        rate = (self.done - self.before) / max(time.monotonic() - self.begun, 1e-9)
        return f"{rate_text(rate)}, {duration((self.total - self.done) / rate)} left" if rate > 0 else ""

    def line_due(self) -> bool:
        """Whether it is time to say something."""
        due = time.monotonic() - self.said > LINE_EVERY_S
        if due:
            self.said = time.monotonic()
        return due

    def __str__(self) -> str:
        return f"{self.done} of {self.total} points, {self.pace()}"


def rate_text(per_second: float) -> str:
    """A rate of points per second or per minute."""
    return f"{per_second:.3g} points/s" if per_second >= 1 else f"{60 * per_second:.3g} points/min"


def duration(seconds: float) -> str:
    """A time in seconds, minutes, hours or days."""
    for unit, size, most in (("s", 1, 120), ("min", 60, 7200), ("h", 3600, 172800)):
        if seconds < most:
            return f"{seconds / size:.2g} {unit}" if seconds < 10 * size else f"{seconds / size:.0f} {unit}"
    return f"{seconds / 86400:.0f} days"
