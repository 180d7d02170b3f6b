"""Lateral losses: how far from the contact carriers were generated, collected and lost."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C
from ..errors import Complaints
from ..transport.adjoint import collection_field
from ..transport.bulk import make_bulk
from ..transport.generation import generation_rate
from ..transport.recombination import surface_law
from ..transport.steady import ExcessState, fixed_weights
from ..units import MA

if TYPE_CHECKING:
    import pandas as pd

    from ..transport.problem import Problem
    from .solution import Solution

SAMPLING_ORDER = {2: 16, 3: 8}
"""Quadrature order for distance bins by dimension: many points per cell, so that bins fill smoothly."""


def lateral_losses(
    solution: Solution, contact: str | Sequence[str] | None = None, edges_um: Sequence[float] | int = 12
) -> pd.DataFrame:
    """Generation, collection and recombination against the distance from a contact.

    Carriers are counted twice: where they were generated (`generated`, of these `collected`; by the collection
    probability at frozen lifetime and diffusivity) and where they recombined (`lost_in_bulk`, `lost_at_surfaces`). At
    0 V the columns add up to the ledger.

    Parameters
    ----------
    solution : Solution
    contact : str or sequence of str, optional
        Surface(s) from which the distance counts; default are the contacted parts of all collecting layers, or bare
        metal where there are none. For faces of a unit cell the distance is taken in plan and is 0 under the contact.
    edges_um : int or sequence of float
        Number of equal distance bins, or their edges.

    Returns
    -------
    pandas.DataFrame
        One row per bin, currents in mA/cm² of cell area.

    Raises
    ------
    InputError
        Unknown surface, or nothing to count from.
    """
    import pandas as pd

    state, problem = _excess(solution), solution.problem
    names = _contacts(problem, contact)
    space, system = problem.space, state.system
    to_current = ELEMENTARY_CHARGE_C / problem.cell_area_cm2 / MA
    edges = _edges(edges_um, float(distance_um(problem, names, space.points_cm).max()))
    bulk = make_bulk(space.numbering, SAMPLING_ORDER[space.mesh.dimension])
    distance = distance_um(problem, names, bulk.x_cm)
    shares = np.sum([collection_field(state, t, frozen=True) for t in _sinks(solution)], axis=0)
    made = generation_rate(bulk.x_cm, problem.light, problem.lit_planes, problem.base) * bulk.dx
    made *= _ratio(float(system.load.sum()), float(made.sum()))
    kept = made * bulk.values(shares)
    kept *= _ratio(float(system.load @ shares), float(kept.sum()))

    def binned(distance: Any, amount: Any) -> Any:
        return shared_out(distance.ravel(), amount.ravel(), edges) * to_current

    dn = space.bulk.values(state.dn)
    per_cell = (system.rate(dn)[0] * space.bulk.dx).sum(axis=1)
    shape = np.maximum(bulk.values(state.dn), 0.0) * bulk.dx
    in_bulk = shape * _ratio(per_cell, shape.sum(axis=1))[:, None]
    columns = {
        "generated_mA_per_cm2": binned(distance, made),
        "collected_mA_per_cm2": binned(distance, kept),
        "lost_in_bulk_mA_per_cm2": binned(distance, in_bulk),
        "lost_at_surfaces_mA_per_cm2": sum(
            binned(d, a) for d, a in _surface_losses(solution, names)
        ) + np.zeros(edges.size - 1),
    }  # fmt: skip
    bins = {"distance_from_um": edges[:-1], "distance_to_um": edges[1:]}
    return pd.DataFrame(bins | columns)


def shared_out(distance: Any, amount: Any, edges: Any) -> Any:
    """Amounts at sample distances, shared out to bins by the running total, linear between neighbouring distances.

    What lies at distance 0 counts for the first bin, what lies beyond the last edge for the last one.
    """
    place, group = np.unique(np.round(distance, 6), return_inverse=True)
    mass = np.bincount(group, amount)
    middle = np.cumsum(mass) - np.where(place > 0, 0.5, 0.0) * mass
    last = max(float(edges[-1]), float(place[-1]))
    place, middle = np.append(place, last), np.append(middle, mass.sum())
    running = np.interp(edges, place, middle, left=0.0)
    running[0], running[-1] = 0.0, mass.sum()
    return np.diff(running)


def _ratio(wanted: Any, found: Any) -> Any:
    """Factor that brings a sampled sum to the exact one."""
    return np.where(found != 0, wanted / np.where(found != 0, found, 1.0), 0.0)


def _excess(solution: Solution) -> ExcessState:
    """The solution's state, which must be one of the excess-carrier form."""
    problems = Complaints("lateral_losses")
    given = type(solution).__name__
    problems.unless(isinstance(solution.state, ExcessState), given, "a solution of solve_excess")
    problems.raise_if_any()
    assert isinstance(solution.state, ExcessState)
    return solution.state


