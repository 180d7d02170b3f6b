"""Integrals over all cells, as dense matrix products.

A local matrix is a sum over quadrature points of coefficients times products of reference shape functions, which do not
depend on the mesh. So the local matrices of many cells are one matrix product, (coefficients × metric of the cells,
n_cells × 6 n_points) @ (reference products, 6 n_points × n_local²), added into a fixed sparse pattern. On affine cells
(all triangles and tets, parallel quads and hexahedra) the metric is one matrix per cell, on bent quads and hexahedra
one per quadrature point. Both equal scikit-fem's assembly (`StockBulk`) to round-off.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache, cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from .cell_maps import affine_map as affine_map
from .cell_maps import all_affine, shape_functions
from .pattern import Pattern
from .stock_bulk import StockBulk as StockBulk

if TYPE_CHECKING:
    from numpy.typing import NDArray

CHUNK_BYTES = 4e6
"""Cells are treated in portions, so that intermediate arrays stay below this size."""


@dataclass(frozen=True, eq=False)
class TensorBulk(ABC):
    """Quadrature and assembly; subclasses supply the map from the reference cell.

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
        return shape_functions(self.numbering.elem, self._points[0], self.dofs.shape[1])

    @cached_property
    def dofs(self) -> NDArray[np.int64]:
        """Unknowns of each cell, shape (n_cells, n_local)."""
        return np.ascontiguousarray(self.numbering.element_dofs.T)

    @property
    @abstractmethod
    def x_cm(self) -> Any:
        """Quadrature points, shape (dimension, n_cells, n_points)."""

    @property
    @abstractmethod
    def _inverse(self) -> Any:
        """Inverse Jacobians of the map, [k, d, cell, point]; the last axis has length 1 where they are constant."""

    @property
    @abstractmethod
    def _size(self) -> Any:
        """|determinants| of the Jacobians, [cell, point]; the last axis as in `_inverse`."""

    @cached_property
    def dx(self) -> Any:
        """Quadrature weights, shape (n_cells, n_points)."""
        return self._size * self._points[1]

    def values(self, u: NDArray[Any]) -> Any:
        """A finite-element function at the quadrature points, shape (n_cells, n_points)."""
        shapes: Any = self._reference[0]
        return u[self.dofs] @ shapes

    def gradients(self, u: NDArray[Any]) -> Any:
        """Its gradient, shape (dimension, n_cells, n_points)."""
        result = np.empty((self.dimension, *self.dx.shape), dtype=u.dtype)
        for part in self._portions(self.dofs.shape[1] * self.dimension):
            local = u[self.dofs[part]]
            along = [local @ self._reference[1][:, k] for k in range(self.dimension)]
            for d in range(self.dimension):
                result[d, part] = sum(self._inverse[k, d, part] * along[k] for k in range(self.dimension))
        return result

    def load(self, flux: Any = None, rate: Any = None) -> NDArray[Any]:
        """∫ flux·∇v + rate v, shape (n,); flux (dimension, n_cells, n_points), rate (n_cells, n_points)."""
        kind = np.result_type(*[a for a in (flux, rate) if a is not None], np.float64)
        total: NDArray[Any] = np.zeros(self.numbering.N, dtype=kind)
        for part in self._portions(self.dofs.shape[1] + self.dimension * self.dx.shape[1]):
            local: Any = 0.0
            if rate is not None:
                local = local + (rate[part] * self.dx[part]) @ self._reference[0].T
            if flux is not None:
                for k, along in enumerate(self._pulled(part, flux)):
                    local = local + (along * self.dx[part]) @ self._reference[1][:, k].T
            total += _bincount(self.dofs[part].ravel(), local.ravel(), total.size)
        return total

    def matrix(self, diffusion: Any = None, carried: Any = None, slope: Any = None, along: Any = None) -> Any:
        """∫ diffusion ∇u·∇v + u carried·∇v + slope u v + (along·∇u)(along·∇v), sparse (n, n); absent terms are zero.

        Parameters
        ----------
        diffusion, slope : (n_cells, n_points) arrays
        carried, along : (dimension, n_cells, n_points) arrays
        """
        pairs = self._pairs(along is None and self._is_diagonal)
        stiff = diffusion is not None or along is not None
        tables = [self._stiffness_table(pairs)] if stiff else []
        tables += [self._carry_table] if carried is not None else []
        tables += [self._mass_table] if slope is not None else []
        table = np.concatenate(tables)
        data = np.zeros(self.pattern.entries)
        with one_thread():
            for part in self._portions(sum(table.shape)):
                parts = self._metric_weights(part, diffusion, along, pairs) if stiff else []
                parts += [c * self._size[part] for c in self._pulled(part, carried)] if carried is not None else []
                parts += [slope[part] * self._size[part]] if slope is not None else []
                self.pattern.add(data, part, np.concatenate(parts, axis=1) @ table)
        return self.pattern.matrix(data)

    @cached_property
    def pattern(self) -> Pattern:
        """Where local matrices go."""
        return Pattern(self.dofs, self.numbering.N)

    @property
    def dimension(self) -> int:
        """2 or 3."""
        return int(self.numbering.mesh.dim())

    def _portions(self, numbers_per_cell: int) -> Iterator[slice]:
        cells = max(1, int(CHUNK_BYTES / (8 * numbers_per_cell)))
        for first in range(0, self.dofs.shape[0], cells):
            yield slice(first, min(first + cells, self.dofs.shape[0]))

    def _pulled(self, part: slice, vector: Any) -> list[Any]:
        """Reference components of a vector that is tested with ∇v, each (n_part, n_points)."""
        axes = range(self.dimension)
        return [sum(self._inverse[k, d, part] * vector[d, part] for d in axes) for k in axes]

    def _metric_weights(self, part: slice, diffusion: Any, along: Any, pairs: list[tuple[int, int]]) -> list[Any]:
        """(diffusion (∇x̂_a·∇x̂_b) + along_a along_b) |det|, each (n_part, n_points or their `_few`)."""
        inverse, size, few = self._inverse[:, :, part], self._size[part], self._few
        mapped = None if along is None else self._pulled(part, along)
        D = None if diffusion is None else diffusion[part] if few is None else diffusion[part] @ few
        weights = []
        for a, b in pairs:
            value: Any = 0.0
            if D is not None:
                value = D * (size * sum(inverse[a, d] * inverse[b, d] for d in range(self.dimension)))
            if mapped is not None:
                product = mapped[a] * mapped[b] * size
                value = value + (product if few is None else product @ few)
            weights.append(value)
        return weights

    @cached_property
    def _is_diagonal(self) -> bool:
        """Whether all cells are parallel to the axes."""
        largest = np.abs(self._inverse).max(axis=(2, 3))
        return bool((largest * (1 - np.eye(self.dimension))).max() <= 1e-13 * largest.max())

    def _pairs(self, diagonal: bool) -> list[tuple[int, int]]:
        d = self.dimension
        return [(i, i) for i in range(d)] + ([] if diagonal else [(i, j) for i in range(d) for j in range(i)])

    def _stiffness_table(self, pairs: list[tuple[int, int]]) -> Any:
        """Reference products of gradients times weights, shape (n_pairs n_points, n_local²), points or their `_few`."""
        few = self._few
        rows = [self._gradient_products(a, b) for a, b in pairs]
        return np.concatenate(rows if few is None else [few.T @ r for r in rows])

    def _gradient_products(self, a: int, b: int) -> Any:
        g, w = self._reference[1], self._points[1]
        product = np.einsum("iq,jq,q->qij", g[:, a], g[:, b], w)
        both = product if a == b else product + product.transpose(0, 2, 1)
        return both.reshape(w.size, -1)

    @property
    def _few(self) -> Any:
        """Fewer combinations of points that serve for gradients; None: the points themselves."""
        return None

    @cached_property
    def _carry_table(self) -> Any:
        values, g = self._reference
        product = np.einsum("ikq,jq,q->kqij", g, values, self._points[1])
        return product.reshape(-1, values.shape[0] ** 2)

    @cached_property
    def _mass_table(self) -> Any:
        values = self._reference[0]
        return np.einsum("iq,jq,q->qij", values, values, self._points[1]).reshape(-1, values.shape[0] ** 2)


