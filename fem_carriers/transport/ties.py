"""Unknowns that are one (opposite periodic sides, floating layers), and the junctions on a mesh."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints, MeshError

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping

    from numpy.typing import NDArray

    from .problem import Problem
    from .spaces import Space


@dataclass(frozen=True, eq=False)
class Junction:
    """A connected opposite-type layer.

    Parameters
    ----------
    terminal : str or None
        The terminal of its contacts (the first by name of several); None for a floating layer.
    surfaces : tuple of str
        The named surfaces it extends over.
    dofs : int array
        Unknowns on it.
    """

    terminal: str | None
    surfaces: tuple[str, ...]
    dofs: NDArray[np.int64]


def periodic_map(space: Space, axes: tuple[str, ...]) -> NDArray[np.int64]:
    """For every unknown the one it equals: itself, or its partner on the opposite periodic side.

    Parameters
    ----------
    space : Space
    axes : tuple of {"x", "y"}

    Returns
    -------
    (n,) int array

    Raises
    ------
    MeshError
        Opposite sides do not match.
    """
    partner = np.arange(space.size)
    where = space.points_cm
    scale = np.ptp(where, axis=1).max()
    for axis in axes:
        i = "xy".index(axis)
        others = [k for k in range(where.shape[0]) if k != i]
        low = np.flatnonzero(where[i] < where[i].min() + 1e-9 * scale)
        high = np.flatnonzero(where[i] > where[i].max() - 1e-9 * scale)
        low, high = (side[_order(where[others][:, side], scale)] for side in (low, high))
        if low.size != high.size or np.abs(where[others][:, low] - where[others][:, high]).max() > 1e-8 * scale:
            raise MeshError(f"Opposite sides of the periodic axis {axis} do not carry the same nodes.")
        partner[high] = low
    return partner[partner]  # corners: twice


def _order(x: Any, scale: float) -> Any:
    rounded = np.round(x / (1e-7 * scale))
    return np.lexsort(rounded)


def find_junctions(problem: Problem, partner: NDArray[np.int64], *, several_terminals: bool = False) -> list[Junction]:
    """Connected opposite-type layers, with the terminal that contacts each.

    Parameters
    ----------
    problem : Problem
    partner : (n,) int array
        From `periodic_map`.
    several_terminals : bool
        Whether a layer may carry contacts of several terminals.

    Raises
    ------
    InputError
        A layer that carries contacts of several terminals where that is not allowed: without a sheet resistance it is
        open which of them takes the carriers.
    """
    from scipy.sparse import coo_matrix
    from scipy.sparse.csgraph import connected_components

    names = problem.junctions()
    if not names:
        return []
    space = problem.space
    facets = {name: problem.mesh.surfaces[name] for name in names}
    pairs_a, pairs_b = [], []
    for chosen in facets.values():
        corners = problem.mesh.cells.facets[:, chosen]
        dofs = partner[space.numbering.nodal_dofs[0][corners]]
        for k in range(1, dofs.shape[0]):
            pairs_a.append(dofs[0])
            pairs_b.append(dofs[k])
    a, b = np.concatenate(pairs_a), np.concatenate(pairs_b)
    _, label = connected_components(coo_matrix((np.ones(a.size), (a, b)), shape=(space.size, space.size)))
    first = {
        name: label[partner[space.numbering.nodal_dofs[0][problem.mesh.cells.facets[0, f]]]]
        for name, f in facets.items()
    }
    groups = np.unique(np.concatenate(list(first.values())))
    found = [_junction(problem, facets, first, group) for group in groups]
    if not several_terminals:
        _refuse_several(problem, found)
    return found


def _junction(
    problem: Problem, facets: Mapping[str, NDArray[np.int64]], label: Mapping[str, NDArray[np.int64]], group: int
) -> Junction:
    on = {name: facets[name][label[name] == group] for name in facets}
    on = {name: f for name, f in on.items() if f.size}
    dofs = np.unique(np.concatenate([problem.space.facet_dofs(f) for f in on.values()]))
    return Junction(next(iter(_terminals(problem, on)), None), tuple(on), dofs)


def _terminals(problem: Problem, surfaces: Iterable[str]) -> list[str]:
    contacts = [problem.surfaces[name].contact for name in surfaces]
    return sorted({c.terminal for c in contacts if c is not None})


def _refuse_several(problem: Problem, junctions: list[Junction]) -> None:
    problems = Complaints("solve_excess")
    for junction in junctions:
        terminals = _terminals(problem, junction.surfaces)
        given = f"the layer over {', '.join(junction.surfaces)} with contacts of the terminals {', '.join(terminals)}"
        allowed = "one terminal per connected layer in the excess-carrier form, which ignores sheet resistance"
        problems.unless(len(terminals) <= 1, given, allowed, "the same terminal name for all contacts on it, or a gap")
    problems.raise_if_any()
