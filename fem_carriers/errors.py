"""What can go wrong, in words that help: what was given, what is allowed, what to try."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any


@dataclass(frozen=True)
class Complaint:
    """One problem of one input.

    Parameters
    ----------
    given : str
        The input and its value, e.g. ``"lifetime_us = -5"``.
    allowed : str
        What would be accepted, e.g. ``"a positive number"``.
    try_ : str
        A suggestion; may be empty.
    """

    given: str
    allowed: str
    try_: str = ""

    def __str__(self) -> str:
        text = f"{self.given}: allowed is {self.allowed}."
        return f"{text} Try: {self.try_}." if self.try_ else text


class FemCarriersError(Exception):
    """Base of all errors of this package."""


class InputError(FemCarriersError, ValueError):
    """Refused input; ``complaints`` lists every problem found, not just the first."""

    def __init__(self, what: str, complaints: list[Complaint]) -> None:
        self.what, self.complaints = what, tuple(complaints)
        super().__init__(what, tuple(complaints))

    def __str__(self) -> str:
        if len(self.complaints) == 1:
            return f"{self.what}: {self.complaints[0]}"
        lines = [f"{self.what}: {len(self.complaints)} problems"]
        return "\n".join(lines + [f"  {i}. {c}" for i, c in enumerate(self.complaints, 1)])


class MeshError(FemCarriersError, ValueError):
    """A mesh or mesh file that cannot be used; the text names the defect, the place and a remedy."""


class SolverError(FemCarriersError, RuntimeError):
    """No trustworthy solution; ``outcome`` is the short name of the reason."""

    def __init__(self, outcome: str, text: str) -> None:
        self.outcome = outcome
        super().__init__(outcome, text)

    def __str__(self) -> str:
        return f"{self.args[1]} [{self.outcome}]"


class BalanceError(SolverError):
    """The carrier ledger does not close; the solution is refused."""


class SweepInterrupted(KeyboardInterrupt):
    """A sweep stopped by Ctrl-C; ``table`` holds the points finished by then.

    It is a KeyboardInterrupt, so that ``except Exception`` in a script does not swallow the interruption.
    """

    def __init__(self, table: Any, points: int) -> None:
        self.table, self.points = table, points
        super().__init__(table, points)

    def __str__(self) -> str:
        return f"sweep interrupted: {len(self.table)} of {self.points} points are finished; they are in .table"


class ModelWarning(UserWarning):
    """The model is used where its assumptions are strained; the text says which and by how much."""


@dataclass
class Complaints:
    """Collects every problem of one input, then raises them together."""

    what: str
    items: list[Complaint] = field(default_factory=list)

    def add(self, given: str, allowed: str, try_: str = "") -> None:
        """Note one problem: what was given, what is allowed, what to try."""
        self.items.append(Complaint(given, allowed, try_))

    def unless(self, condition: bool, given: str, allowed: str, try_: str = "") -> bool:
        """Add a complaint unless `condition` holds; return `condition`."""
        if not condition:
            self.add(given, allowed, try_)
        return condition

    def raise_if_any(self) -> None:
        """Raise `InputError` with all problems found so far."""
        if self.items:
            raise InputError(self.what, self.items)
