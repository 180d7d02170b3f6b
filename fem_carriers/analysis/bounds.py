"""Guaranteed bounds of a collected current in linear problems."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C
from ..errors import Complaints
from ..transport.adjoint import terminal_key
from ..transport.build import checked_problem
from ..transport.enclosure import enclose
from ..transport.linear_problem import WHAT, LinearProblem, linear_problem
from ..transport.steady import fixed_weights
from ..units import MA

if TYPE_CHECKING:
    from ..cell.unit_cell import UnitCell
    from ..transport.problem import Problem


@dataclass(frozen=True)
class Bounds:
    """What a terminal collects at least and at most, in the exact solution of the model's equations.

    Parameters
    ----------
    terminal : str
    lower_mA_per_cm2, upper_mA_per_cm2 : float
    unknowns : int
        Of the mesh they were found on.
    """

    terminal: str
    lower_mA_per_cm2: float
    upper_mA_per_cm2: float
    unknowns: int

    @property
    def collected_mA_per_cm2(self) -> float:
        """The middle."""
        return 0.5 * (self.lower_mA_per_cm2 + self.upper_mA_per_cm2)

    @property
    def error_bar_collected_mA_per_cm2(self) -> float:
        """Half of the width."""
        return 0.5 * (self.upper_mA_per_cm2 - self.lower_mA_per_cm2)

    def __str__(self) -> str:
        width = max(self.upper_mA_per_cm2 - self.lower_mA_per_cm2, 1e-12 * abs(self.upper_mA_per_cm2), 1e-300)
        places = max(1 - math.floor(math.log10(width)), 0)
        low = math.floor(self.lower_mA_per_cm2 * 10**places) / 10**places
        high = math.ceil(self.upper_mA_per_cm2 * 10**places) / 10**places
        return f"{self.terminal} collects {low:.{places}f} to {high:.{places}f} mA/cm²"


def collected_bounds(
    problem: Problem | UnitCell,
    terminal: str,
    voltage_V: float | Mapping[str, float] = 0.0,
    *,
    low_injection: bool = False,
) -> Bounds:
    """Two-sided bounds of the current that a terminal collects in the excess-carrier form, where that is linear; 2-D.

    The bounds hold for the exact solution on the given mesh's outline, whatever the mesh, provided that the integrals
    of the data are exact: they are taken with two quadratures of degrees 8 and 14, and the interval is widened by
    their difference and by an allowance for round-off. The light enters by its photon flux, without approximation.

    Parameters
    ----------
    problem : Problem or UnitCell
        With a constant diffusivity (equal mobilities), lifetimes that do not depend on injection, surfaces with
        srv_cm_per_s, contacted layers of the opposite type and bare metal.
    terminal : str
        A collecting terminal, or a surface of bare metal.
    voltage_V : float or mapping of terminal to float
        As for `solve_excess`.
    low_injection : bool
        Take every rate and the diffusivity in the limit of small excess densities, where all of them are linear.

    Returns
    -------
    Bounds

    Raises
    ------
    InputError
        What is not linear, not symmetric or not in 2-D, with all reasons at once; a terminal that touches another sink.

    References
    ----------
    W. Prager and J. L. Synge, Q. Appl. Math. 5, 241 (1947).
    """
    linear = linear_problem(checked_problem(problem), voltage_V, low_injection=low_injection)
    at_sinks, on_terminal = _fixed_values(linear, terminal)
    found = enclose(linear, at_sinks, on_terminal)
    scale = ELEMENTARY_CHARGE_C / linear.problem.cell_area_cm2 / MA
    low, high = (found.middle + sign * found.half_width for sign in (-1, 1))
    return Bounds(terminal, low * scale, high * scale, linear.problem.space.size)


def _fixed_values(linear: LinearProblem, terminal: str) -> tuple[dict[str, float], dict[str, float]]:
    """Δn on every sink, and 1 on those of the terminal."""
    problem, constraints = linear.problem, linear.constraints
    kind, name = terminal_key(fixed_weights(problem, constraints), terminal)
    own = {name} if kind == "surface" else {s for j in constraints.junctions if j.terminal == name for s in j.surfaces}
    dofs = {sides.name: problem.space.facet_dofs(sides.index) for sides in linear.fixed}
    on_own = np.unique(np.concatenate([d for s, d in dofs.items() if s in own]))
    complaints = Complaints(WHAT)
    for s, d in dofs.items():
        apart = s in own or not np.isin(d, on_own).any()
        complaints.unless(apart, f"terminal {terminal!r} that touches {s!r}", "sinks with a gap between them")
    complaints.raise_if_any()
    return {s: float(constraints.values[d[0]]) for s, d in dofs.items()}, {s: float(s in own) for s in dofs}
