"""Collected current under many lights from one operating point, with an estimate of what linearity leaves out."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..cell.light import Light
from ..errors import Complaints
from ..transport.bipolar_adjoint import BipolarResponse
from ..transport.generation import assemble_generation
from .bipolar import solve_bipolar
from .collection import mA_per_cm2
from .operating_point import Given, operating_point, response_of, solve_excess_quietly
from .quantum_efficiency import chosen_terminals

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from ..transport.channels import Key
    from .operating_point import Response
    from .solution import Solution

WHEN_LARGE = ("solve", "refuse")


def currents_under(
    problem: Given,
    lights: Sequence[Light] | Mapping[str, Light],
    *,
    terminal: str | None = None,
    voltage_V: float | Mapping[str, Any] = 0.0,
    form: str = "excess",
    tolerance_percent: float = 0.1,
    when_large: str = "solve",
) -> pd.DataFrame:
    """Current collected under each of many lights by inner products with one adjoint field.

    At an operating point with current I0 and load b0, a light with load b gives I0 + φ·(b − b0) as far as the equations
    are linear. What this leaves out is estimated for every light: the unknowns are moved along their linear response,
    and the equations there, weighted with the adjoint, give the current to second order (see R. Becker and R.
    Rannacher, Acta Numerica 10, 1 (2001), for such estimates). Where the second order is above the tolerance the light
    is solved for or refused, never extrapolated.

    Parameters
    ----------
    problem : Problem, UnitCell or Solution
        The operating point: under the problem's own light (in the dark without one) at `voltage_V`.
    lights : sequence of Light, or mapping of name to Light
    terminal : str, optional
        Default is the sum of the terminals that collect minority carriers.
    voltage_V, form
        As for `collection_probability`; the voltages stay while the light changes.
    tolerance_percent : float
        Largest second-order part of a current, relative to it.
    when_large : {"solve", "refuse"}

    Returns
    -------
    pandas.DataFrame
        Per light: light (its name or number), generated_mA_per_cm2, collected_mA_per_cm2,
        nonlinear_part_percent (estimated; of the current), solved (whether it took a solve of its own).

    Raises
    ------
    InputError
        No lights, or one beyond the tolerance with ``when_large="refuse"``.
    SolverError, BalanceError
    """
    import pandas as pd

    named = _named(lights, tolerance_percent, when_large)
    solution = operating_point("currents_under", problem, voltage_V, form, dark=False)
    response = response_of(solution)
    keys = chosen_terminals("currents_under", response, terminal)
    linear = Linearised(solution, response, keys)
    rows, refused = [], Complaints("currents_under")
    for name, light in named.items():
        posed = solution.problem.changed(light=light)
        load, optics = assemble_generation(posed)
        first, second = linear.currents(load)
        part = 100 * abs(second - first) / abs(second) if second != 0 else (0.0 if first == 0 else np.inf)
        large = not part <= tolerance_percent
        given = f"light {name!r}, whose current is {part:.3g} % off a linear response"
        refused.unless(not large or when_large == "solve", given, f"{tolerance_percent:g} %", 'when_large="solve"')
        current = _solved(solution, posed, keys) if large and when_large == "solve" else mA_per_cm2(first, posed)
        rows.append((name, optics.generated, current, part, large))
    refused.raise_if_any()
    columns = ["light", "generated_mA_per_cm2", "collected_mA_per_cm2", "nonlinear_part_percent", "solved"]
    return pd.DataFrame(rows, columns=columns)


@dataclass(frozen=True, eq=False)
class Linearised:
    """Collected rates about an operating point, to first and to second order in the change of light.

    Parameters
    ----------
    solution : Solution
    response : Response
    keys : list of Key
        Terminals that are summed.
    """

    solution: Solution
    response: Response
    keys: list[Key]

    @cached_property
    def field(self) -> NDArray[np.float64]:
        """φ of all terminals together, (n,)."""
        return np.asarray(sum(self.response.field(key) for key in self.keys))

    @cached_property
    def _at_start(self) -> float:
        leaving = self.solution.state.leaving()
        return float(sum(leaving[key] for key in self.keys))

    def currents(self, load: NDArray[np.float64]) -> tuple[float, float]:
        """Carriers per second under a load (n,), to first and to second order."""
        change = load - self.solution.state.system.load
        first = self._at_start + float(self.field @ change)
        if not change.any():
            return first, first
        return first, first + self._second_order(change)

    def _second_order(self, change: NDArray[np.float64]) -> float:
        """Adjoint · (what the moved unknowns leave in the equations beyond their linear part)."""
        moved = self.response.moved(change)
        with np.errstate(all="ignore"):  # far beyond the linear range a density may overflow; it is solved for then
            return self._bipolar(moved) if isinstance(self.response, BipolarResponse) else self._excess(moved)

    def _excess(self, moved: NDArray[np.float64]) -> float:
        assert not isinstance(self.response, BipolarResponse)
        state = self.response.state
        left = state.system.residual(state.dn + moved) - state.residual - self.response.matrix @ moved
        return -float(self.field @ left)

    def _bipolar(self, moved: NDArray[np.float64]) -> float:
        response = self.response
        assert isinstance(response, BipolarResponse)
        system, before = response.state.system, np.concatenate(response.state.residuals)
        after = np.concatenate(system.residuals(response.advanced(moved), response.state.voltages))
        return float(self._multipliers @ (after - before - response.matrix @ moved))

    @cached_property
    def _multipliers(self) -> NDArray[np.float64]:
        response = self.response
        assert isinstance(response, BipolarResponse)
        return np.asarray(sum(response.multipliers(response.functionals[key]) for key in self.keys))


def _solved(solution: Solution, posed: Any, keys: list[Key]) -> float:
    """mA/cm² under a light of its own, at the operating point's voltages."""
    voltages = dict(solution.voltage_V)
    if hasattr(solution, "bipolar"):
        found: Any = solve_bipolar(posed, voltages or 0.0)
    else:
        found = solve_excess_quietly(posed, voltages)
    return float(sum(found.ledger.rows[key] for key in keys))


def _named(lights: Any, tolerance_percent: Any, when_large: Any) -> dict[Any, Light]:
    problems = Complaints("currents_under")
    listed = isinstance(lights, Mapping | list | tuple) and len(lights) > 0
    problems.unless(listed, f"lights = {lights!r:.80}", "a list of lights, or a mapping of names to lights")
    named = {} if not listed else dict(lights) if isinstance(lights, Mapping) else dict(enumerate(lights))
    for name, light in named.items():
        problems.unless(isinstance(light, Light), f"light {name!r} = {light!r:.60}", "a Light", "fc.Light.sunlight()")
    checks.positive(problems, "tolerance_percent", tolerance_percent)
    checks.one_of(problems, "when_large", when_large, WHEN_LARGE)
    problems.raise_if_any()
    return named
