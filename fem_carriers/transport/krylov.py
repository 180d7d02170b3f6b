"""Krylov methods on sparse equations, with the true residual checked at the end."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

LARGEST_PASSES = 3
"""Times a method is started again from its true residual."""

Apply = Callable[["NDArray[np.float64]"], "NDArray[np.float64]"]


def conjugate_gradients(
    matrix: Any, right: NDArray[np.float64], precondition: Apply, tolerance: float, limit: int
) -> tuple[NDArray[np.float64], int]:
    """x with |b − A x| ≤ tolerance |b| in the 2-norm, for symmetric positive definite A and preconditioner.

    Parameters
    ----------
    matrix : sparse matrix, shape (n, n)
    right : (n,) array
    precondition : function
        (n,) to (n,), an approximate inverse.
    tolerance : float
    limit : int
        Largest number of iterations.

    Returns
    -------
    x : (n,) array
        The last iterate, converged or not; `small_residual` tells.
    iterations : int

    References
    ----------
    Y. Saad, Iterative Methods for Sparse Linear Systems, 2nd ed. (SIAM, 2003), algorithm 9.1.
    """
    x, r = np.zeros_like(right), right.copy()
    target, rz, p = tolerance * np.linalg.norm(right), 1.0, np.zeros_like(right)
    for step in range(limit):
        if np.linalg.norm(r) <= target:
            return x, step
        z = precondition(r)
        before, rz = rz, float(r @ z)
        p *= rz / before if step else 0.0
        p += z
        q = matrix @ p
        length = rz / float(p @ q)
        x += length * p
        r -= length * q
    return x, limit


def gmres(
    matrix: Any, right: NDArray[np.float64], precondition: Apply, tolerance: float, limit: int
) -> tuple[NDArray[np.float64], int]:
    """x with |b − A x| ≤ tolerance |b| in the 2-norm, by minimal residuals with preconditioning from the right.

    The flexible variant, since a preconditioner in single precision is not quite linear; no restarts, so that two
    vectors per iteration are stored. Same parameters and returns as `conjugate_gradients`.

    References
    ----------
    Y. Saad, Iterative Methods for Sparse Linear Systems, 2nd ed. (SIAM, 2003), algorithm 9.6.
    """
    size = float(np.linalg.norm(right))
    if size == 0:
        return np.zeros_like(right), 0
    basis, images = np.empty((limit + 1, right.size)), np.empty((limit, right.size))
    H, y, done = np.zeros((limit + 1, limit)), np.zeros(0), 0
    basis[0] = right / size
    for done in range(1, limit + 1):
        old = basis[:done]
        images[done - 1] = precondition(old[-1])
        w = matrix @ images[done - 1]
        for _ in range(2):  # twice is enough against loss of orthogonality
            parts = old @ w
            H[:done, done - 1] += parts
            w -= parts @ old
        length = H[done, done - 1] = float(np.linalg.norm(w))
        y, left = _least_squares(H[: done + 1, :done], size)
        if left <= tolerance * size or length == 0:
            break
        basis[done] = w / length
    return y @ images[: y.size], done


def solve_krylov(
    matrix: Any, right: NDArray[np.float64], precondition: Apply, *, symmetric: bool, tolerance: float, limit: int
) -> tuple[NDArray[np.float64] | None, int]:
    """x whose true residual is small (see `small_residual`), or None if it is not within `limit` iterations.

    Parameters
    ----------
    matrix : sparse matrix, shape (n, n)
    right : (n,) array
    precondition : function
    symmetric : bool
        Whether matrix and preconditioner are symmetric positive definite.
    tolerance : float
        Of the 2-norm of the residual over that of `right`.
    limit : int

    Returns
    -------
    x : (n,) array or None
    iterations : int
    """
    x, left, used = np.zeros_like(right), right, 0
    method = conjugate_gradients if symmetric else gmres
    for _ in range(LARGEST_PASSES):
        share = tolerance * float(np.linalg.norm(right)) / max(float(np.linalg.norm(left)), 1e-300)
        change, steps = method(matrix, left, precondition, min(share, 0.1), limit - used)
        x, used = x + change, used + steps
        left = right - matrix @ x
        if small_residual(matrix, x, right, left, tolerance):
            return x, used
        if used >= limit or not np.isfinite(left).all():
            break
    return None, used


def small_residual(matrix: Any, x: Any, right: Any, left: Any, tolerance: float) -> bool:
    """Whether |b − A x| ≤ tolerance |b|, or is at the round-off of its terms |A| |x| + |b|; 2-norms."""
    size = float(np.linalg.norm(left))
    if size <= tolerance * float(np.linalg.norm(right)):
        return True
    terms = abs(matrix) @ np.abs(x) + np.abs(right)
    return bool(size <= 4 * np.finfo(float).eps * float(np.linalg.norm(terms)))


def _least_squares(H: NDArray[np.float64], size: float) -> tuple[NDArray[np.float64], float]:
    """y that minimises |size e₁ − H y|, and the minimum."""
    target = np.zeros(H.shape[0])
    target[0] = size
    y: Any = np.linalg.lstsq(H, target, rcond=None)[0]
    return y, float(np.linalg.norm(H @ y - target))
