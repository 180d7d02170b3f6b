"""Coefficients of the ambipolar flux Γ = D ∇Δn + (J/q) [t(Δn) − t(0)], with their derivatives.

All functions accept arrays of Δn in cm⁻³ (complex too) and return ``(value, derivative)``.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from ..cell.base import Equilibrium


def diffusivity(dn: Any, base: Equilibrium) -> tuple[Any, Any]:
    """Ambipolar diffusivity D = (n + p) / (n/Dp + p/Dn) in cm²/s.

    Low injection gives the minority diffusivity, high injection 2 Dn Dp / (Dn + Dp).
    """
    n, p = base.n0 + dn, base.p0 + dn
    total, weighted = n + p, n / base.Dp + p / base.Dn
    return total / weighted, 2 / weighted - total * (1 / base.Dp + 1 / base.Dn) / weighted**2


def electron_share_excess(dn: Any, base: Equilibrium) -> tuple[Any, Any]:
    """t(Δn) − t(0), with t = μn n / (μn n + μp p) the electrons' share of the drift current.

    Written as μn μp (p0 − n0) Δn / (σ(Δn) σ(0)), free of cancellation.
    """
    sigma_0 = base.mu_n * base.n0 + base.mu_p * base.p0
    sigma = sigma_0 + (base.mu_n + base.mu_p) * dn
    factor = base.mu_n * base.mu_p * (base.p0 - base.n0) / sigma_0
    return factor * dn / sigma, factor * sigma_0 / sigma**2


def minority_mobility_signed(base: Equilibrium) -> float:
    """μ in the low-injection drift term μ Δn E: +μn in a p-type base, −μp in an n-type base, cm²/(V s)."""
    return base.mu_n if base.doping_type == "p" else -base.mu_p