def _sinks(solution: Solution) -> list[str]:
    """Terminals that collect, or bare metal where there are none."""
    kinds = [kind for kind, _ in solution.state.leaving()]
    wanted = "terminal" if "terminal" in kinds else "surface"
    return sorted({name for kind, name in solution.state.leaving() if kind == wanted})


def _contacts(problem: Problem, contact: str | Sequence[str] | None) -> list[str]:
    problems = Complaints("lateral_losses")
    if contact is None:
        junctions = [n for n in problem.junctions() if problem.surfaces[n].contact is not None]
        names = junctions or [n for n, s in problem.surfaces.items() if s.pins_to_zero]
    else:
        names = [contact] if isinstance(contact, str) else list(contact)
    for name in names:
        problems.unless(
            name in problem.mesh.surfaces, f"contact {name!r}", f"one of {', '.join(problem.mesh.surfaces)}"
        )
    problems.unless(bool(names), "no contact to count from", "the name of a surface", "contact='x_min'")
    problems.raise_if_any()
    return names


def _edges(edges_um: Sequence[float] | int, farthest_um: float) -> Any:
    if isinstance(edges_um, int):
        return np.linspace(0.0, farthest_um * (1 + 1e-12), edges_um + 1)
    edges = np.asarray(edges_um, dtype=float)
    problems = Complaints("lateral_losses")
    rising = edges.size >= 2 and bool((np.diff(edges) > 0).all())
    problems.unless(rising, f"edges_um = {edges_um!r}", "two or more rising distances")
    problems.raise_if_any()
    return edges


def _surface_losses(solution: Solution, names: list[str]) -> list[tuple[Any, Any]]:
    """(distances, carriers per second) at the quadrature points of every recombining surface."""
    problem, found = solution.problem, []
    for name in solution.state.system.surface_laws:
        order = SAMPLING_ORDER[problem.mesh.dimension]
        basis = problem.space.facets(problem.mesh.surfaces[name], order)
        x = np.asarray(basis.global_coordinates())
        law = surface_law(name, problem.surfaces[name], problem.base, problem.equilibrium, x)
        assert law is not None  # the system has one for this name
        found.append(
            (distance_um(problem, names, x), law(np.asarray(basis.interpolate(solution.state.dn)))[0] * basis.dx)
        )
    at_nodes = distance_um(problem, names, problem.space.points_cm)
    found += [(at_nodes, w * law(solution.state.dn)[0]) for w, law in solution.state.system.edge_laws.values()]
    return found + _bare_metal_losses(solution, names)


def _bare_metal_losses(solution: Solution, names: list[str]) -> list[tuple[Any, Any]]:
    """(distances, carriers per second) at the nodes of bare metal, where terminals do the collecting."""
    state = _excess(solution)
    weights = fixed_weights(solution.problem, state.constraints)
    if not any(kind == "terminal" for kind, _ in weights):
        return []
    total = sum(weights.values(), np.full(state.dn.size, 1e-300))
    at_nodes = distance_um(solution.problem, names, solution.problem.space.points_cm)
    lost = [-(state.residual * w / total) for (kind, _), w in weights.items() if kind == "surface"]
    return [(at_nodes, amount) for amount in lost]


def distance_um(problem: Problem, names: Sequence[str], x_cm: Any) -> Any:
    """Distance of points (dimension, ...) from surfaces, µm.

    In plan for faces of a unit cell (0 under the contact); else to the nearest corner or centre of their facets.
    """
    cell = problem.cell
    regions = {} if cell is None else {r.name: r.shape for s in ("front", "rear") for r in cell.layout(s).regions}
    if cell is not None and all(name in regions for name in names):
        return _plan_distance(cell, [regions[n] for n in names], x_cm)
    from scipy.spatial import cKDTree

    cells = problem.mesh.cells
    corners = [cells.p[:, cells.facets[:, problem.mesh.surfaces[n]]] for n in names]
    points = np.concatenate([p for c in corners for p in (c.reshape(c.shape[0], -1), c.mean(axis=1))], axis=1)
    nearest_cm, _ = cKDTree(points.T).query(x_cm.reshape(x_cm.shape[0], -1).T)
    return np.reshape(nearest_cm * 1e4, x_cm.shape[1:])


def _plan_distance(cell: Any, shapes: list[Any], x_cm: Any) -> Any:
    from shapely import affinity, distance, points, prepare, union_all

    frame = cell.frame
    steps_x = (-frame.period_x, 0.0, frame.period_x) if "x" in cell.periodic_axes else (0.0,)
    steps_y = (-frame.period_y, 0.0, frame.period_y) if "y" in cell.periodic_axes else (0.0,)
    shape = union_all([affinity.translate(s, dx, dy) for s in shapes for dx in steps_x for dy in steps_y])
    prepare(shape)
    x, y = x_cm[0] * 1e4, x_cm[1] * 1e4 if cell.dimension == 3 else np.full_like(x_cm[0], np.mean(frame.y))
    return distance(shape, points(x, y))
