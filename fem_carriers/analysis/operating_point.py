"""The state about which a response is taken: solved here in either form, or a solution that is there already."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from ..cell import checks
from ..cell.unit_cell import UnitCell
from ..errors import Complaints
from ..transport.adjoint import ExcessResponse
from ..transport.bipolar_adjoint import BipolarResponse
from ..transport.bipolar_state import BipolarState
from ..transport.build import checked_problem, problem
from ..transport.excess import ExcessSystem
from ..transport.problem import Problem
from ..transport.steady import ExcessState, solve_state
from .bipolar import solve_bipolar
from .solution import Solution, finish
from .solve import strains

if TYPE_CHECKING:
    from ..transport.channels import Key

FORMS = ("excess", "bipolar")
Given = Problem | UnitCell | Solution
Response = ExcessResponse | BipolarResponse


def operating_point(what: str, given: Given, voltage_V: Any, form: str, *, dark: bool) -> Solution:
    """The solution about which the equations are linearised.

    Parameters
    ----------
    what : str
        Name of the calling function, for messages.
    given : Problem, UnitCell or Solution
        A solution is taken as it is.
    voltage_V : float or mapping of terminal to float
    form : {"excess", "bipolar"}
    dark : bool
        Leave out the problem's light.

    Raises
    ------
    InputError
    """
    problems = Complaints(what)
    if isinstance(given, Solution):
        same = checks.is_number(voltage_V) and voltage_V == 0
        problems.unless(same, f"voltage_V = {voltage_V!r} with a solution", "a solution, which has its voltages")
        problems.unless(form in FORMS, f"form = {form!r}", " or ".join(map(repr, FORMS)))
        problems.raise_if_any()
        return given
    good = isinstance(given, Problem | UnitCell)
    problems.unless(good, f"{given!r:.80}", "a Problem, a UnitCell or a solution", "fc.problem(cell)")
    problems.unless(form in FORMS, f"form = {form!r}", " or ".join(map(repr, FORMS)))
    problems.raise_if_any()
    if isinstance(given, UnitCell):
        given = checked_problem(given) if form == "bipolar" else problem(given)
    posed = given.changed(light=None) if dark else given
    return solve_excess_quietly(posed, voltage_V) if form == "excess" else solve_bipolar(posed, voltage_V)


def solve_excess_quietly(posed: Problem, voltage_V: float | Mapping[str, float]) -> Solution:
    """As `solve_excess`; where the model is strained is noted in the solution, not warned of."""
    state = solve_state(ExcessSystem(posed), voltage_V)
    return finish(state, strains(state))


def response_of(solution: Solution) -> Response:
    """The linearised equations of a solution."""
    state = solution.state
    if isinstance(state, BipolarState):
        return BipolarResponse(state)
    assert isinstance(state, ExcessState)
    return ExcessResponse(state)


def terminal_keys(response: Response) -> list[Key]:
    """Terminals that collect minority carriers; bare metal where there are none."""
    terminals = [key for key in response.keys if key[0] == "terminal"]
    bare = sorted(response.weights) if isinstance(response, ExcessResponse) else []
    return terminals or bare
