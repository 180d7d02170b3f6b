"""What every form of the transport equations shares: generation, recombination, and their sums."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from .generation import Optics, assemble_generation
from .perimeter import edge_laws
from .recombination import Channel, Law, bulk_channels, surface_law

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .problem import Problem
    from .spaces import Space


@dataclass(frozen=True, eq=False)
class CarrierBalance:
    """Generation and recombination of one problem at the quadrature points.

    Parameters
    ----------
    problem : Problem
    """

    problem: Problem

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
            varies = callable(surface.J0_fA_per_cm2) or callable(surface.srv_cm_per_s)
            x = np.asarray(self.space.surfaces[name].global_coordinates()) if varies else None
            law = surface_law(name, surface, self.problem.base, self.problem.equilibrium, x)
            if law is not None:
                found[name] = law
        return found

    @cached_property
    def edge_laws(self) -> dict[str, tuple[NDArray[np.float64], Law]]:
        """Weights and law per length of every outer edge that recombines where it cuts a junction."""
        return edge_laws(self.problem)

    @cached_property
    def _generation(self) -> tuple[NDArray[np.float64], Optics]:
        return assemble_generation(self.problem)

    @property
    def load(self) -> NDArray[np.float64]:
        """∫ G v, 1/s (per cm of depth in 2-D)."""
        return self._generation[0]

    @property
    def optics(self) -> Optics:
        """Where the photons went."""
        return self._generation[1]

    def surface_jacobian(self, dn: NDArray[np.float64]) -> Any:
        """d/dΔn of ∮ U v as a sparse matrix (n, n)."""
        from scipy.sparse import csr_matrix, diags

        shape = (self.space.size, self.space.size)
        parts = []
        for name, law in self.surface_laws.items():
            skin = self.space.skins[name]
            parts.append(skin.mass(law(skin.values(dn))[1]))
        total = csr_matrix(shape)
        if parts:
            entries, rows, columns = (np.concatenate(part) for part in zip(*parts, strict=True))
            total = csr_matrix((entries, (rows, columns)), shape=shape)
        for weights, law in self.edge_laws.values():
            total = total + diags(weights * law(dn)[1])
        return total

    def surface_load(self, dn: NDArray[Any]) -> NDArray[Any]:
        """∮ U v, shape (n,); Δn may be complex."""
        total = np.zeros(self.space.size, dtype=dn.dtype)
        for name, law in self.surface_laws.items():
            skin = self.space.skins[name]
            total = total + skin.load(law(skin.values(dn))[0])
        for weights, law in self.edge_laws.values():
            total = total + weights * law(dn)[0]
        return np.asarray(total)

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
        """∮ U of every surface and edge with a law, 1/s."""
        found = {}
        for name, law in self.surface_laws.items():
            skin = self.space.skins[name]
            found[name] = float((law(skin.values(dn))[0] * skin.dx).sum())
        for name, (weights, law) in self.edge_laws.items():
            found[f"{name}: edge"] = float(weights @ law(dn)[0])
        return found


def load_form(dtype: Any = float) -> Any:
    """∮ U v."""
    from skfem import LinearForm

    return LinearForm(lambda v, w: w.rate * v, dtype=dtype)


def mass_matrix(basis: Any, slope: Any) -> Any:
    """∮ U′ u v."""
    from skfem import BilinearForm

    return BilinearForm(lambda u, v, w: w.slope * u * v).assemble(basis, slope=slope)
