"""The equations of one Newton step of the bipolar form: free unknowns, Jacobian, scaled solution."""

from __future__ import annotations

import weakref
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from .bipolar import BipolarSystem, Unknowns
from .solver import LinearSolver, two_carrier_solver

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, eq=False)
class Equations:
    """Which unknowns are free, and the linear algebra of one Newton step.

    Unknowns are stacked: first s on layers and Δn elsewhere, then f.

    Parameters
    ----------
    system : BipolarSystem
    keeper : weak reference to LinearSolver, optional
        Weak, so that a solution that is kept does not keep the factors of its equations.
    """

    system: BipolarSystem
    keeper: weakref.ref[LinearSolver] | None = None

    @property
    def solver(self) -> LinearSolver:
        """Solver of the steps; it keeps factors for as long as whoever made it lives."""
        return (self.keeper and self.keeper()) or two_carrier_solver(self.system.space, lambda: self.spread)

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


def step_solver(equations: Equations, A: Any) -> Callable[..., NDArray[np.float64]]:
    """Function (right, tolerance) that solves the reduced equations."""
    return equations.solver.prepare(equations.gather @ A @ equations.spread).solve


def unstack(system: BipolarSystem, stacked: NDArray[np.float64]) -> Unknowns:
    """Changes of (d, f, s) from the stacked unknowns."""
    n, layer = system.space.size, system.conductors.layer
    y, f = stacked[:n], stacked[n:]
    return Unknowns(np.where(layer, 0.0, y), f, np.where(layer, y, 0.0))
