"""Integrals over one surface as dense products: equal to scikit-fem's forms to round-off, faster where it is small."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, eq=False)
class Skin:
    """Shape functions at the quadrature points of a surface's facets.

    Parameters
    ----------
    dofs : (n_facets, n_local) int array
        Unknowns whose functions do not vanish on the surface.
    shapes : (n_facets, n_local, n_points) array
    dx : (n_facets, n_points) array
        Quadrature weights.
    size : int
        Number of unknowns of the whole space.
    """

    dofs: NDArray[np.int64]
    shapes: NDArray[np.float64]
    dx: NDArray[np.float64]
    size: int

    @classmethod
    def of(cls, basis: Any) -> Skin:
        """From scikit-fem's facet basis."""
        shapes = np.array([np.asarray(b[0]) for b in basis.basis])
        used = np.abs(shapes).max(axis=(1, 2)) > 1e-14
        dofs = np.ascontiguousarray(basis.element_dofs[used].T, dtype=np.int64)
        return cls(dofs, np.ascontiguousarray(shapes[used].transpose(1, 0, 2)), np.asarray(basis.dx), int(basis.N))

    def values(self, u: NDArray[Any]) -> Any:
        """A finite-element function at the quadrature points, (n_facets, n_points)."""
        return (u[self.dofs][:, None] @ self.shapes)[:, 0]

    def load(self, rate: Any) -> NDArray[Any]:
        """∮ rate v, shape (n,); the rate (n_facets, n_points) may be complex."""
        local = (self.shapes @ (rate * self.dx)[:, :, None]).ravel()
        if np.iscomplexobj(local):
            return np.asarray(self._added(local.real) + 1j * self._added(local.imag))
        return self._added(local)

    def _added(self, local: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(np.bincount(self.dofs.ravel(), local, self.size), dtype=float)

    def mass(self, slope: Any) -> tuple[NDArray[np.float64], NDArray[np.int64], NDArray[np.int64]]:
        """∮ slope u v as entries, rows and columns."""
        local = (self.shapes * (slope * self.dx)[:, None]) @ self.shapes.transpose(0, 2, 1)
        rows = np.broadcast_to(self.dofs[:, :, None], local.shape)
        columns = np.broadcast_to(self.dofs[:, None, :], local.shape)
        return local.ravel(), rows.ravel(), columns.ravel()
