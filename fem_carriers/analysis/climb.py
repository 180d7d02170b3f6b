"""From a solution to estimates of its errors and to the next mesh, where meshes are refined cell by cell."""

from __future__ import annotations

import dataclasses
import math
from abc import ABC, abstractmethod
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any, Generic, TypeVar

from ..constants import ELEMENTARY_CHARGE_C
from ..meshing.adaptive import SIMPLICES, refined_by
from ..transport.indicator import cell_errors, combined
from ..units import MA
from .ladder import finer, limit_of

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from ..transport.problem import Problem
    from ..transport.state import SolvedState
    from .solution import Solution
    from .tracer import KeyPoints, Point

    Cells = NDArray[np.float64]

Result = TypeVar("Result")

ADAPTIVE_GROWTH = {2: 1.4, 3: 1.5}
"""Factor of the number of cells from one mesh to the next; the error then falls to a third or a half."""


def is_adaptive(problem: Problem) -> bool:
    """Whether cells may be refined one by one: imported triangles and tets without periodic sides."""
    imported = problem.cell is None or problem.steps is None
    return imported and problem.mesh.kind in SIMPLICES and not problem.periodic_axes


class Climb(ABC, Generic[Result]):
    """Estimates of errors and the next mesh from one set of adjoints.

    Parameters
    ----------
    largest_unknowns : int, optional
    """

    def __init__(self, largest_unknowns: int | None) -> None:
        self.largest_unknowns = largest_unknowns
        self._last: tuple[Any, list[dict[str, Cells]]] | None = None

    @abstractmethod
    def states(self, result: Result) -> Sequence[SolvedState]:
        """The states whose terminal currents matter."""

    @abstractmethod
    def numbers(self, result: Result, errors: Sequence[Mapping[str, float]]) -> dict[str, float]:
        """Errors of the result's numbers, from those of the terminal currents of every state in mA/cm²."""

    def _errors(self, result: Result) -> list[dict[str, Cells]]:
        if self._last is None or self._last[0] is not result:
            self._last = result, [cell_errors(state) for state in self.states(result)]
        return self._last[1]

    def estimates(self, result: Result, problem: Problem) -> dict[str, float]:
        """Estimated errors by the name of the number; empty for meshes that are not adaptive."""
        if not is_adaptive(problem):
            return {}
        scale = ELEMENTARY_CHARGE_C / problem.cell_area_cm2 / MA
        sums = [{t: scale * float(cells.sum()) for t, cells in e.items() if t} for e in self._errors(result)]
        return self.numbers(result, sums)

    def finer(self, result: Result, problem: Problem, excess: float = math.inf) -> Problem | None:
        """The next mesh, from how many times the bar is too wide; None if it would have too many unknowns."""
        if not is_adaptive(problem):
            return finer(problem, self.largest_unknowns, excess)
        return adapted(problem, combined(self._errors(result)), self.largest_unknowns)


class SolutionClimb(Climb["Solution"]):
    """For a solution with one number per terminal.

    Parameters
    ----------
    largest_unknowns : int, optional
    name : str
        Of the number, with {} in place of the terminal.
    """

    def __init__(self, largest_unknowns: int | None, name: str) -> None:
        super().__init__(largest_unknowns)
        self.name = name

    def states(self, result: Solution) -> Sequence[SolvedState]:
        """Its one state."""
        return [result.state]

    def numbers(self, result: Solution, errors: Sequence[Mapping[str, float]]) -> dict[str, float]:
        """The errors of the currents themselves."""
        return {self.name.format(terminal): error for terminal, error in errors[0].items()}


class CurveClimb(Climb["KeyPoints"]):
    """For the headline numbers of a current-voltage curve."""

    def states(self, result: KeyPoints) -> Sequence[SolvedState]:
        """Short circuit, open circuit and maximum power; in the dark the one point there is."""
        return [point.state for point in self._points(result)]

    def _points(self, keys: KeyPoints) -> list[Point]:
        found = (keys.short_circuit, keys.open_circuit, keys.best)
        return [point for point in found if point is not None]

    def numbers(self, result: KeyPoints, errors: Sequence[Mapping[str, float]]) -> dict[str, float]:
        """δVoc = δJ/|dJ/dV|, δP = V δJ at the maximum of the power; the relative errors of the fill factor add up."""
        system = result.tracer.walker.system
        currents = [sum(e[t] for t in system.conductors.hole_terminals) for e in errors]
        points = self._points(result)
        if len(points) < 3:
            return {"current_mA_per_cm2": currents[0]}
        short, opened, best = points
        voc = currents[1] / abs(opened.slope_mA_per_cm2_V)
        power, jsc = best.voltage_V * currents[2], currents[0]
        relative = power / best.power_mW_per_cm2 + voc / opened.voltage_V + jsc / short.current_mA_per_cm2
        factor = 100 * best.power_mW_per_cm2 / (short.current_mA_per_cm2 * opened.voltage_V)
        found = {"jsc_mA_per_cm2": jsc, "voc_V": voc, "fill_factor_percent": relative * factor}
        found["maximum_power_mW_per_cm2"] = power
        incident = system.optics.incident_power_mW_per_cm2
        return found | ({"efficiency_percent": 100 * power / incident} if incident > 0 else {})


def adapted(problem: Problem, indicator: Cells, largest_unknowns: int | None) -> Problem | None:
    """The problem on the mesh refined where an indicator (n_cells,) is large; None if that has too many unknowns."""
    growth, limit = ADAPTIVE_GROWTH[problem.mesh.dimension], limit_of(problem, largest_unknowns)
    if problem.space.size * growth > limit:
        return None
    next_one = dataclasses.replace(problem, mesh=refined_by(problem.mesh, indicator, growth), steps=None)
    return next_one if next_one.space.size <= limit else None
