"""From one mesh to the next finer one, for a result that is wanted to a given error."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from ..cell.terminal_check import check_terminals
from ..cell.unit_cell import UnitCell
from ..errors import Complaints
from ..transport.build import at_level, checked_problem, problem
from ..transport.problem import MeshSteps, Problem
from .accuracy import Numbers, Target, check_target

if TYPE_CHECKING:
    from .solution import Solution

DEFAULT_PERCENT = 0.1
"""Error aimed at where a unit cell is given and no other target."""
FIRST_LEVEL = -4.0
GROWTH_OF_UNKNOWNS = {2: 2.7, 3: 4.0}
"""Largest factor of the unknowns from one level to the next."""
LARGEST_UNKNOWNS = {2: 300_000, 3: 250_000}
"""Unknowns per carrier beyond which no finer mesh is tried."""


def wanted_target(what: str, given: Any, options: Mapping[str, Any], percent: Any, absolute: Any) -> Target | None:
    """The target asked for; else `DEFAULT_PERCENT` for a unit cell whose mesh is left open, and None for a mesh."""
    target = check_target(what, percent, absolute)
    if target is None and isinstance(given, UnitCell) and not any(v is not None for v in options.values()):
        return Target(DEFAULT_PERCENT)
    return target


def starting_problem(
    given: Problem | UnitCell, options: Mapping[str, Any], target: Target | None, *, bipolar: bool
) -> Problem:
    """The problem to solve, or the coarsest one of the family if a target is to be reached.

    Parameters
    ----------
    given : Problem or UnitCell
    options : mapping
        ``first_step_um`` and ``growth`` of a unit cell's mesh; None where not stated.
    target : Target, optional
    bipolar : bool
        Terminals of a unit cell are checked before it is meshed.

    Raises
    ------
    InputError
        Neither of the two, mesh options for what is already meshed, or terminals without a finite current.
    """
    stated = {name: value for name, value in options.items() if value is not None}
    if isinstance(given, UnitCell):
        if bipolar:
            check_terminals(given)
        level = None if target is None else FIRST_LEVEL
        return problem(given, level=level, **stated)
    problems = Complaints("mesh options")
    for name, value in stated.items():
        problems.unless(
            not isinstance(given, Problem), f"{name} = {value!r} for a problem that is meshed", "a UnitCell"
        )
    problems.raise_if_any()
    meshed = checked_problem(given)
    if target is None or meshed.cell is None or meshed.steps is None:
        return meshed
    return at_level(meshed, FIRST_LEVEL)


FALL_PER_LEVEL = 0.3
"""Of the bar, from one level to the next."""
SHORTEST_STEP = {2: 1.0, 3: 0.5}
"""Levels to the next mesh, where the bar is nearly small enough."""


def finer(problem: Problem, largest_unknowns: int | None, excess: float = math.inf) -> Problem | None:
    """The next finer mesh; None if it would have too many unknowns.

    Parameters
    ----------
    problem : Problem
    largest_unknowns : int, optional
    excess : float
        How many times wider the bar is than asked for: where it is little, the next mesh is not much finer.
    """
    dimension = problem.mesh.dimension
    step = min(max(math.log(excess) / -math.log(FALL_PER_LEVEL), SHORTEST_STEP[dimension]), 1.0)
    if problem.space.size * GROWTH_OF_UNKNOWNS[dimension] ** step > limit_of(problem, largest_unknowns):
        return None
    if problem.cell is None or problem.steps is None:
        return problem.refined()
    steps: MeshSteps = problem.steps
    return at_level(problem, steps.level + step)


def limit_of(problem: Problem, largest_unknowns: int | None) -> int:
    """Unknowns per carrier beyond which no finer mesh is tried."""
    return largest_unknowns or LARGEST_UNKNOWNS[problem.mesh.dimension]


def current_numbers(solution: Solution) -> Numbers:
    """The headline currents of a solution; a percentage refers to each, at least to a hundredth of the generation."""
    values = solution.headline
    least = 0.01 * solution.ledger.scale_mA_per_cm2
    scales = {n: max(abs(v), least) if n.endswith("mA_per_cm2") else abs(v) for n, v in values.items()}
    return values, scales
