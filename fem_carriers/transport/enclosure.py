"""Two-sided bounds of a collected current by fluxes in equilibrium, for linear and symmetric equations in 2-D.

With u the excess density and φ the adjoint of a terminal (1 there, 0 at other sinks, no generation), u_h and φ_h any
continuous approximations with the exact values at the sinks, and a(u, v) = ∫ D ∇u·∇v + κ u v + ∮ S u v, the collected
current is

    I = ℓ(φ_h) − a(u_h, φ_h) + a(u − u_h, φ − φ_h),    ℓ(v) = ∫ G v

For fluxes σ with ∇·σ = κ p − G, and σ·ν = 0 on insulated sides, the vectors

    r = ( (σ − D ∇u_h)/√D,  √κ (p − u_h),  (σ·ν + S u_h)/√S on recombining sides )

obey |u − u_h|² + |σ − σ_exact|² = |r|² (W. Prager and J. L. Synge, Q. Appl. Math. 5, 241 (1947); with reaction and
surface terms S. Repin, A Posteriori Estimates for Partial Differential Equations (2008), chapter 3). The parallelogram
identity then gives

    | I − ℓ(φ_h) + a(u_h, φ_h) − (r_u, r_φ)/2 | ≤ |r_u| |r_φ| / 2

The light enters as its photon flux Φ, G = −∇·Φ: σ stands for the carrier flux less Φ, and Φ needs no approximation.
σ and p solve a mixed problem (`equilibrated`), which makes |r| smallest. What of G − κ p is not linear in a cell acts
through its oscillation, bounded by the cell's diameter over π (L. E. Payne and H. F. Weinberger, Arch. Ration. Mech.
Anal. 5, 286 (1960)).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from .equilibrated import DEGREE, MixedProblem, Pair, dot, flux_bases, flux_side, x_of
from .linear_problem import LinearProblem

if TYPE_CHECKING:
    from numpy.typing import NDArray

DEGREES = (DEGREE, 14)
"""Of the quadrature; the difference between the two widens the interval."""
ROUND_OFF = 1e-12
"""Share of the largest term by which the interval is widened."""


@dataclass(frozen=True)
class Interval:
    """Middle and half width of what a terminal collects, 1/s (per cm of depth)."""

    middle: float
    half_width: float


def enclose(linear: LinearProblem, at_sinks: dict[str, float], on_terminal: dict[str, float]) -> Interval:
    """Enclose the carriers per second that leave at a terminal.

    Parameters
    ----------
    linear : LinearProblem
    at_sinks : mapping of str to float
        Δn on every surface where it is fixed.
    on_terminal : mapping of str to float
        1 on the terminal's own surfaces, 0 on the others.

    Returns
    -------
    Interval
        Of the exact solution for this light, to exact integrals; these are taken with two quadratures, whose difference
        is added, as is an allowance for round-off.
    """
    mixed = MixedProblem(linear)
    primal, adjoint = mixed.pair(at_sinks, lit=True), mixed.pair(on_terminal, lit=False)
    coarse, fine = (_interval(linear, primal, adjoint, degree) for degree in DEGREES)
    unsure = abs(fine.middle - coarse.middle) + abs(fine.half_width - coarse.half_width)
    return Interval(fine.middle, fine.half_width + unsure)


@dataclass(frozen=True, eq=False)
class Residual:
    """r of one pair at the quadrature points, with what the identities leave over.

    Parameters
    ----------
    parts : list of (values, weights)
        Components of r and the quadrature weights that go with them.
    oscillation : float
        Bound of the energy norm of what the data hold beyond linear functions in the cells.
    defect : float
        ∫ |∇·σ − κ p + G| beyond that, which is round-off.
    """

    parts: list[tuple[Any, Any]]
    oscillation: float
    defect: float

    def times(self, other: Residual) -> float:
        """(r, r′)."""
        return float(sum((a * b * w).sum() for (a, w), (b, _) in zip(self.parts, other.parts, strict=True)))


def _interval(linear: LinearProblem, primal: Pair, adjoint: Pair, degree: int) -> Interval:
    lines = _Lines(linear, degree)
    r_u, r_phi = lines.residual(primal), lines.residual(adjoint)
    norms = [np.sqrt(r.times(r)) for r in (r_u, r_phi)]
    first, size = lines.first_estimate(primal, adjoint)
    half = 0.5 * norms[0] * norms[1] + r_u.oscillation * norms[1] + norms[0] * r_phi.oscillation
    half += r_u.oscillation * r_phi.oscillation
    # |φ| ≤ 1 bounds what a defect of σ_u can do; |u| is taken as that of u_h
    half += 2 * (r_u.defect * np.abs(adjoint.u).max() + r_phi.defect * np.abs(primal.u).max()) + ROUND_OFF * size
    return Interval(first + 0.5 * r_u.times(r_phi), float(half))


@dataclass(frozen=True, eq=False)
class _Lines:
    """Everything at the quadrature points of one degree."""

    linear: LinearProblem
    degree: int

    @cached_property
    def _nodal(self) -> Any:
        from skfem import Basis

        space = self.linear.problem.space
        return Basis(space.mesh.cells, space.element, intorder=self.degree)

    @cached_property
    def _bases(self) -> tuple[Any, Any]:
        return flux_bases(self.linear, self.degree)

    @cached_property
    def _at(self) -> Any:
        return x_of(self._nodal)

    def _photons(self, pair: Pair) -> Any:
        return self.linear.photons(self._at) if pair.lit else np.zeros_like(self._at)

    def _rate(self, pair: Pair) -> Any:
        return self.linear.rate(self._at) if pair.lit else np.zeros(self._at.shape[1:])

    @cached_property
    def _project(self) -> Callable[[Any], Any]:
        """Projection of values (n_cells, n_points) onto linear functions of each cell."""
        points, weights = self._nodal.X, self._nodal.W
        shapes = np.vstack([np.ones(weights.size), points])
        inverse = np.linalg.inv((shapes * weights) @ shapes.T)
        onto = (shapes * weights).T @ inverse @ shapes
        return lambda values: values @ onto

    def residual(self, pair: Pair) -> Residual:
        """r, oscillation and defect of one pair."""
        (fluxes, scalars), dx, D = self._bases, self._nodal.dx, self.linear.D
        sigma, p, u = (
            fluxes.interpolate(pair.flux),
            scalars.interpolate(pair.multiplier),
            self._nodal.interpolate(pair.u),
        )
        kappa = self.linear.kappa(self._at)
        along = np.asarray(sigma) + self._photons(pair) - D * np.asarray(u.grad)
        parts = [(along[0] / np.sqrt(D), dx), (along[1] / np.sqrt(D), dx), (np.sqrt(kappa) * (p - u), dx)]
        source = self._rate(pair) - kappa * np.asarray(p)
        smooth = self._project(source)
        diameter = cell_diameters(self.linear.problem.mesh.cells)[:, None]
        oscillation = np.sqrt((((source - smooth) * diameter / np.pi) ** 2 * dx).sum() / D)
        defect = (np.abs(np.asarray(sigma.div) + smooth) * dx).sum()
        return Residual(parts + self._side_parts(pair), float(oscillation), float(defect))

    def _side_parts(self, pair: Pair) -> list[tuple[Any, Any]]:
        """(σ·ν + S u_h)/√S on recombining sides."""
        found = []
        for facets in self.linear.recombining:
            side, x, S, u = self._on_side(facets, pair.u)
            sigma = np.asarray(side.interpolate(pair.flux)) + (self.linear.photons(x) if pair.lit else 0.0)
            through = dot(sigma, np.asarray(side.normals))
            found.append(((through + S * u) / np.sqrt(S), side.dx))
        return found

    def _on_side(self, facets: Any, u: Any) -> tuple[Any, Any, Any, Any]:
        side = flux_side(self.linear, facets, self.degree)
        x = x_of(side)
        values = self.linear.problem.space.facets(facets.index, self.degree).interpolate(u)
        return side, x, self.linear.srv(facets, x), np.asarray(values)

    def first_estimate(self, primal: Pair, adjoint: Pair) -> tuple[float, float]:
        """ℓ(φ_h) − a(u_h, φ_h), and the sum of the sizes of its terms."""
        u, phi, dx = self._nodal.interpolate(primal.u), self._nodal.interpolate(adjoint.u), self._nodal.dx
        grad_u, grad_phi = np.asarray(u.grad), np.asarray(phi.grad)
        terms = [self._rate(primal) * phi, dot(self._photons(primal), grad_phi)]
        terms += [-self.linear.D * dot(grad_u, grad_phi), -self.linear.kappa(self._at) * u * phi]
        integrals = [(np.asarray(t) * dx) for t in terms]
        for facets in self.linear.sides:
            side, x, S, u_side = self._on_side(facets, primal.u)
            phi_side = self._on_side(facets, adjoint.u)[3]
            through = dot(self.linear.photons(x), np.asarray(side.normals))
            integrals.append(-(through + S * u_side) * phi_side * side.dx)
        return float(sum(i.sum() for i in integrals)), float(sum(np.abs(i).sum() for i in integrals))


def cell_diameters(cells: Any) -> NDArray[np.float64]:
    """Longest side of every triangle, cm."""
    corners = cells.p[:, cells.t]
    return np.asarray(np.linalg.norm(corners - np.roll(corners, 1, axis=1), axis=0).max(axis=0))