class AffineBulk(TensorBulk):
    """On cells that are affine images of the reference cell."""

    @cached_property
    def _affine(self) -> tuple[Any, Any]:
        return affine_map(self.numbering.mesh)

    @property
    def x_cm(self) -> Any:
        """Quadrature points, shape (dimension, n_cells, n_points)."""
        origin, jacobian = self._affine
        return origin[:, :, None] + np.einsum("dkc,kq->dcq", jacobian, self._points[0])

    @cached_property
    def _inverse(self) -> Any:
        inverse = np.linalg.inv(self._affine[1].transpose(2, 0, 1))
        return np.ascontiguousarray(inverse.transpose(1, 2, 0))[..., None]

    @cached_property
    def _size(self) -> Any:
        return np.abs(np.linalg.det(self._affine[1].transpose(2, 0, 1)))[:, None]

    @cached_property
    def _few(self) -> Any:
        """Orthonormal columns (n_points, rank) that span the products of gradients, if fewer than the points.

        On simplices these products are polynomials of low degree (10 of them for quadratic tets, at 24 points), and
        the coefficient enters only through its moments with them.
        """
        pairs = self._pairs(False)
        left, size, _ = np.linalg.svd(
            np.concatenate([self._gradient_products(a, b) for a, b in pairs], axis=1), full_matrices=False
        )
        rank = int((size > 1e-13 * size[0]).sum())
        return np.ascontiguousarray(left[:, :rank]) if rank < left.shape[0] else None


