"""Solve the excess-carrier form: fixed and tied unknowns, Newton, currents at what is fixed."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..errors import Complaints, SolverError
from .excess import ExcessSystem
from .newton import Outcome, newton, round_off
from .roles import roles_of
from .solver import LinearSolver, check_forecast, one_carrier_solver
from .ties import Junction, find_junctions, periodic_map

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .problem import Problem


LARGEST_VOLTAGE_V = 10.0
"""Far above any open-circuit voltage; densities would overflow long before."""


@dataclass(frozen=True, eq=False)
class Constraints:
    """Which unknowns are fixed, which are one.

    Parameters
    ----------
    junctions : list of Junction
    voltages_V : mapping of str to float
        Voltage of every collecting terminal.
    fixed : (n,) bool array
    values : (n,) array
        Δn where fixed, cm⁻³.
    group : (n,) int array
        Number of the free unknown each entry belongs to; −1 where fixed.
    """

    junctions: list[Junction]
    voltages_V: Mapping[str, float]
    fixed: NDArray[np.bool_]
    values: NDArray[np.float64]
    group: NDArray[np.int64]

    @cached_property
    def spread(self) -> Any:
        """Sparse matrix (n, n_free) with Δn = spread @ free + values."""
        from scipy.sparse import csr_matrix

        rows = np.flatnonzero(self.group >= 0)
        shape = (self.group.size, int(self.group.max(initial=-1)) + 1)
        return csr_matrix((np.ones(rows.size), (rows, self.group[rows])), shape=shape)


@dataclass(frozen=True, eq=False)
class ExcessState:
    """A solved excess density.

    Parameters
    ----------
    system : ExcessSystem
    constraints : Constraints
    dn : (n,) array
        Δn at the nodes, cm⁻³.
    residual : (n,) array
        F(Δn), 1/s: round-off at free unknowns, minus the leaving current at fixed ones.
    outcome : Outcome
    """

    system: ExcessSystem
    constraints: Constraints
    dn: NDArray[np.float64]
    residual: NDArray[np.float64]
    outcome: Outcome

    @property
    def voltages_V(self) -> Mapping[str, float]:
        """Forward bias of every collecting terminal."""
        return self.constraints.voltages_V

    def minority_flux(self) -> Any:
        """Γ at the quadrature points, (dimension, n_cells, n_points), 1/(cm² s)."""
        bulk = self.system.space.bulk
        return self.system.flux(bulk.values(self.dn), bulk.gradients(self.dn))

    def leaving(self) -> dict[tuple[str, str], float]:
        """Carriers per second that leave where Δn is fixed, keyed by ("terminal", name) or ("surface", name).

        The residual of an equation that two named surfaces share is split by the share each has in its node.
        """
        weights = fixed_weights(self.system.problem, self.constraints)
        total = sum(weights.values(), np.full(self.dn.size, 1e-300))
        return {key: float(-(self.residual * w / total).sum()) for key, w in weights.items()}


def fixed_weights(problem: Problem, constraints: Constraints) -> dict[tuple[str, str], NDArray[np.float64]]:
    """Weight of each terminal and each bare metal surface at the fixed unknowns: ∮ |φ_i| over its facets."""
    weights: dict[tuple[str, str], NDArray[np.float64]] = {}
    fixed = constraints.fixed
    for junction in constraints.junctions:
        if junction.terminal is not None:
            on = np.zeros(fixed.size, dtype=bool)
            on[junction.dofs] = True
            for name in junction.surfaces:
                key = ("terminal", junction.terminal)
                weights[key] = weights.get(key, 0.0) + _node_areas(problem, name) * on
        elif fixed[junction.dofs].all():  # shorted by bare metal that it touches
            weights |= {("surface", name): _node_areas(problem, name) * fixed for name in junction.surfaces}
    for name in _bare_metal(problem):
        weights["surface", name] = _node_areas(problem, name) * fixed
    return weights


def _node_areas(problem: Problem, name: str) -> NDArray[np.float64]:
    from skfem import LinearForm

    return np.asarray(LinearForm(lambda v, w: np.abs(v)).assemble(problem.space.surfaces[name]))


def _bare_metal(problem: Problem) -> list[str]:
    return [name for name, s in problem.surfaces.items() if s.pins_to_zero]


def constrain(problem: Problem, voltage_V: float | Mapping[str, float]) -> Constraints:
    """Fix Δn at junctions with a contact and at bare metal; tie periodic sides and floating layers.

    Parameters
    ----------
    problem : Problem
    voltage_V : float, or mapping of terminal to float
        Forward bias of the collecting terminals.

    Returns
    -------
    Constraints

    Raises
    ------
    InputError
        Unknown terminal; a biased junction that touches bare metal.
    """
    partner = periodic_map(problem.space, problem.periodic_axes)
    junctions = find_junctions(problem, partner)
    voltages = _voltages(voltage_V, sorted({j.terminal for j in junctions if j.terminal is not None}))
    _refuse_patchy_layers(problem, junctions)
    values, fixed = np.full(problem.space.size, np.nan), np.zeros(problem.space.size, dtype=bool)
    group = partner.copy()
    for junction in junctions:
        if junction.terminal is None:
            group[np.isin(group, partner[junction.dofs])] = partner[junction.dofs].min()
        else:
            values[junction.dofs] = roles_of(problem.equilibrium).density(voltages[junction.terminal])[0]
    for name in _bare_metal(problem):
        _pin(problem, name, values)
    for junction in junctions:
        if junction.terminal is None:
            _short(partner, junction, values)
    fixed = np.isfinite(values)
    _fix_partners(fixed, values, partner)
    group[fixed] = -1
    group[~fixed] = np.unique(group[~fixed], return_inverse=True)[1]
    return Constraints(junctions, voltages, fixed, np.where(fixed, values, 0.0), group)


def _refuse_patchy_layers(problem: Problem, junctions: list[Junction]) -> None:
    """A layer that does not conduct sideways is no equipotential where metal does not lie on all of it."""
    problems = Complaints("solve_excess")
    for name in sorted({n for j in junctions for n in j.surfaces}):
        surface = problem.surfaces[name]
        insulating = surface.layer is not None and math.isinf(surface.layer.sheet_resistance_ohm_per_sq)
        given = f"the layer on {name} with an infinite sheet resistance and no contact on it"
        allowed = "layers that this form can take as equipotentials"
        problems.unless(surface.contact is not None or not insulating, given, allowed, "solve_bipolar")
    problems.raise_if_any()


def _voltages(voltage_V: float | Mapping[str, float], terminals: list[str]) -> dict[str, float]:
    """Voltage of every collecting terminal; refuses what is not a number, unknown terminals, and a bias of nothing."""
    problems = Complaints("solve_excess")
    named = dict(voltage_V) if isinstance(voltage_V, Mapping) else dict.fromkeys(terminals, voltage_V)
    known = ", ".join(terminals) or "none in this problem"
    for name, value in named.items():
        problems.unless(name in terminals, f"voltage_V of {name!r}", f"collecting terminals: {known}")
        good = checks.is_number(value) and abs(value) <= LARGEST_VOLTAGE_V
        problems.unless(good, f"voltage_V = {value!r}", f"a number up to {LARGEST_VOLTAGE_V:g} V")
    for name in terminals:
        problems.unless(name in named, f"no voltage for the terminal {name!r}", "a voltage for each, or one for all")
    if not terminals and not isinstance(voltage_V, Mapping):
        given = f"voltage_V = {voltage_V!r} without a contact on a layer of the type opposite to the base"
        problems.unless(checks.is_number(voltage_V) and voltage_V == 0, given, "0, or such a contact")
    problems.raise_if_any()
    return {name: float(value) for name, value in named.items()}


def _pin(problem: Problem, name: str, values: NDArray[np.float64]) -> None:
    """Fix Δn = 0 on bare metal; refuse where a biased junction touches it."""
    dofs = problem.space.facet_dofs(problem.mesh.surfaces[name])
    clash = dofs[np.isfinite(values[dofs]) & (values[dofs] != 0)]
    if clash.size:
        x, y, z = problem.space.points_cm[[0, 0, -1] if problem.mesh.dimension == 2 else [0, 1, 2]][:, clash[0]] * 1e4
        problems = Complaints("solve_excess")
        place = f"({x:.4g}, {z:.4g}) µm" if problem.mesh.dimension == 2 else f"({x:.4g}, {y:.4g}, {z:.4g}) µm"
        problems.add(
            f"surface {name} with infinite srv touches a biased junction at {place}",
            "no contact between surfaces that impose different densities: the current between them is infinite",
            "a gap, or a finite srv_cm_per_s (1e7 is near the thermal velocity)",
        )
        problems.raise_if_any()
    values[dofs] = 0.0


def _short(partner: NDArray[np.int64], junction: Junction, values: NDArray[np.float64]) -> None:
    """A floating layer that touches bare metal anywhere is at its density everywhere."""
    dofs = np.flatnonzero(np.isin(partner, partner[junction.dofs]))
    if np.isfinite(values[dofs]).any():
        values[dofs] = 0.0


def _fix_partners(fixed: Any, values: Any, partner: Any) -> None:
    """A fixed unknown fixes its periodic partner too."""
    for i in np.flatnonzero(fixed & (partner != np.arange(partner.size))):
        fixed[partner[i]], values[partner[i]] = True, values[i]
    follow = fixed[partner] & ~fixed
    values[follow] = values[partner][follow]
    fixed |= follow


def solve_state(
    system: ExcessSystem, voltage_V: float | Mapping[str, float] = 0.0, *, solver: LinearSolver | None = None
) -> ExcessState:
    """Solve F(Δn) = 0.

    Parameters
    ----------
    system : ExcessSystem
    voltage_V : float or mapping of terminal to float
    solver : LinearSolver, optional
        One that solved a neighbouring problem on the same mesh: its factors serve here as preconditioner.

    Returns
    -------
    ExcessState

    Raises
    ------
    InputError, SolverError
    """
    check_forecast(system.space, 1)
    constraints = constrain(system.problem, voltage_V)
    spread, level = constraints.spread, _level(system, constraints)
    fixed = np.where(constraints.fixed, constraints.values - level, 0.0)
    free, outcome = np.zeros(spread.shape[1]), Outcome("converged", 0, 0.0)
    if free.size:
        free, outcome = newton(
            lambda y: spread.T @ system.residual(spread @ y + fixed, level),
            lambda y: spread.T @ system.jacobian(spread @ y + fixed + level) @ spread,
            free,
            lambda y: _throughput(system, constraints, spread @ y + fixed, level),
            lambda y: round_off(spread.T @ system.jacobian(spread @ y + fixed + level), spread @ y + fixed),
            solver=solver or one_carrier_solver(system.space, spread),
        )
    above = spread @ free + fixed
    return ExcessState(system, constraints, above + level, system.residual(above, level), outcome)


def _throughput(system: ExcessSystem, constraints: Constraints, above: NDArray[np.float64], level: float) -> float:
    """The larger of generation and total recombination, 1/s, at an iterate; what passes through if there is neither."""
    dn = above + level
    rates = [*system.bulk_rates(dn).values(), *system.surface_rates(dn).values()]
    if not rates and not system.load.any():
        return float(np.abs(system.residual(above, level)[constraints.fixed]).sum())
    return max(float(np.abs(system.load).sum()), float(np.abs(rates).sum()))


def _level(system: ExcessSystem, constraints: Constraints) -> float:
    """Uniform density to start from: the one fixed everywhere, or where recombination balances generation; or 0."""
    if constraints.fixed.any():
        values = constraints.values[constraints.fixed]
        return float(values[0]) if np.ptp(values) == 0 and system.drift is None else 0.0
    return uniform_density(system)


def uniform_density(system: ExcessSystem) -> float:
    """Uniform Δn with ∫ R(Δn) + ∮ U(Δn) = ∫ G.

    Raises
    ------
    SolverError
        "no sink": nothing recombines and nothing collects.
    """
    from scipy.optimize import brentq

    generated, one = float(system.load.sum()), np.ones(system.space.size)

    def excess(log_dn: float) -> float:
        dn = np.exp(log_dn) * one
        return sum(system.bulk_rates(dn).values()) + sum(system.surface_rates(dn).values()) - generated

    if generated == 0:
        if not system.channels and not system.surface_laws:
            raise _no_sink()
        return 0.0
    low, high = np.log(1e-10), np.log(1e24)
    if excess(high) <= 0:
        raise _no_sink()
    return float(np.exp(brentq(excess, low, high, xtol=1e-6)))


def _no_sink() -> SolverError:
    return SolverError(
        "no sink for carriers",
        "Nothing recombines and no junction collects, so the density has no steady value. "
        "Try a lifetime, a J0 or srv on a surface, or a contact on an opposite-type layer.",
    )
