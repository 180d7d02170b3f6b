"""Drivers: solve a problem and report where the model is strained."""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints, ModelWarning
from ..transport.adjoint import collection_field
from ..transport.drift import Drift, make_drift
from ..transport.excess import ExcessSystem
from ..transport.problem import Problem
from ..transport.steady import ExcessState, solve_state
from .fields import values_at
from .solution import Solution, finish

if TYPE_CHECKING:
    from numpy.typing import NDArray

LARGEST_INJECTION = 0.002
"""Δn over the majority density above which collection at a terminal is a tenth of a percent or more off."""


def solve_excess(
    problem: Problem,
    voltage_V: float | Mapping[str, float] = 0.0,
    *,
    field_V_per_cm: Any = None,
    current_mA_per_cm2: Any = None,
) -> Solution:
    """Solve the steady excess-carrier equation.

    ∇·Γ + G − R(Δn) = 0, Γ = D ∇Δn + (J/q) [t(Δn) − t(0)], with Δn fixed by the voltage where a layer of the opposite
    type has a contact and by 0 on bare metal. Valid at zero net current for any injection, or in low injection for any
    current.

    Parameters
    ----------
    problem : Problem
    voltage_V : float, or mapping of terminal to float
        Forward bias of the collecting terminals.
    field_V_per_cm : vector, mapping of volume to vector, or function, optional
        A field in low injection: Γ = D ∇Δn + μ Δn E. Components (x, z) in 2-D, (x, y, z) in 3-D.
    current_mA_per_cm2 : vector, mapping, or function, optional
        A prescribed divergence-free total current density.

    Returns
    -------
    Solution

    Raises
    ------
    InputError
        Inputs that do not fit together.
    SolverError
        No solution: "not converged", "singular", "no sink for carriers", "not a number".
    BalanceError
        The carrier ledger does not close.

    Warns
    -----
    ModelWarning
        Collection at a terminal beyond low injection; a layer conducting sideways to its contact, whose sheet
        resistance this form leaves out; cells too coarse for the drift.
    """
    _check_problem("solve_excess", problem)
    drift = make_drift(problem, field_V_per_cm, current_mA_per_cm2)
    state = solve_state(ExcessSystem(problem, drift), voltage_V)
    notes = [note for note in (_injection(state), _sheet(state), _coarse(drift)) if note]
    solution = finish(state, tuple(notes))
    for note in notes:
        warnings.warn(note, ModelWarning, stacklevel=2)
    return solution


def _check_problem(what: str, problem: object) -> None:
    problems = Complaints(what)
    problems.unless(isinstance(problem, Problem), f"{problem!r}", "a Problem", "fc.problem(cell)")
    problems.raise_if_any()


def _injection(state: ExcessState) -> str:
    if not any(j.terminal is not None for j in state.constraints.junctions) and state.system.drift is None:
        return ""
    eq = state.system.problem.equilibrium
    ratio = float(np.abs(state.dn).max() / max(eq.n0, eq.p0))
    if ratio <= LARGEST_INJECTION:
        return ""
    return (
        f"the excess density reaches {ratio:.2g} of the majority density; with a current to a terminal this form holds "
        f"in low injection (below {LARGEST_INJECTION:g}), and collection may be off by more than 0.1 %."
    )


def _sheet(state: ExcessState) -> str:
    surfaces = state.system.problem.surfaces
    wide = [j for j in state.constraints.junctions if j.terminal is not None]
    bare = sorted({n for j in wide for n in j.surfaces if surfaces[n].contact is None})
    if not bare:
        return ""
    return (
        f"the layer on {', '.join(bare)} is taken as an equipotential: its sheet resistance is left out, so collection "
        "does not fall with pitch, and a full-face layer has no best pitch in this form."
    )


def _coarse(drift: Drift | None) -> str:
    if drift is None or not drift.needs_upwinding:
        return ""
    return (
        f"the drift carries carriers across a cell faster than they diffuse (cell Péclet number {drift.peclet:.2g}); "
        "diffusion along the drift was added there, which is accurate to first order only. Use a finer mesh along it."
    )


class CollectionProbability:
    """φ at the nodes: what a carrier generated there contributes to a terminal.

    Parameters
    ----------
    problem : Problem
    terminal : str
    values : (n,) array
    load : (n,) array
        ∫ G v of the problem's own light, 1/s.
    """

    def __init__(self, problem: Problem, terminal: str, values: NDArray[np.float64], load: NDArray[np.float64]) -> None:
        self.problem, self.terminal, self.values, self.load = problem, terminal, values, load

    def at(self, points_um: Any) -> NDArray[np.float64]:
        """φ at points (dimension, n) in µm."""
        return values_at(self.problem, self.values, np.asarray(points_um, dtype=float))

    @property
    def collected_per_s(self) -> float:
        """∫ G φ for the problem's own light, 1/s (per cm of depth in 2-D)."""
        return float(self.load @ self.values)


def collection_probability(
    problem: Problem, terminal: str, voltage_V: float | Mapping[str, float] = 0.0
) -> CollectionProbability:
    """Collection probability of a terminal at an operating point.

    For a linear problem the terminal collects ∫ G φ for every generation G (reciprocity). Where lifetime, diffusivity
    or the surfaces depend on the density, φ = ∂I/∂G at the solved state.

    Parameters
    ----------
    problem : Problem
    terminal : str
        A collecting terminal, or a surface of bare metal.
    voltage_V : float, or mapping of terminal to float

    Returns
    -------
    CollectionProbability

    References
    ----------
    C. Donolato, Appl. Phys. Lett. 46, 270 (1985).
    """
    _check_problem("collection_probability", problem)
    system = ExcessSystem(problem)
    state = solve_state(system, voltage_V)
    return CollectionProbability(problem, terminal, collection_field(state, terminal), system.load)
