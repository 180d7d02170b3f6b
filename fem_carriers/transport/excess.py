"""The excess-carrier form: one unknown Δn, assembled as a flux so that the balance closes.

    ∇·Γ + G − R(Δn) = 0,    Γ = D ∇Δn + (J/q) [t(Δn) − t(0)]    or, in low injection,    Γ = D ∇Δn + μ Δn E

    ∫ Γ·∇v + ∫ R v + ∮ U v − ∫ G v = 0    for every test function v

The test functions sum to one, so the sum of all equations is the carrier balance. Where a junction or bare metal fixes
Δn, minus the residual is the current that leaves there.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from .balance import CarrierBalance
from .coefficients import diffusivity
from .drift import Drift
from .recombination import Channel, Law, bulk_channels

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, eq=False)
class ExcessSystem(CarrierBalance):
    """The discrete equations F(Δn) = 0 of one problem.

    Parameters
    ----------
    problem : Problem
    drift : Drift, optional
        A prescribed total current or low-injection field.
    """

    drift: Drift | None = None

    @property
    def lowest(self) -> float:
        """Δn where one carrier is exhausted. Iterates and coarse meshes go below; laws have their poles there."""
        return -min(self.problem.equilibrium.n0, self.problem.equilibrium.p0)

    @cached_property
    def channels(self) -> list[Channel]:
        """Bulk recombination channels, linear below `lowest`."""
        return [replace(c, law=continued(c.law, self.lowest)) for c in bulk_channels(self.problem)]

    @cached_property
    def surface_laws(self) -> dict[str, Law]:
        """Recombination laws of the surfaces, linear below `lowest`."""
        return {name: continued(law, self.lowest) for name, law in super().surface_laws.items()}

    @cached_property
    def edge_laws(self) -> dict[str, tuple[NDArray[np.float64], Law]]:
        """Laws of the edges, linear below `lowest`."""
        return {n: (weights, continued(law, self.lowest)) for n, (weights, law) in super().edge_laws.items()}

    def diffusivity(self, values: Any) -> tuple[Any, Any]:
        """D and dD/dΔn, constant below `lowest`."""
        inside = np.real(values) > self.lowest
        D, slope = diffusivity(np.where(inside, values, self.lowest), self.problem.equilibrium)
        return D, np.where(inside, slope, 0.0)

    def residual(self, dn: NDArray[Any], level: float = 0.0) -> NDArray[Any]:
        """F(level + Δn) = ∫ Γ·∇v + ∫ R v + ∮ U v − ∫ G v, shape (n,); Δn may be complex.

        Only Δn is differentiated, so that a density which is nearly uniform loses no digits to its `level`.
        """
        bulk = self.space.bulk
        values = level + bulk.values(dn)
        total = bulk.load(self.flux(values, bulk.gradients(dn)), self.rate(values)[0])
        return np.asarray(total + self.surface_load(level + dn) - self.load)

    def jacobian(self, dn: NDArray[np.float64]) -> Any:
        """dF/dΔn as a sparse matrix (n, n): ∫ (D ∇u + u ∂Γ/∂Δn)·∇v + ∫ R′ u v + ∮ U′ u v."""
        bulk = self.space.bulk
        values = bulk.values(dn)
        D, dD = self.diffusivity(values)
        carried = None if self._constant_diffusivity else dD * bulk.gradients(dn)
        along = None
        if self.drift is not None:
            carried = self.drift.slope(values) + (0.0 if carried is None else carried)
            along = self.drift.upwind if self.drift.needs_upwinding else None
        return bulk.matrix(D, carried, self.rate(values)[1], along) + self.surface_jacobian(dn)

    @property
    def _constant_diffusivity(self) -> bool:
        """Equal diffusivities of electrons and holes give a constant D."""
        eq = self.problem.equilibrium
        return abs(eq.Dn - eq.Dp) <= 1e-14 * eq.Dn

    def flux(self, values: Any, gradients: Any) -> Any:
        """Γ at the quadrature points, shape (dimension, n_cells, n_points), 1/(cm² s)."""
        flux = self.diffusivity(values)[0] * gradients
        if self.drift is not None:
            flux = flux + self.drift.flux(values)
            if self.drift.needs_upwinding:
                flux = flux + self.drift.upwind_flux(gradients)
        return flux


def continued(law: Law, lowest: float) -> Law:
    """The law, continued by its tangent below a density."""

    def continued_law(dn: Any) -> tuple[Any, Any]:
        inside = np.where(np.real(dn) > lowest, dn, lowest)
        rate, slope = law(inside)
        return rate + slope * (dn - inside), slope

    return continued_law
