"""Variables of a layout: ranges, whole numbers, and values that stand apart."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..cell import checks
from ..errors import Complaints
from .interpolation import lobatto

FINE = 41
"""Places in a continuous range at which the interpolated results are compared."""


@dataclass(frozen=True, eq=False)
class LayoutVariable:
    """One variable.

    Parameters
    ----------
    name : str
    nodes : (n,) float array
        Values that are solved.
    places : (m,) float array
        Values among which the best is looked for.
    whole : bool
        Whole numbers only.
    apart : bool
        Solved for every value, never interpolated.
    """

    name: str
    nodes: NDArray[np.float64]
    places: NDArray[np.float64]
    whole: bool
    apart: bool

    def typed(self, value: float) -> Any:
        """A value as it is handed to a function."""
        return round(value) if self.whole else float(value)


def layout_variables(variables: Mapping[str, Any], nodes: int) -> list[LayoutVariable]:
    """Variables as stated to `best_layout`.

    Parameters
    ----------
    variables : mapping of str to (low, high), range or list
    nodes : int
        Values of each range that are solved.

    Raises
    ------
    InputError
        What is none of these; limits that do not rise or are not above 0.
    """
    problems = Complaints("best_layout")
    good = isinstance(variables, Mapping) and len(variables) > 0
    problems.unless(good, f"variables = {variables!r}", 'a mapping such as {"width_um": (20, 50)}')
    problems.unless(
        isinstance(nodes, int) and nodes >= 3, f"nodes = {nodes!r}", "a whole number of at least 3"
    )  # fmt: skip
    problems.raise_if_any()
    found = [_variable(problems, name, given, nodes) for name, given in variables.items()]
    problems.raise_if_any()
    return [v for v in found if v is not None]


def _variable(problems: Complaints, name: str, given: Any, nodes: int) -> LayoutVariable | None:
    allowed = "(low, high) above 0, a range of whole numbers, or a list of numbers"
    if isinstance(given, range):
        numbers = np.array(given, dtype=float)
        if not problems.unless(numbers.size > 0 and bool((numbers > 0).all()), f"{name} = {given!r}", allowed):
            return None
        return LayoutVariable(name, _some(np.sort(numbers), nodes), np.sort(numbers), True, False)
    if isinstance(given, tuple):
        two = len(given) == 2 and all(checks.is_number(v) for v in given) and 0 < given[0] < given[1] < np.inf
        if not problems.unless(two, f"{name} = {given!r}", allowed):
            return None
        low, high = map(float, given)
        return LayoutVariable(name, lobatto(low, high, nodes), np.geomspace(low, high, FINE), False, False)
    listed = isinstance(given, Sequence | np.ndarray) and not isinstance(given, str) and len(given) > 0
    if not problems.unless(listed and all(checks.is_number(v) for v in given), f"{name} = {given!r}", allowed):
        return None
    values = np.array(sorted(set(given)), dtype=float)
    return LayoutVariable(name, values, values, all(float(v).is_integer() for v in given), True)


def _some(numbers: NDArray[np.float64], nodes: int) -> NDArray[np.float64]:
    """As many of the whole numbers as nodes, near those of the range."""
    if numbers.size <= nodes:
        return numbers
    wanted = lobatto(float(numbers[0]), float(numbers[-1]), nodes)
    nearest = np.unique(np.abs(numbers[:, None] - wanted).argmin(axis=0))
    return np.asarray(numbers[nearest])
