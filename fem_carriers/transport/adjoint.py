"""The adjoint: one linear solve gives what every generated carrier contributes to a terminal.

With K the linear operator of the balance, φ solves Kᵀφ = 0 with φ = 1 where the terminal fixes Δn and 0 where anything
else does; then the collected current is Σ load · φ for every generation, to round-off (C. Donolato, Appl. Phys. Lett.
46, 270 (1985)).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from .balance import mass_matrix
from .linear import Factorization
from .steady import fixed_weights

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .steady import ExcessState


def collection_field(state: ExcessState, terminal: str, *, frozen: bool = False) -> NDArray[np.float64]:
    """φ at the nodes, shape (n,).

    Parameters
    ----------
    state : ExcessState
    terminal : str
        A collecting terminal, or a surface of bare metal.
    frozen : bool
        False: the equations linearised at the state; φ = ∂I/∂G there (the differential response). True: lifetime and
        diffusivity frozen at the state's values; φ is the share of the carriers generated here, in this steady state,
        that the terminal collects, and Σ load · φ is the collected current exactly at 0 V.

    Raises
    ------
    InputError
        No such terminal.
    """
    constraints = state.constraints
    weights = fixed_weights(state.system.problem, constraints)
    names = {name: (kind, name) for kind, name in sorted(weights)}  # a terminal goes before a surface of its name
    problems = Complaints("collection_probability")
    problems.unless(terminal in names, f"terminal {terminal!r}", ", ".join(map(repr, names)) or "none collects here")
    problems.raise_if_any()
    total = sum(weights.values(), np.full(state.dn.size, 1e-300))
    start = np.where(constraints.fixed, weights[names[terminal]] / total, 0.0)
    matrix = frozen_matrix(state) if frozen else state.system.jacobian(state.dn)
    spread = constraints.spread
    with Factorization((spread.T @ matrix.T @ spread).tocsr()) as factors:
        free = factors.solve(-(spread.T @ (matrix.T @ start)))
    return np.asarray(spread @ free + start)


def frozen_matrix(state: ExcessState) -> Any:
    """The linear operator K with K Δn = F(Δn) + load at the state: D, R/Δn, U/Δn and the drift share frozen."""
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
    return matrix


def _ratio(rate: Any, slope: Any, density: Any) -> Any:
    """rate/Δn, with its limit where Δn vanishes."""
    tiny = np.abs(density) < 1e-300
    return np.where(tiny, slope, rate / np.where(tiny, 1.0, density))
