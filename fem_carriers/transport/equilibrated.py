"""Fluxes in equilibrium with what is generated and recombines, by mixed elements; for bounds (see `enclosure`).

    (σ + Φ, τ)/D + (p, ∇·τ) + ((σ + Φ)·ν, τ·ν)/S = ∮ u τ·ν at sinks;    (∇·σ, q) − (κ p, q) = −(G, q)

with σ the carrier flux less the photon flux Φ, p the density in the cells, in Raviart–Thomas elements with linear
normal components (P.-A. Raviart and J.-M. Thomas, in Mathematical Aspects of Finite Element Methods (1977)).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from .linear import Factorization, Scaled
from .linear_problem import LinearProblem

if TYPE_CHECKING:
    from numpy.typing import NDArray

DEGREE = 8
"""Of the quadrature."""


@dataclass(frozen=True, eq=False)
class Pair:
    """A continuous approximation and its flux in equilibrium.

    Parameters
    ----------
    u : (n,) array
        At the nodes, exact at the sinks.
    flux, multiplier : arrays
        Coefficients of σ and p.
    lit : bool
        Whether the light counts; the adjoint has none.
    at_sinks : mapping of str to float
        u on the surfaces where it is fixed.
    """

    u: NDArray[np.float64]
    flux: NDArray[np.float64]
    multiplier: NDArray[np.float64]
    lit: bool
    at_sinks: dict[str, float]


@dataclass(frozen=True, eq=False)
class MixedProblem:
    """Continuous and mixed approximations of a linear problem.

    Parameters
    ----------
    linear : LinearProblem
    """

    linear: LinearProblem

    @cached_property
    def _bases(self) -> tuple[Any, Any]:
        return flux_bases(self.linear, DEGREE)

    def _side(self, facets: Any) -> Any:
        return flux_side(self.linear, facets, DEGREE)

    @cached_property
    def _matrix(self) -> Any:
        from scipy.sparse import bmat
        from skfem import BilinearForm

        fluxes, scalars = self._bases
        kappa = self.linear.kappa(x_of(fluxes))
        A = BilinearForm(lambda s, t, w: dot(s, t)).assemble(fluxes) / self.linear.D
        for facets in self.linear.recombining:
            side = self._side(facets)
            S = self.linear.srv(facets, x_of(side))
            A = A + BilinearForm(lambda s, t, w: dot(s, w.n) * dot(t, w.n) / w.srv).assemble(side, srv=S)
        B = BilinearForm(lambda s, q, w: s.div * q).assemble(fluxes, scalars)
        C = BilinearForm(lambda p, q, w: w.kappa * p * q).assemble(scalars, kappa=kappa)
        return bmat([[A, B.T], [B, -C]]).tocsr()

    @cached_property
    def _insulated_dofs(self) -> Any:
        fluxes = self._bases[0]
        sides = [fluxes.get_dofs(f.index).all() for f in self.linear.insulated]
        return np.concatenate(sides).astype(np.int64) if sides else np.zeros(0, dtype=np.int64)

    @cached_property
    def _free(self) -> Any:
        return np.setdiff1d(np.arange(self._matrix.shape[0]), self._insulated_dofs)

    @cached_property
    def _factors(self) -> Factorization:
        return Factorization(Scaled(self._matrix[self._free][:, self._free], equilibrate=True))

    def pair(self, at_sinks: dict[str, float], *, lit: bool) -> Pair:
        """u_h by the continuous elements, σ and p by the mixed ones."""
        x = self._prescribed(lit)
        right = self._right(at_sinks, lit) - self._matrix @ x
        x[self._free] = self._factors.solve(right[self._free], refinements=2)
        n = self._bases[0].N
        return Pair(self.linear.solved(at_sinks, lit=lit), x[:n], x[n:], lit, at_sinks)

    def _right(self, at_sinks: dict[str, float], lit: bool) -> NDArray[np.float64]:
        from skfem import LinearForm

        fluxes, scalars = self._bases
        normal = LinearForm(lambda t, w: w.g * dot(t, w.n))
        total = np.zeros(fluxes.N)
        for facets in self.linear.fixed:
            side = self._side(facets)
            total += normal.assemble(side, g=np.full(side.dx.shape, at_sinks[facets.name]))
        if not lit:
            return np.concatenate([total, np.zeros(scalars.N)])
        photons = self.linear.photons(x_of(fluxes))
        total -= LinearForm(lambda t, w: dot(w.photons, t)).assemble(fluxes, photons=photons) / self.linear.D
        for facets in self.linear.recombining:
            side = self._side(facets)
            through = dot(self.linear.photons(x_of(side)), np.asarray(side.normals))
            total -= normal.assemble(side, g=through / self.linear.srv(facets, x_of(side)))
        rate = self.linear.rate(x_of(scalars))
        return np.concatenate([total, -LinearForm(lambda q, w: w.rate * q).assemble(scalars, rate=rate)])

    def _prescribed(self, lit: bool) -> NDArray[np.float64]:
        """σ·ν = −Φ·ν on insulated sides, zero elsewhere."""
        from skfem import BilinearForm, LinearForm

        x = np.zeros(self._matrix.shape[0])
        if not lit:
            return x
        for facets in self.linear.insulated:
            side, dofs = self._side(facets), self._bases[0].get_dofs(facets.index).all()
            through = -dot(self.linear.photons(x_of(side)), np.asarray(side.normals))
            mass = BilinearForm(lambda s, t, w: dot(s, w.n) * dot(t, w.n)).assemble(side)
            right = LinearForm(lambda t, w: w.g * dot(t, w.n)).assemble(side, g=through)
            with Factorization(mass[dofs][:, dofs]) as factors:
                x[dofs] = factors.solve(right[dofs])
        return x


def flux_bases(linear: LinearProblem, degree: int) -> tuple[Any, Any]:
    """scikit-fem bases of σ and of p."""
    from skfem import Basis
    from skfem.element import ElementTriP1DG, ElementTriRT2

    cells = linear.problem.mesh.cells
    return tuple(Basis(cells, e, intorder=degree) for e in (ElementTriRT2(), ElementTriP1DG()))


def flux_side(linear: LinearProblem, facets: Any, degree: int) -> Any:
    """scikit-fem basis of σ on sides."""
    from skfem import FacetBasis
    from skfem.element import ElementTriRT2

    return FacetBasis(linear.problem.mesh.cells, ElementTriRT2(), facets=facets.index, intorder=degree)


def x_of(basis: Any) -> Any:
    """Quadrature points in cm, (2, n_cells or n_facets, n_points)."""
    return np.asarray(basis.global_coordinates())


def dot(a: Any, b: Any) -> Any:
    """Scalar product of vectors along the first axis."""
    return a[0] * b[0] + a[1] * b[1]
