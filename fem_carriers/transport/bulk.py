"""Integrals over all cells, fast where cells are affine images of the reference cell.

Each bulk block is one matrix product: (coefficients × metric of the cells) times reference integrals that do not depend
on the mesh, scattered into a fixed sparse pattern. On affine cells (all triangles and tets, parallel quads and
hexahedra) this equals scikit-fem's assembly to round-off; other cells use scikit-fem's.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

CHUNK_BYTES = 2e8
"""Cells are treated in portions, so that intermediate arrays stay below this size."""


@dataclass(frozen=True, eq=False)
class AffineBulk:
    """Quadrature and assembly on affine cells.

    Parameters
    ----------
    numbering : skfem.Basis
        Any basis of the element on the mesh; supplies the numbering of the unknowns.
    quadrature_order : int
        Degree integrated exactly.
    """

    numbering: Any
    quadrature_order: int

    @cached_property
    def _points(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        from skfem.quadrature import get_quadrature

        return get_quadrature(self.numbering.elem.refdom, self.quadrature_order)  # type: ignore[no-any-return]

    @cached_property
    def _reference(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Reference shape functions (n_local, n_points) and gradients (n_local, dimension, n_points)."""
        pairs = [self.numbering.elem.lbasis(self._points[0], i) for i in range(self.dofs.shape[1])]
        ones = np.ones(self._points[1].size)
        return np.array([p[0] * ones for p in pairs]), np.array([np.asarray(p[1]) * ones for p in pairs])

    @property
    def dofs(self) -> NDArray[np.int64]:
        """Unknowns of each cell, shape (n_cells, n_local)."""
        return np.asarray(self.numbering.element_dofs.T)

    @cached_property
    def _map(self) -> tuple[Any, Any, Any]:
        """Inverse Jacobians (n_cells, d, d), |determinants| (n_cells,) and origins (d, n_cells)."""
        origin, jacobian = affine_map(self.numbering.mesh)
        matrices = jacobian.transpose(2, 0, 1)
        return np.linalg.inv(matrices), np.abs(np.linalg.det(matrices)), (origin, jacobian)

    @cached_property
    def x_cm(self) -> Any:
        """Quadrature points, shape (dimension, n_cells, n_points)."""
        origin, jacobian = self._map[2]
        return origin[:, :, None] + np.einsum("dkc,kq->dcq", jacobian, self._points[0])

    @cached_property
    def dx(self) -> Any:
        """Quadrature weights, shape (n_cells, n_points)."""
        return self._map[1][:, None] * self._points[1][None]

    def values(self, u: NDArray[Any]) -> Any:
        """A finite-element function at the quadrature points, shape (n_cells, n_points)."""
        shapes: Any = self._reference[0]
        return u[self.dofs] @ shapes

    def gradients(self, u: NDArray[Any]) -> Any:
        """Its gradient, shape (dimension, n_cells, n_points)."""
        local = np.einsum("ci,ikq->kcq", u[self.dofs], self._reference[1], optimize=True)
        return np.einsum("ckd,kcq->dcq", self._map[0], local, optimize=True)

    def load(self, flux: Any = None, rate: Any = None) -> NDArray[Any]:
        """∫ flux·∇v + rate v, shape (n,); flux (dimension, n_cells, n_points), rate (n_cells, n_points)."""
        local: Any = 0.0
        if rate is not None:
            local = local + (rate * self.dx) @ self._reference[0].T
        if flux is not None:
            mapped = np.einsum("ckd,dcq->kcq", self._map[0], flux, optimize=True) * self.dx
            local = local + np.einsum("kcq,ikq->ci", mapped, self._reference[1], optimize=True)
        total: NDArray[Any] = _bincount(self.dofs.ravel(), local.ravel(), self.numbering.N)
        return total

    def matrix(self, diffusion: Any, carried: Any = None, slope: Any = None, along: Any = None) -> Any:
        """∫ diffusion ∇u·∇v + u carried·∇v + slope u v + (along·∇u)(along·∇v), sparse (n, n).

        Parameters
        ----------
        diffusion, slope : (n_cells, n_points) arrays
        carried, along : (dimension, n_cells, n_points) arrays
        """
        from scipy.sparse import csr_matrix

        slot, columns, starts = self._pattern
        diagonal = along is None and self._is_diagonal
        tables = [self._stiffness_table(diagonal)]
        tables += [self._carry_table] if carried is not None else []
        tables += [self._mass_table] if slope is not None else []
        table = np.concatenate(tables)
        data = np.zeros(columns.size)
        cells = max(1, int(CHUNK_BYTES / (8 * (table.shape[0] + table.shape[1]))))
        for first in range(0, self.dofs.shape[0], cells):
            part = slice(first, first + cells)
            parts = [self._metric_weights(part, diffusion, along, diagonal)]
            parts += [self._carry_weights(part, carried)] if carried is not None else []
            parts += [slope[part] * self._map[1][part, None]] if slope is not None else []
            local = np.concatenate(parts, axis=1) @ table
            data += _bincount(slot[part].ravel(), local.ravel(), columns.size)
        return csr_matrix((data, columns, starts), shape=(self.numbering.N,) * 2)

    @cached_property
    def _is_diagonal(self) -> bool:
        """Whether all cells are parallel to the axes."""
        inverse = self._map[0]
        off = inverse * (1 - np.eye(inverse.shape[1]))
        return bool(np.abs(off).max() <= 1e-13 * np.abs(inverse).max()) and self.numbering.mesh.dim() in (2, 3)

    def _pairs(self, diagonal: bool) -> list[tuple[int, int]]:
        d = self.numbering.mesh.dim()
        return [(i, i) for i in range(d)] + ([] if diagonal else [(i, j) for i in range(d) for j in range(i)])

    def _stiffness_table(self, diagonal: bool) -> Any:
        """Reference products of gradients times weights, shape (n_pairs n_points, n_local²)."""
        g, w = self._reference[1], self._points[1]
        rows = []
        for a, b in self._pairs(diagonal):
            product = np.einsum("iq,jq,q->qij", g[:, a], g[:, b], w)
            rows.append(product if a == b else product + product.transpose(0, 2, 1))
        return np.concatenate(rows).reshape(-1, g.shape[0] ** 2)

    @cached_property
    def _carry_table(self) -> Any:
        values, g = self._reference
        product = np.einsum("ikq,jq,q->kqij", g, values, self._points[1])
        return product.reshape(-1, values.shape[0] ** 2)

    @cached_property
    def _mass_table(self) -> Any:
        values = self._reference[0]
        return np.einsum("iq,jq,q->qij", values, values, self._points[1]).reshape(-1, values.shape[0] ** 2)

    def _metric_weights(self, part: slice, diffusion: Any, along: Any, diagonal: bool) -> Any:
        inverse, size = self._map[0][part], self._map[1][part]
        mapped = None if along is None else np.einsum("ckd,dcq->kcq", inverse, along[:, part])
        columns = []
        for a, b in self._pairs(diagonal):
            metric = np.einsum("cd,cd->c", inverse[:, a], inverse[:, b])
            value = diffusion[part] * metric[:, None]
            columns.append((value if mapped is None else value + mapped[a] * mapped[b]) * size[:, None])
        return np.concatenate(columns, axis=1)

    def _carry_weights(self, part: slice, carried: Any) -> Any:
        mapped = np.einsum("ckd,dcq->ckq", self._map[0][part], carried[:, part]) * self._map[1][part, None, None]
        return mapped.reshape(mapped.shape[0], -1)

    @cached_property
    def _pattern(self) -> tuple[Any, Any, Any]:
        """Slot of every local entry in the CSR data (n_cells, n_local²), column indices, row starts."""
        n, local = self.numbering.N, self.dofs.shape[1]
        rows = np.repeat(self.dofs, local, axis=1).astype(np.int64)
        key = (rows * n + np.tile(self.dofs, (1, local))).ravel()
        unique, slot = np.unique(key, return_inverse=True)
        starts = np.searchsorted(unique // n, np.arange(n + 1))
        return slot.reshape(rows.shape).astype(np.int32), (unique % n).astype(np.int32), starts.astype(np.int32)


@dataclass(frozen=True, eq=False)
class StockBulk:
    """The same by scikit-fem's own assembly, for any cells; see `AffineBulk`."""

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

    def matrix(self, diffusion: Any, carried: Any = None, slope: Any = None, along: Any = None) -> Any:
        """∫ diffusion ∇u·∇v + u carried·∇v + slope u v + (along·∇u)(along·∇v)."""
        from skfem import BilinearForm
        from skfem.helpers import dot, grad

        def integrand(u: Any, v: Any, w: Any) -> Any:
            total = w.diffusion * dot(grad(u), grad(v))
            if carried is not None:
                total = total + u * dot(w.carried, grad(v))
            if slope is not None:
                total = total + w.slope * u * v
            if along is not None:
                total = total + dot(w.along, grad(u)) * dot(w.along, grad(v))
            return total

        given = {"diffusion": diffusion, "carried": carried, "slope": slope, "along": along}
        return BilinearForm(integrand).assemble(self._basis, **{k: v for k, v in given.items() if v is not None})


Bulk = AffineBulk | StockBulk


def make_bulk(numbering: Any, quadrature_order: int) -> Bulk:
    """Fast assembly where every cell is an affine image of the reference cell, scikit-fem's elsewhere."""
    return (AffineBulk if _all_affine(numbering.mesh) else StockBulk)(numbering, quadrature_order)


def affine_map(mesh: Any) -> tuple[Any, Any]:
    """Origins (d, n_cells) and Jacobians (d, d, n_cells) of the affine map closest to each cell."""
    corners = np.vstack([np.ones(mesh.refdom.p.shape[1]), mesh.refdom.p])  # reference corners, with a constant
    fit = np.einsum("dkc,kj->djc", mesh.p[:, mesh.t], np.linalg.pinv(corners))
    return fit[:, 0], fit[:, 1:]


def _all_affine(mesh: Any) -> bool:
    origin, jacobian = affine_map(mesh)
    fitted = origin[:, None] + np.einsum("djc,jk->dkc", jacobian, mesh.refdom.p)
    size = np.ptp(mesh.p[:, mesh.t], axis=1).min(axis=0)
    return bool(
        (np.abs(fitted - mesh.p[:, mesh.t]).max(axis=(0, 1)) <= 1e-9 * size + 1e-15 * np.abs(mesh.p).max()).all()
    )


def _bincount(index: Any, weights: Any, length: int) -> Any:
    if np.iscomplexobj(weights):
        return np.bincount(index, weights.real, length) + 1j * np.bincount(index, weights.imag, length)
    return np.bincount(index, weights, length)
