"""Newton's method for the bipolar form at given terminal voltages; terminal currents and their slope."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C
from ..errors import SolverError
from .bipolar import BipolarSystem, Unknowns
from .linear import Factorization
from .newton import Outcome

if TYPE_CHECKING:
    from numpy.typing import NDArray

LARGEST_STEPS = 30
LARGEST_CHANGE_VT = 10.0
"""Potentials move by at most this many thermal voltages per step."""
SETTLED_V = 1e-7
"""A step below this (and as small in Δn, relatively) is the last one: convergence is quadratic."""
LARGEST_MISCLOSURE = 1e-12
"""Of the balances of both carriers, over the throughput, at which the polishing ends."""
POLISHING_STEPS = 4
KEEP_BELOW_VT = 0.1
"""After a step below this many thermal voltages, and a tenth of the one before, the factors are kept."""


@dataclass(frozen=True, eq=False)
class BipolarState:
    """A solution at given terminal voltages.

    Parameters
    ----------
    system : BipolarSystem
    voltages : mapping of terminal to float
        In the frame of a p-type base (see `roles`), V.
    x : Unknowns
    outcome : Outcome
    equations : Equations
    tangent : Unknowns
        dx/dV for a rise of the forward bias; approximate (by the last factors kept), good for predictions.
    """

    system: BipolarSystem
    voltages: Mapping[str, float]
    x: Unknowns
    outcome: Outcome
    equations: Equations
    tangent: Unknowns

    @cached_property
    def slopes(self) -> dict[str, float]:
        """dI/dV of every terminal current for a rise of the forward bias, A/V, in the frame of a p-type base."""
        x, slope = self.system.completed(self.x, self.voltages)
        A, rise = self.equations.matrix(x, slope)
        solve = _solver(self.equations, A)
        tangent = self.equations.spread @ solve(-(self.equations.gather @ rise))
        return _current_slopes(self.system, tangent, A @ tangent + rise)

    @property
    def dn(self) -> NDArray[np.float64]:
        """Δn at the nodes, cm⁻³."""
        return self.x.d

    @cached_property
    def residuals(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """(Fm, FM): round-off at free unknowns, reactions at fixed ones; carriers per second."""
        return self.system.residuals(self.x, self.voltages)

    @cached_property
    def terminal_currents(self) -> dict[str, float]:
        """Current out of the cell at every terminal, A (per cm of depth in 2-D), in the frame of a p-type base."""
        return _terminal_currents(self.system, self.x, self.residuals, self.voltages)

    def minority_flux(self) -> Any:
        """jm at the quadrature points, (dimension, n_cells, n_points), 1/(cm² s)."""
        return self.system.fluxes(self.x)[0]

    @property
    def voltages_V(self) -> dict[str, float]:
        """Real terminal voltages."""
        return {t: float(self.system.roles.sign * v + 0.0) for t, v in self.voltages.items()}

    @cached_property
    def currents_A(self) -> dict[str, float]:
        """Real conventional current that leaves the cell at every terminal, A (per cm of depth in 2-D)."""
        return {t: self.system.roles.sign * i for t, i in self.terminal_currents.items()}

    def leaving(self) -> dict[tuple[str, str], float]:
        """Minority carriers per second that leave: to terminals, bare metal and shunts."""
        left = {("surface", name): rate for name, rate in self.bare_rates.items()}
        across = self.system.across(self.x, self.voltages)
        for name, shunt in self.system.conductors.shunts.items():
            left["surface", f"{name}: shunt"] = float((shunt @ across).sum()) / ELEMENTARY_CHARGE_C
        for terminal in self.system.conductors.minority_terminals:
            left["terminal", terminal] = -self.terminal_currents[terminal] / ELEMENTARY_CHARGE_C
        return left

    @cached_property
    def bare_rates(self) -> dict[str, float]:
        """Recombination at every bare metal surface, carriers per second."""
        conductors, problem = self.system.conductors, self.system.problem
        names = [n for n, s in problem.surfaces.items() if s.pins_to_zero]
        left, rates = conductors.bare.copy(), {}
        for name in names:
            dofs = problem.space.facet_dofs(problem.mesh.surfaces[name])
            dofs = dofs[left[dofs]]
            left[dofs] = False  # a node shared by two bare surfaces counts once
            rates[name] = float(-self.residuals[0][dofs].sum())
        return rates


@dataclass(frozen=True, eq=False)
class Equations:
    """Which unknowns are free, and the linear algebra of one Newton step.

    Unknowns are stacked: first s on layers and Δn elsewhere, then f.
    """

    system: BipolarSystem

    @cached_property
    def ideal(self) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
        """Unknowns s, and f, that an ideal contact fixes; each (n,)."""
        on_s, on_f = np.zeros(self.n, dtype=bool), np.zeros(self.n, dtype=bool)
        for metal in self.system.conductors.metals:
            if metal.resistivity_ohm_cm2 == 0:
                (on_s if metal.on_layer else on_f)[metal.dofs] = True
        if self.system.conductors.majority_reference is None:
            on_f[0] = True  # nothing else sets the level of f
        return on_s, on_f

    @property
    def n(self) -> int:
        """Number of nodes."""
        return self.system.space.size

    @cached_property
    def spread(self) -> Any:
        """Sparse (2n, n_free): free unknowns to all; periodic partners share one."""
        from scipy.sparse import csr_matrix

        partner = self.system.conductors.partner
        fixed = np.concatenate([self.system.conductors.bare | self.ideal[0], self.ideal[1]])
        group = np.concatenate([partner, partner + self.n])
        np.logical_or.at(fixed, group, fixed)
        fixed = fixed[group]
        rows = np.flatnonzero(~fixed)
        number = np.unique(group[rows], return_inverse=True)[1]
        return csr_matrix((np.ones(rows.size), (rows, number)), shape=(2 * self.n, int(number.max()) + 1))

    @cached_property
    def _free(self) -> NDArray[np.bool_]:
        """Equations that must hold, stacked (2n,); the others are reactions."""
        return np.asarray(abs(self.spread).sum(axis=1)).ravel() > 0

    def misclosure(self, residuals: tuple[NDArray[np.float64], NDArray[np.float64]]) -> float:
        """|Σ Fm| + |Σ FM| over the equations that must hold, carriers per second."""
        Fm, FM = residuals
        bare = self.system.conductors.bare
        return float(
            abs(Fm[self._free[: self.n]].sum()) + abs((FM + np.where(bare, Fm, 0.0))[self._free[self.n :]].sum())
        )

    @cached_property
    def gather(self) -> Any:
        """Sparse (n_free, 2n): all equations to those of the free unknowns.

        On bare metal the recombination current is unknown and enters both equations; their sum takes the place of FM.
        """
        from scipy.sparse import bmat, diags, identity

        bare = self.system.conductors.bare.astype(float)
        one = identity(self.n)
        sums: Any = [[one, None], [diags(bare), one]]
        return (self.spread.T @ bmat(sums)).tocsr()

    def fixed_values(self, x: Unknowns, voltages: Mapping[str, float]) -> Unknowns:
        """x with Δn = 0 on bare metal and contact potentials at ideal contacts."""
        d, f, s = x.d.copy(), x.f.copy(), x.s.copy()
        d[self.system.conductors.bare] = 0.0
        for metal in self.system.conductors.metals:
            if metal.resistivity_ohm_cm2 == 0:
                (s if metal.on_layer else f)[metal.dofs] = voltages[metal.terminal] - voltages[metal.reference]
        return Unknowns(d, f, s)

    def matrix(self, x: Unknowns, slope: NDArray[np.float64]) -> tuple[Any, NDArray[np.float64]]:
        """Jacobian (2n, 2n) in the stacked unknowns, and dF/dV (2n,) for a rise of the forward bias."""
        from scipy.sparse import bmat, diags

        system = self.system
        Kmd, Kmf, KMd, KMf = system.blocks(x)
        layer = system.conductors.layer.astype(float)
        to_density, from_f, on_layer = diags(1 - layer - slope), diags(slope), diags(layer)
        shunt = system.shunt @ on_layer
        rows: Any = [
            [Kmd @ to_density + system.on_s @ on_layer - shunt, Kmf + Kmd @ from_f + shunt],
            [KMd @ to_density + shunt, KMf + KMd @ from_f + system.on_f - shunt],
        ]
        A = bmat(rows).tocsr()
        rise = np.concatenate([Kmd @ slope + shunt @ layer, KMd @ slope - shunt @ layer])
        return A, rise


def newton_bipolar(equations: Equations, start: Unknowns, voltages: Mapping[str, float]) -> BipolarState:
    """Solve at given terminal voltages from a nearby start.

    Parameters
    ----------
    equations : Equations
    start : Unknowns
    voltages : mapping of terminal to float
        In the frame of a p-type base, V.

    Returns
    -------
    BipolarState

    Raises
    ------
    SolverError
        "not converged", "not a number", "singular".
    """
    system, VT = equations.system, equations.system.roles.VT
    x, slope = system.completed(equations.fixed_values(start, voltages), voltages)
    moved, before = np.inf, np.inf
    for step in range(1, LARGEST_STEPS + 1):
        F = np.concatenate(system.residuals(x, voltages))
        if not np.isfinite(F).all():
            raise SolverError("not a number", "The residual is not finite.")
        if not moved < min(KEEP_BELOW_VT * VT, 0.1 * before):  # else the last factors still serve
            A, rise = equations.matrix(x, slope)
            solve = _solver(equations, A)
        change = solve(-(equations.gather @ F))
        before, moved = moved, _largest_potential(equations, change)
        scale = min(1.0, LARGEST_CHANGE_VT * VT / moved) if moved > 0 else 1.0
        previous = x
        x, slope = system.completed(_advanced(equations, x, scale * change), voltages)
        settled = scale == 1.0 and moved < SETTLED_V and _relative(x.d - previous.d, x.d) < SETTLED_V / VT
        if settled:
            return _finished(equations, x, voltages, step, rise, solve)
    raise SolverError("not converged", f"Newton's method did not settle within {LARGEST_STEPS} steps.")


def _finished(
    equations: Equations, x: Unknowns, voltages: Mapping[str, float], step: int, rise: Any, solve: Any
) -> BipolarState:
    """State with its residual brought below the bound."""
    system = equations.system
    for polish in range(POLISHING_STEPS + 1):
        residuals = system.residuals(x, voltages)
        scale = _throughput(system, x, residuals, voltages)
        size = equations.misclosure(residuals) / scale
        if size <= LARGEST_MISCLOSURE or polish == POLISHING_STEPS:
            break
        F = equations.gather @ np.concatenate(residuals)
        x, _ = system.completed(_advanced(equations, x, solve(-F)), voltages)
    tangent = _unstack(system, equations.spread @ solve(-(equations.gather @ rise)))
    return BipolarState(system, dict(voltages), x, Outcome("converged", step, size), equations, tangent)


def _solver(equations: Equations, A: Any) -> Any:
    """Function that solves the reduced equations, rows and columns scaled to one."""
    from scipy.sparse import diags

    reduced = (equations.gather @ A @ equations.spread).tocsr()
    rows = 1 / _largest(reduced, 1)
    reduced = diags(rows) @ reduced
    columns = 1 / _largest(reduced, 0)
    factors = Factorization((reduced @ diags(columns)).tocsr(), scale=False)
    return lambda right: columns * factors.solve(rows * right, refinements=0)  # Newton steps refine anyway


def _largest(matrix: Any, axis: int) -> NDArray[np.float64]:
    size = np.asarray(abs(matrix).max(axis=axis).toarray()).ravel()
    return np.where(size > 0, size, 1.0)


def _unstack(system: BipolarSystem, stacked: NDArray[np.float64]) -> Unknowns:
    n, layer = system.space.size, system.conductors.layer
    y, f = stacked[:n], stacked[n:]
    return Unknowns(np.where(layer, 0.0, y), f, np.where(layer, y, 0.0))


def _advanced(equations: Equations, x: Unknowns, change: NDArray[np.float64]) -> Unknowns:
    moved = _unstack(equations.system, equations.spread @ change)
    return Unknowns(x.d + moved.d, x.f + moved.f, x.s + moved.s)


def _largest_potential(equations: Equations, change: NDArray[np.float64]) -> float:
    moved = _unstack(equations.system, equations.spread @ change)
    return float(max(np.abs(moved.f).max(initial=0.0), np.abs(moved.s).max(initial=0.0)))


def _relative(change: NDArray[np.float64], values: NDArray[np.float64]) -> float:
    return float(np.abs(change).max() / max(np.abs(values).max(), 1e-300))


def _terminal_currents(
    system: BipolarSystem, x: Unknowns, residuals: Any, voltages: Mapping[str, float]
) -> dict[str, float]:
    currents = dict.fromkeys([m.terminal for m in system.conductors.metals], 0.0)
    for metal in system.conductors.metals:
        if metal.resistivity_ohm_cm2 > 0:
            potential = (x.s if metal.on_layer else x.f) - (voltages[metal.terminal] - voltages[metal.reference])
            currents[metal.terminal] += float(metal.load @ potential) / metal.resistivity_ohm_cm2
    for terminal, rows in _ideal_rows(system).items():
        currents[terminal] += ELEMENTARY_CHARGE_C * float(np.concatenate(residuals)[rows].sum())
    return currents


def _ideal_rows(system: BipolarSystem) -> dict[str, NDArray[np.int64]]:
    """Stacked equations whose sum is the current into each terminal's ideal contacts."""
    n, bare = system.space.size, system.conductors.bare
    rows: dict[str, list[Any]] = {}
    for metal in system.conductors.metals:
        if metal.resistivity_ohm_cm2 == 0:
            own = metal.dofs if metal.on_layer else np.concatenate([metal.dofs + n, metal.dofs[bare[metal.dofs]]])
            rows.setdefault(metal.terminal, []).append(own)
    return {terminal: np.unique(np.concatenate(parts)) for terminal, parts in rows.items()}


def _current_slopes(system: BipolarSystem, tangent: Any, residual_slope: Any) -> dict[str, float]:
    moved = _unstack(system, tangent)
    slopes = dict.fromkeys([m.terminal for m in system.conductors.metals], 0.0)
    for metal in system.conductors.metals:
        if metal.resistivity_ohm_cm2 > 0:
            slopes[metal.terminal] += (
                float(metal.load @ (moved.s if metal.on_layer else moved.f)) / metal.resistivity_ohm_cm2
            )
    for terminal, rows in _ideal_rows(system).items():
        slopes[terminal] += ELEMENTARY_CHARGE_C * float(residual_slope[rows].sum())
    return slopes


def _throughput(system: BipolarSystem, x: Unknowns, residuals: Any, voltages: Mapping[str, float]) -> float:
    """The largest of generation, total recombination and terminal current, carriers per second."""
    rates = [*system.bulk_rates(x.d).values(), *system.surface_rates(x.d).values()]
    currents = _terminal_currents(system, x, residuals, voltages).values()
    largest = max([abs(c) for c in currents], default=0.0) / ELEMENTARY_CHARGE_C
    return max(float(np.abs(system.load).sum()), float(np.abs(rates).sum()), largest, 1e-300)
