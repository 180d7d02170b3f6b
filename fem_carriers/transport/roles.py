"""Minority and majority in place of electrons and holes, so that both base types share one set of equations.

Exchanging electrons with holes and the sign of every potential and current turns an n-type base into a p-type one. In
the equations below m is the minority and M the majority density, f = ±φ_M the majority potential, upper sign for a
p-type base; currents are those of a p-type base.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from ..cell.base import Equilibrium


@dataclass(frozen=True)
class Roles:
    """Equilibrium of a base by role.

    Parameters
    ----------
    sign : {1, -1}
        1 for a p-type base. Real potentials and currents are `sign` times the ones here.
    m0, M0, ni : float
        Minority, majority and intrinsic density, cm⁻³.
    mu_m, mu_M : float
        Mobilities, cm²/(V s).
    VT : float
        kT/q, V.
    """

    sign: int
    m0: float
    M0: float
    ni: float
    mu_m: float
    mu_M: float
    VT: float

    @property
    def Dm(self) -> float:
        """Minority diffusivity, cm²/s."""
        return self.mu_m * self.VT

    def diffusion(self, d: Any) -> tuple[Any, Any]:
        """Dm (1 + m/M), which multiplies ∇Δn in the minority flux, and its derivative by Δn; cm²/s."""
        m, M = self.m0 + d, self.M0 + d
        return self.Dm * (1 + m / M), self.Dm * (self.M0 - self.m0) / M**2

    def splitting(self, d: Any) -> Any:
        """Quasi-Fermi splitting VT ln(mM/ni²) in V, from ln(1 + Δn (m0 + M0 + Δn)/ni²); −∞ where nothing is left."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return self.VT * np.log1p(np.maximum(d * (self.m0 + self.M0 + d) / self.ni**2, -1.0))

    def density(self, u: Any) -> tuple[Any, Any]:
        """Δn at a splitting of u volts, and its derivative by u.

        Δn = 2c / (b + √(b² + 4c)), b = m0 + M0, c = ni² expm1(u/VT); dΔn/du = (ni² e^(u/VT) / VT) / √(b² + 4c).
        """
        b = self.m0 + self.M0
        growth = np.exp(np.minimum(u / self.VT, 200.0))
        c = self.ni**2 * np.expm1(np.minimum(u / self.VT, 200.0))
        # near total depletion b² + 4c is (m0 − M0)² + 4 ni² e^(u/VT), a sum of positive terms
        root = np.sqrt((self.M0 - self.m0) ** 2 + 4 * self.ni**2 * growth)
        return 2 * c / (b + root), self.ni**2 * growth / self.VT / root


def roles_of(eq: Equilibrium) -> Roles:
    """Roles of an equilibrium, by the doping type stated (also for an undoped base)."""
    if eq.doping_type == "p":
        return Roles(1, eq.n0, eq.p0, eq.ni, eq.mu_n, eq.mu_p, eq.VT)
    return Roles(-1, eq.p0, eq.n0, eq.ni, eq.mu_p, eq.mu_n, eq.VT)
