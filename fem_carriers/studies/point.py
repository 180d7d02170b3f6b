"""One point of a sweep: compute, and keep what went wrong as text."""

from __future__ import annotations

import inspect
import warnings
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from ..errors import Complaints, ModelWarning
from .columns import result_columns

if TYPE_CHECKING:
    from ..cell.unit_cell import UnitCell


SPARED: Mapping[str, Any] = {"progress": False, "voltages_V": ()}
"""What a row of a table does without: lines about the meshes, and points of a curve beside the key ones."""


@dataclass(frozen=True)
class Point:
    """What became of a point.

    Parameters
    ----------
    results : mapping of str to float
    failure : str
        Why there are no results; empty if there are.
    note : str
        Warnings on the way.
    """

    results: Mapping[str, float] = field(default_factory=dict)
    failure: str = ""
    note: str = ""


@dataclass(frozen=True)
class Compute:
    """A computation on a unit cell, with the options of mesh and accuracy it is given.

    Parameters
    ----------
    function : callable
        Takes a UnitCell; or a Problem, if its first argument is called ``problem`` and it meshes no cells itself.
    mesh_options : mapping
        ``first_step_um``, ``growth`` and ``target_error_percent``, where stated.

    Raises
    ------
    InputError
        Not callable, or mesh options for a function that does not take them.
    """

    function: Callable[..., Any]
    mesh_options: Mapping[str, Any]

    def __post_init__(self) -> None:
        problems = Complaints("sweep")
        allowed = "a function of a UnitCell, or of a Problem if its first argument is called problem"
        if problems.unless(callable(self.function), f"compute = {self.function!r}", allowed):
            taken = ["first_step_um", "growth"] if self._on_mesh else _arguments(self.function)
            for name in self.mesh_options:
                problems.unless(name in taken, f"{name} for a compute that does not take it", "an argument of compute")
        problems.raise_if_any()

    @property
    def _on_mesh(self) -> bool:
        taken = _arguments(self.function)
        return taken[:1] == ["problem"] and "first_step_um" not in taken

    def __call__(self, cell: UnitCell) -> Any:
        if not self._on_mesh:
            taken = _arguments(self.function)
            spared = {name: value for name, value in SPARED.items() if name in taken}
            return self.function(cell, **self.mesh_options, **spared)
        from ..transport.build import problem

        return self.function(problem(cell, **self.mesh_options))


def _arguments(function: Callable[..., Any]) -> list[str]:
    try:
        return list(inspect.signature(function).parameters)
    except (TypeError, ValueError):  # some compiled functions do not tell
        return []


def guarded(function: Callable[..., Any], *arguments: Any, **named: Any) -> tuple[Any, Point]:
    """Call a function; its result (None on failure), and a point with the failure and the warnings as text.

    Returns
    -------
    (object, Point)
    """
    result, failure = None, ""
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        try:
            result = function(*arguments, **named)
        except Exception as error:
            failure = reason(error)
    notes = [str(w.message) if issubclass(w.category, ModelWarning) else _foreign(w) for w in caught]
    return result, Point(failure=failure, note="; ".join(dict.fromkeys(notes)))


def _foreign(warning: warnings.WarningMessage) -> str:
    return f"{warning.category.__name__}: {warning.message}"


def reason(error: Exception) -> str:
    """An error as one line."""
    from ..errors import FemCarriersError

    text = " ".join(str(error).split())
    return text if isinstance(error, FemCarriersError) else f"{type(error).__name__}: {text}"


def solved(compute: Callable[[UnitCell], Any], cell: UnitCell) -> Point:
    """Compute one point.

    Parameters
    ----------
    compute : callable
    cell : UnitCell

    Returns
    -------
    Point
    """
    columns, point = guarded(lambda: result_columns(compute(cell)))
    return Point(columns or {}, point.failure, point.note)