class MappedBulk(TensorBulk):
    """On quads and hexahedra of any shape: the map is bi- or trilinear, its metric differs from point to point."""

    @cached_property
    def _corners(self) -> Any:
        """Corner coordinates (dimension, n_cells, n_corners)."""
        return self.numbering.mesh.p[:, self.numbering.mesh.t].transpose(0, 2, 1)

    @cached_property
    def _corner_functions(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        return shape_functions(self.numbering.mesh.elem(), self._points[0], self._corners.shape[2])

    @property
    def x_cm(self) -> Any:
        """Quadrature points, shape (dimension, n_cells, n_points)."""
        return self._corners @ self._corner_functions[0]

    @cached_property
    def _map(self) -> tuple[Any, Any]:
        gradients = self._corner_functions[1].transpose(1, 0, 2)
        jacobian = np.einsum("dci,kiq->cqdk", self._corners, gradients, optimize=True)
        inverse = np.ascontiguousarray(np.linalg.inv(jacobian).transpose(2, 3, 0, 1))
        return inverse, np.abs(np.linalg.det(jacobian))

    @property
    def _inverse(self) -> Any:
        return self._map[0]

    @property
    def _size(self) -> Any:
        return self._map[1]


Bulk = TensorBulk | StockBulk


def make_bulk(numbering: Any, quadrature_order: int) -> Bulk:
    """One metric per cell where every cell is an affine image of the reference cell, one per point elsewhere."""
    return (AffineBulk if all_affine(numbering.mesh) else MappedBulk)(numbering, quadrature_order)


def one_thread() -> Any:
    """Context in which NumPy's products run on one thread: portions are too small to gain from more."""
    return _thread_pools().limit(limits=1, user_api="blas")


@cache
def _thread_pools() -> Any:
    from threadpoolctl import ThreadpoolController

    return ThreadpoolController()


def _bincount(index: Any, weights: Any, length: int) -> Any:
    if np.iscomplexobj(weights):
        return np.bincount(index, weights.real, length) + 1j * np.bincount(index, weights.imag, length)
    return np.bincount(index, weights, length)
