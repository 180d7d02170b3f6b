"""The excess-carrier form: one unknown Δn, assembled as a flux so that the balance closes.

    ∇·Γ + G − R(Δn) = 0,    Γ = D ∇Δn + (J/q) [t(Δn) − t(0)]    or, in low injection,    Γ = D ∇Δn + μ Δn E

    ∫ Γ·∇v + ∫ R v + ∮ U v − ∫ G v = 0    for every test function v

The test functions sum to one, so the sum of all equations is the carrier balance. Where a junction or bare metal fixes
Δn, minus the residual is the current that leaves there.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from .balance import CarrierBalance
from .coefficients import diffusivity
from .drift import Drift

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
        D, dD = diffusivity(values, self.problem.equilibrium)
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
        flux = diffusivity(values, self.problem.equilibrium)[0] * gradients
        if self.drift is not None:
            flux = flux + self.drift.flux(values)
            if self.drift.needs_upwinding:
                flux = flux + self.drift.upwind_flux(gradients)
        return flux
