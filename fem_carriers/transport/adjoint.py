"""The adjoint: one linear solve gives what every generated carrier contributes to a terminal.

With K the linear operator of the balance, φ solves Kᵀφ = 0 with φ = 1 where the terminal fixes Δn and 0 where anything
else does; then the collected current is Σ load · φ for every generation, to round-off (C. Donolato, Appl. Phys. Lett.
46, 270 (1985)).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from .balance import mass_matrix
from .channels import Key, rate_slopes
from .refined import Refined, refined
from .solver import one_carrier_solver
from .steady import fixed_weights

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .steady import ExcessState


@dataclass(frozen=True, eq=False)
class ExcessResponse:
    """Where a carrier goes that is generated anywhere, in the equations linearised at a state.

    Parameters
    ----------
    state : ExcessState
    frozen : bool
        False: the differential response, ∂(rate)/∂G at the state. True: lifetime and diffusivity frozen at the state's
        values; then a field is the share of the carriers generated at a point, in this steady state, that the channel
        takes, and Σ load · φ is the channel's rate exactly at 0 V.
    """

    state: ExcessState
    frozen: bool = False

    @cached_property
    def weights(self) -> dict[Key, NDArray[np.float64]]:
        """Share of each terminal and each bare metal surface in the fixed unknowns, (n,)."""
        weights = fixed_weights(self.state.system.problem, self.state.constraints)
        total = sum(weights.values(), np.full(self.state.dn.size, 1e-300))
        return {key: np.where(self.state.constraints.fixed, w / total, 0.0) for key, w in weights.items()}

    @cached_property
    def slopes(self) -> dict[Key, NDArray[np.float64]]:
        """Derivative of every recombination rate by Δn at the nodes, (n,)."""
        return rate_slopes(self.state.system, self.state.dn)

    @property
    def keys(self) -> list[Key]:
        """All channels: bulk, surfaces, terminals. Their fields sum to one."""
        return [*self.slopes, *self.weights]

    @cached_property
    def matrix(self) -> Any:
        """The linear operator K of the balance, (n, n)."""
        return frozen_matrix(self.state) if self.frozen else self.state.system.jacobian(self.state.dn)

    @cached_property
    def _backward(self) -> Refined:
        spread = self.state.constraints.spread
        return refined(one_carrier_solver(self.state.system.space, spread), spread.T @ self.matrix.T @ spread)

    @cached_property
    def _forward(self) -> Refined:
        spread = self.state.constraints.spread
        return refined(one_carrier_solver(self.state.system.space, spread), spread.T @ self.matrix @ spread)

    def field(self, key: Key) -> NDArray[np.float64]:
        """φ of a channel at the nodes, (n,): its rate per rate of generation there.

        Raises
        ------
        KeyError
            No such channel.
        """
        spread = self.state.constraints.spread
        start = self.weights.get(key)
        right = self.slopes[key] if start is None else -(self.matrix.T @ start)
        found = spread @ self._backward.solve(spread.T @ right) if spread.shape[1] else np.zeros(self.state.dn.size)
        return np.asarray(found if start is None else found + start)

    def moved(self, load: NDArray[np.float64]) -> NDArray[np.float64]:
        """Change of Δn (n,) by an added load (n,), to first order."""
        spread = self.state.constraints.spread
        return np.asarray(spread @ self._forward.solve(spread.T @ load))


TOLERANCE = 1e-12
"""Of the residual, so that reciprocity holds to round-off."""


def collection_field(state: ExcessState, terminal: str, *, frozen: bool = False) -> NDArray[np.float64]:
    """φ of a terminal at the nodes, shape (n,); see `ExcessResponse`.

    Parameters
    ----------
    state : ExcessState
    terminal : str
        A collecting terminal, or a surface of bare metal.
    frozen : bool

    Raises
    ------
    InputError
        No such terminal.
    """
    response = ExcessResponse(state, frozen)
    return response.field(terminal_key(response.weights, terminal))


def terminal_key(keys: Iterable[Key], terminal: str) -> Key:
    """The key of a terminal, or of a surface of bare metal; a terminal goes before a surface of its name.

    Raises
    ------
    InputError
        No such terminal.
    """
    names = {name: (kind, name) for kind, name in sorted(keys)}
    problems = Complaints("collection_probability")
    problems.unless(terminal in names, f"terminal {terminal!r}", ", ".join(map(repr, names)) or "none collects here")
    problems.raise_if_any()
    return names[terminal]


def frozen_matrix(state: ExcessState) -> Any:
    """The linear operator K with K Δn = F(Δn) + load at the state: D, R/Δn, U/Δn and the drift share frozen."""
    from scipy.sparse import diags

    system, dn = state.system, state.dn
    bulk = system.space.bulk
    values = bulk.values(dn)
    carried, along = None, None
    if system.drift is not None:
        carried = system.drift.vector * _ratio(*system.drift.share(values), values)
        along = system.drift.upwind if system.drift.needs_upwinding else None
    D = system.diffusivity(values)[0]
    matrix = bulk.matrix(D, carried, _ratio(*system.rate(values), values), along)
    for name, law in system.surface_laws.items():
        basis = system.space.surfaces[name]
        density = np.asarray(basis.interpolate(dn))
        matrix = matrix + mass_matrix(basis, _ratio(*law(density), density))
    for weights, law in system.edge_laws.values():
        matrix = matrix + diags(weights * _ratio(*law(dn), dn))
    return matrix


def _ratio(rate: Any, slope: Any, density: Any) -> Any:
    """rate/Δn, with its limit where Δn vanishes."""
    tiny = np.abs(density) < 1e-300
    return np.where(tiny, slope, rate / np.where(tiny, 1.0, density))
