"""Collection probability: what a carrier generated anywhere contributes to a terminal."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..transport.adjoint import ExcessResponse, terminal_key
from ..units import MA
from .fields import values_at
from .operating_point import Given, operating_point, response_of

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..transport.problem import Problem
    from .ledger import Ledger
    from .solution import Solution

FIELD = "collection_probability"


@dataclass(frozen=True, eq=False, repr=False)
class CollectionProbability:
    """φ at the nodes: the current of a terminal per current of carriers generated there, ∂I/∂(qG).

    It has the fields of its operating point too, so that `view` and `write_fields` take it like a solution.

    Parameters
    ----------
    terminal : str
    values : (n,) array
    solution : Solution
        The operating point at which the equations were linearised.
    """

    terminal: str
    values: NDArray[np.float64]
    solution: Solution

    @property
    def problem(self) -> Problem:
        """The problem at the operating point."""
        return self.solution.problem

    @property
    def load(self) -> NDArray[np.float64]:
        """∫ G v of the operating point's own light, 1/s (per cm of depth in 2-D), (n,)."""
        return self.solution.state.system.load

    def at(self, points_um: Any) -> NDArray[np.float64]:
        """φ at points (dimension, n) in µm."""
        return values_at(self.problem, self.values, np.asarray(points_um, dtype=float))

    @property
    def collected_per_s(self) -> float:
        """∫ G φ for the operating point's own light, 1/s (per cm of depth in 2-D)."""
        return float(self.load @ self.values)

    @property
    def main_field(self) -> str:
        """The nodal field that a picture shows by default."""
        return FIELD

    @cached_property
    def nodal_fields(self) -> dict[str, NDArray[np.float64]]:
        """``collection_probability``, then the nodal fields of the operating point."""
        return {FIELD: self.values} | self.solution.nodal_fields

    @property
    def carrier_flux_mA_per_cm2(self) -> NDArray[np.float64]:
        """Of the operating point."""
        return self.solution.carrier_flux_mA_per_cm2

    @property
    def diffusion_length_um(self) -> NDArray[np.float64]:
        """Of the operating point."""
        return self.solution.diffusion_length_um

    @property
    def ledger(self) -> Ledger:
        """Of the operating point."""
        return self.solution.ledger

    @property
    def voltage_V(self) -> Mapping[str, float]:
        """Of the operating point."""
        return self.solution.voltage_V

    @property
    def warnings(self) -> tuple[str, ...]:
        """Where the model is strained at the operating point."""
        return self.solution.warnings

    def __repr__(self) -> str:
        low, high = float(self.values.min()), float(self.values.max())
        bias = ", ".join(f"{t} at {v:g} V" for t, v in self.voltage_V.items())
        light = f", {self.ledger.generated_mA_per_cm2:.4g} mA/cm² generated" if self.load.any() else ", in the dark"
        return f"CollectionProbability of {self.terminal!r}: {low:.4g} to {high:.4g}; {bias}{light}"


def collection_probability(
    problem: Given, terminal: str, voltage_V: float | Mapping[str, Any] = 0.0, *, form: str = "excess"
) -> CollectionProbability:
    """Collection probability of a terminal: one adjoint solve of the equations linearised at an operating point.

    Where the problem is linear the terminal collects ∫ G φ of every generation G (reciprocity). Elsewhere φ = ∂I/∂(qG)
    is the differential response under the problem's own light as bias light: what a chopped weak beam measures.

    Parameters
    ----------
    problem : Problem, UnitCell or Solution
        A solution of `solve_excess` or `solve_bipolar` is itself the operating point, in its own form.
    terminal : str
        A collecting terminal; in the excess-carrier form also a surface of bare metal. In the bipolar form a terminal
        of either polarity; both see the same current.
    voltage_V : float, or mapping of terminal to voltage
        As for `solve_excess` or `solve_bipolar`.
    form : {"excess", "bipolar"}
        "excess": Δn alone, at zero net current or in low injection. "bipolar": with sheet resistances, contacts and
        the field in the base; slower, and right at any operating point. Terminal voltages are held, so that at a
        forward bias φ is the response of the current.

    Returns
    -------
    CollectionProbability

    Raises
    ------
    InputError, SolverError, BalanceError

    References
    ----------
    C. Donolato, Appl. Phys. Lett. 46, 270 (1985).
    """
    solution = operating_point("collection_probability", problem, voltage_V, form, dark=False)
    response = response_of(solution)
    known = response.weights if isinstance(response, ExcessResponse) else response.functionals
    key = terminal_key([k for k in known if isinstance(response, ExcessResponse) or k[0] == "terminal"], terminal)
    return CollectionProbability(terminal, response.field(key), solution)


def mA_per_cm2(rate_per_s: Any, problem: Problem) -> Any:
    """Carriers per second as a current density of the cell."""
    from ..constants import ELEMENTARY_CHARGE_C

    return ELEMENTARY_CHARGE_C * rate_per_s / problem.cell_area_cm2 / MA
