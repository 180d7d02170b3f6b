"""Polynomial interpolation of smooth results between a few values of several variables."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray


def lobatto(low: float, high: float, number: int) -> NDArray[np.float64]:
    """Nodes with both ends on a logarithmic scale, close to each other near the ends (Chebyshev–Lobatto)."""
    t = 0.5 * (1 - np.cos(np.pi * np.arange(number) / max(number - 1, 1)))
    return np.asarray(low * (high / low) ** t)


def weights(nodes: NDArray[np.float64], at: Any, exponents: Sequence[float] | None = None) -> NDArray[np.float64]:
    """How much each node's value counts at each place: value at a place = row @ values at the nodes.

    Parameters
    ----------
    nodes : (n,) float array
        Above 0, all different.
    at : (m,) float array
    exponents : sequence of float, optional
        Interpolate by Σ c_k x^e_k with the first n of these; default is a polynomial in ln x.

    Returns
    -------
    (m, n) float array
    """
    at = np.atleast_1d(np.asarray(at, dtype=float))
    middle = np.sqrt(nodes.min() * nodes.max())
    if exponents is not None:
        powers = np.asarray(exponents[: nodes.size], dtype=float)
        known, wanted = ((x[:, None] / middle) ** powers for x in (nodes, at))
    else:
        size = np.log(nodes.max() / middle) or 1.0
        known, wanted = (
            np.polynomial.chebyshev.chebvander(np.log(x / middle) / size, nodes.size - 1) for x in (nodes, at)
        )
    return np.asarray(np.linalg.solve(known.T, wanted.T).T)


@dataclass(frozen=True, eq=False)
class Interpolant:
    """Values on a grid of nodes, and between them.

    Parameters
    ----------
    nodes : sequence of (n_i,) float arrays
        Of every variable.
    values : (…, n_1, n_2, …) float array
        Leading axes are different quantities.
    exponents : sequence, optional
        Of every variable, as for `weights`.
    """

    nodes: Sequence[NDArray[np.float64]]
    values: NDArray[np.float64]
    exponents: Sequence[Sequence[float] | None] | None = None

    def grid(self, *places: Any) -> NDArray[np.float64]:
        """Values for every combination of places (m_1,), (m_2,), …; shape (…, m_1, m_2, …)."""
        found, first = self.values, self.values.ndim - len(self.nodes)
        for k, (nodes, at) in enumerate(zip(self.nodes, places, strict=True)):
            shares = weights(nodes, at, None if self.exponents is None else self.exponents[k])
            found = np.moveaxis(np.tensordot(shares, found, axes=(1, first + k)), 0, first + k)
        return np.asarray(found)

    def at(self, *place: float) -> NDArray[np.float64]:
        """Values of all quantities at one place, of the shape of the leading axes."""
        found = self.grid(*place)
        return found.reshape(found.shape[: found.ndim - len(self.nodes)])
