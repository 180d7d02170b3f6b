"""The excess-carrier form: one unknown Δn, assembled as a flux so that the balance closes.

    ∇·Γ + G − R(Δn) = 0,    Γ = D ∇Δn + (J/q) [t(Δn) − t(0)]    or, in low injection,    Γ = D ∇Δn + μ Δn E

    ∫ Γ·∇v + ∫ R v + ∮ U v − ∫ G v = 0    for every test function v

The test functions sum to one, so the sum of all equations is the carrier balance. Where a junction or bare metal fixes
Δn, minus the residual is the current that leaves there.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from .coefficients import diffusivity
from .drift import Drift
from .generation import Optics, assemble_generation
from .recombination import Channel, Law, bulk_channels, surface_law

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .problem import Problem
    from .spaces import Space


@dataclass(frozen=True, eq=False)
class ExcessSystem:
    """The discrete equations F(Δn) = 0 of one problem.

    Parameters
    ----------
    problem : Problem
    drift : Drift, optional
        A prescribed total current or low-injection field.
    """

    problem: Problem
    drift: Drift | None = None

    @property
    def space(self) -> Space:
        """The finite-element space."""
        return self.problem.space

    @cached_property
    def channels(self) -> list[Channel]:
        """Bulk recombination channels."""
        return bulk_channels(self.problem)

    @cached_property
    def surface_laws(self) -> dict[str, Law]:
        """Recombination law of every surface that has one."""
        found = {}
        for name, surface in self.problem.surfaces.items():
            x = np.asarray(self.space.surfaces[name].global_coordinates())
            law = surface_law(name, surface, self.problem.base, self.problem.equilibrium, x)
            if law is not None:
                found[name] = law
        return found

    @cached_property
    def _generation(self) -> tuple[NDArray[np.float64], Optics]:
        p = self.problem
        return assemble_generation(p.space, p.light, p.lit_planes, p.base, p.cell_area_cm2)

    @property
    def load(self) -> NDArray[np.float64]:
        """∫ G v, 1/s (per cm of depth in 2-D)."""
        return self._generation[0]

    @property
    def optics(self) -> Optics:
        """Where the photons went."""
        return self._generation[1]

    def residual(self, dn: NDArray[Any]) -> NDArray[Any]:
        """F(Δn) = ∫ Γ·∇v + ∫ R v + ∮ U v − ∫ G v, shape (n,); Δn may be complex."""
        bulk = self.space.bulk
        values = bulk.values(dn)
        total = bulk.load(self.flux(values, bulk.gradients(dn)), self.rate(values)[0]) - self.load
        for name, law in self.surface_laws.items():
            basis = self.space.surfaces[name]
            total = total + load_form(dn.dtype).assemble(basis, rate=law(np.asarray(basis.interpolate(dn)))[0])
        return np.asarray(total)

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

    def surface_jacobian(self, dn: NDArray[np.float64]) -> Any:
        """d/dΔn of ∮ U v as a sparse matrix (n, n)."""
        from scipy.sparse import csr_matrix

        total = csr_matrix((self.space.size, self.space.size))
        for name, law in self.surface_laws.items():
            basis = self.space.surfaces[name]
            total = total + mass_matrix(basis, law(np.asarray(basis.interpolate(dn)))[1])
        return total

    def flux(self, values: Any, gradients: Any) -> Any:
        """Γ at the quadrature points, shape (dimension, n_cells, n_points), 1/(cm² s)."""
        flux = diffusivity(values, self.problem.equilibrium)[0] * gradients
        if self.drift is not None:
            flux = flux + self.drift.flux(values)
            if self.drift.needs_upwinding:
                flux = flux + self.drift.upwind_flux(gradients)
        return flux

    def rate(self, values: Any) -> tuple[Any, Any]:
        """R and dR/dΔn at the quadrature points, summed over the channels."""
        rate, slope = np.zeros_like(values), np.zeros_like(values)
        for channel in self.channels:
            r, s = channel.law(values[channel.cells])
            rate[channel.cells] += r
            slope[channel.cells] += s
        return rate, slope

    def bulk_rates(self, dn: NDArray[np.float64]) -> dict[tuple[str, str], float]:
        """∫ R of every channel in every volume, 1/s, keyed by (volume, channel)."""
        values, dx = self.space.bulk.values(dn), self.space.bulk.dx
        return {(c.volume, c.name): float((c.law(values[c.cells])[0] * dx[c.cells]).sum()) for c in self.channels}

    def surface_rates(self, dn: NDArray[np.float64]) -> dict[str, float]:
        """∮ U of every surface with a law, 1/s."""
        found = {}
        for name, law in self.surface_laws.items():
            basis = self.space.surfaces[name]
            found[name] = float((law(np.asarray(basis.interpolate(dn)))[0] * basis.dx).sum())
        return found


def load_form(dtype: Any = float) -> Any:
    """∮ U v."""
    from skfem import LinearForm

    return LinearForm(lambda v, w: w.rate * v, dtype=dtype)


def mass_matrix(basis: Any, slope: Any) -> Any:
    """∮ U′ u v."""
    from skfem import BilinearForm

    return BilinearForm(lambda u, v, w: w.slope * u * v).assemble(basis, slope=slope)
