"""Reference cells: shape functions on them, and the affine maps that come closest to the cells of a mesh."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray


def shape_functions(element: Any, points: Any, count: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Values (count, n_points) and gradients (count, dimension, n_points) on the reference cell."""
    pairs = [element.lbasis(points, i) for i in range(count)]
    ones = np.ones(points.shape[1])
    return np.array([p[0] * ones for p in pairs]), np.array([np.asarray(p[1]) * ones for p in pairs])


def affine_map(mesh: Any) -> tuple[Any, Any]:
    """Origins (d, n_cells) and Jacobians (d, d, n_cells) of the affine map closest to each cell."""
    corners = np.vstack([np.ones(mesh.refdom.p.shape[1]), mesh.refdom.p])  # reference corners, with a constant
    fit = np.einsum("dkc,kj->djc", mesh.p[:, mesh.t], np.linalg.pinv(corners))
    return fit[:, 0], fit[:, 1:]


def all_affine(mesh: Any) -> bool:
    """Whether every cell is an affine image of the reference cell, to round-off of the coordinates."""
    origin, jacobian = affine_map(mesh)
    fitted = origin[:, None] + np.einsum("djc,jk->dkc", jacobian, mesh.refdom.p)
    size = np.ptp(mesh.p[:, mesh.t], axis=1).min(axis=0)
    return bool(
        (np.abs(fitted - mesh.p[:, mesh.t]).max(axis=(0, 1)) <= 1e-9 * size + 1e-15 * np.abs(mesh.p).max()).all()
    )
