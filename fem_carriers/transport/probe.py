"""Finite-element functions at many points: direct look-up on grids of boxes, a walk through any other mesh."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from .bulk import affine_map
from .locate import Locator

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .spaces import Space

CHUNK = 100_000
SAME = 1e-9
"""Coordinates closer than this share of the mesh are one."""


@dataclass(frozen=True, eq=False)
class Probe:
    """Values of nodal vectors at points inside the mesh.

    Parameters
    ----------
    space : Space
    """

    space: Space

    def values(self, nodal: NDArray[np.float64], x_cm: NDArray[np.float64]) -> NDArray[np.float64]:
        """Values at points (dimension, n) in cm.

        Raises
        ------
        ValueError
            A point outside of the mesh.
        """
        low, high = self.space.mesh.cells.p.min(axis=1), self.space.mesh.cells.p.max(axis=1)
        margin = 1e-9 * (high - low)
        inner = np.clip(x_cm, (low + margin)[:, None], (high - margin)[:, None])
        parts = [self._values(nodal, inner[:, i : i + CHUNK]) for i in range(0, inner.shape[1], CHUNK)]
        return np.concatenate(parts) if parts else np.zeros(0)

    def _values(self, nodal: NDArray[np.float64], x: NDArray[np.float64]) -> NDArray[np.float64]:
        cell, local = self._walked(x) if self.table is None else self._on_grid(x)
        element, dofs = self.space.element, self.space.numbering.element_dofs[:, cell]
        return np.asarray(sum(element.lbasis(local, i)[0] * nodal[dofs[i]] for i in range(dofs.shape[0])))

    @cached_property
    def _locator(self) -> Locator:
        return Locator(self.space.mesh.cells)

    def _walked(self, x: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        """Cell and reference coordinates of every point."""
        cell = self._locator.cell_of(x)
        if self.space.mesh.kind in ("triangle", "tetra"):
            origin, inverse = self._maps
            return cell, np.einsum("cij,jc->ic", inverse[cell], x - origin[:, cell])
        return cell, np.asarray(self.space.numbering.mapping.invF(x[:, :, None], tind=cell))[:, :, 0]

    def _on_grid(self, x: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        """Cell and reference coordinates of every point."""
        assert self.table is not None
        index = tuple(np.searchsorted(a, row) - 1 for a, row in zip(self.axes, x, strict=True))
        cell = self.table[index]
        origin, inverse = self._maps
        return cell, np.einsum("cij,jc->ic", inverse[cell], x - origin[:, cell])

    @cached_property
    def axes(self) -> list[NDArray[np.float64]]:
        """Coordinates of the vertices along every axis, each once."""
        size = np.ptp(self.space.mesh.cells.p)
        return [_apart(np.unique(row), SAME * size) for row in self.space.mesh.cells.p]

    @cached_property
    def table(self) -> NDArray[np.int64] | None:
        """Cell by its place along every axis; None if the mesh is no full grid of boxes."""
        mesh = self.space.mesh
        cells = mesh.cells
        shape = tuple(a.size - 1 for a in self.axes)
        if mesh.kind not in ("quad", "hexahedron") or np.prod(shape) != cells.t.shape[1]:
            return None
        corners = cells.p[:, cells.t]
        middle = corners.mean(axis=1)
        index = tuple(np.searchsorted(a, row) - 1 for a, row in zip(self.axes, middle, strict=True))
        size = np.array([np.diff(a)[i] for a, i in zip(self.axes, index, strict=True)])
        if np.abs(np.ptp(corners, axis=1) - size).max() > 2 * SAME * np.ptp(cells.p):
            return None
        table = np.full(shape, -1)
        table[index] = np.arange(cells.t.shape[1])
        return table if table.min() >= 0 else None

    @cached_property
    def _maps(self) -> tuple[Any, Any]:
        origin, jacobian = affine_map(self.space.mesh.cells)
        return origin, np.linalg.inv(jacobian.transpose(2, 0, 1))


def _apart(ascending: NDArray[np.float64], least: float) -> NDArray[np.float64]:
    """Values without those closer than `least` to the one before."""
    return np.asarray(ascending[np.append(True, np.diff(ascending) > least)])
