"""Integrals over all cells by scikit-fem's own assembly: the reference for the fast one."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, eq=False)
class StockBulk:
    """Quadrature and assembly on any cells; the same methods as `TensorBulk`, slower.

    Parameters
    ----------
    numbering : skfem.Basis
    quadrature_order : int
    """

    numbering: Any
    quadrature_order: int

    @cached_property
    def _basis(self) -> Any:
        from skfem import Basis

        return Basis(self.numbering.mesh, self.numbering.elem, intorder=self.quadrature_order)

    @property
    def x_cm(self) -> Any:
        """Quadrature points, shape (dimension, n_cells, n_points)."""
        return np.asarray(self._basis.global_coordinates())

    @property
    def dx(self) -> Any:
        """Quadrature weights, shape (n_cells, n_points)."""
        return np.asarray(self._basis.dx)

    def values(self, u: NDArray[Any]) -> Any:
        """A finite-element function at the quadrature points."""
        return np.asarray(self._basis.interpolate(u))

    def gradients(self, u: NDArray[Any]) -> Any:
        """Its gradient."""
        return self._basis.interpolate(u).grad

    def load(self, flux: Any = None, rate: Any = None) -> NDArray[Any]:
        """∫ flux·∇v + rate v."""
        from skfem import LinearForm
        from skfem.helpers import dot, grad

        flux = np.zeros_like(self.x_cm) if flux is None else flux
        rate = np.zeros_like(self.dx) if rate is None else rate
        form = LinearForm(lambda v, w: dot(w.flux, grad(v)) + w.rate * v, dtype=np.result_type(flux, rate))
        return np.asarray(form.assemble(self._basis, flux=flux, rate=rate))

    def matrix(self, diffusion: Any = None, carried: Any = None, slope: Any = None, along: Any = None) -> Any:
        """∫ diffusion ∇u·∇v + u carried·∇v + slope u v + (along·∇u)(along·∇v)."""
        from skfem import BilinearForm
        from skfem.helpers import dot, grad

        def integrand(u: Any, v: Any, w: Any) -> Any:
            total = 0.0
            if diffusion is not None:
                total = total + w.diffusion * dot(grad(u), grad(v))
            if carried is not None:
                total = total + u * dot(w.carried, grad(v))
            if slope is not None:
                total = total + w.slope * u * v
            if along is not None:
                total = total + dot(w.along, grad(u)) * dot(w.along, grad(v))
            return total

        given = {"diffusion": diffusion, "carried": carried, "slope": slope, "along": along}
        return BilinearForm(integrand).assemble(self._basis, **{k: v for k, v in given.items() if v is not None})
