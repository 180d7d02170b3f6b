"""Fields for pictures and files, and their values at points."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from ..transport.coefficients import diffusivity
from ..transport.generation import generation_rate
from ..transport.probe import Probe

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..transport.problem import Problem
    from ..transport.state import SolvedState


def nodal_fields(state: SolvedState) -> dict[str, NDArray[np.float64]]:
    """Fields at the nodes, by name with unit; see `Solution.nodal_fields`."""
    system, dn = state.system, state.dn
    problem, space = system.problem, system.space
    eq = problem.equilibrium
    n, p = eq.n0 + dn, eq.p0 + dn
    with np.errstate(invalid="ignore", divide="ignore"):
        splitting = eq.VT * np.log(np.where(n * p > 0, n * p, np.nan) / eq.ni**2)
    planes = problem.lit_planes
    return {
        "excess_density_per_cm3": dn,
        "electron_density_per_cm3": n,
        "hole_density_per_cm3": p,
        "quasi_fermi_splitting_V": splitting,
        "recombination_rate_per_cm3_s": node_average(state, system.rate(space.bulk.values(dn))[0]),
        "generation_rate_per_cm3_s": generation_rate(space.points_cm, problem.light, planes, problem.base),
    }


def node_average(state: SolvedState, values: Any) -> NDArray[np.float64]:
    """Average of quadrature values (n_cells, n_points) over the cells around each node, weighted by volume."""
    bulk = state.system.space.bulk
    cell_values, sizes = (values * bulk.dx).sum(axis=1), bulk.dx.sum(axis=1)
    dofs, n = state.system.space.numbering.element_dofs, state.system.space.size
    local = dofs.shape[0]
    total = np.bincount(dofs.ravel(), np.tile(cell_values, local), n)
    return np.asarray(total / np.bincount(dofs.ravel(), np.tile(sizes, local), n))


def diffusion_length_um(state: SolvedState) -> NDArray[np.float64]:
    """√(D Δn / R) per cell in µm; see `Solution.diffusion_length_um`."""
    system = state.system
    bulk = system.space.bulk
    dn = bulk.values(state.dn)
    weights = bulk.dx / bulk.dx.sum(axis=1)[:, None]
    rate, density = (system.rate(dn)[0] * weights).sum(axis=1), (dn * weights).sum(axis=1)
    D = (diffusivity(dn, system.problem.equilibrium)[0] * weights).sum(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.where(rate > 0, np.sqrt(D * density / rate) * 1e4, np.inf))


def values_at(problem: Problem, nodal: NDArray[np.float64], points_um: NDArray[np.float64]) -> NDArray[np.float64]:
    """A finite-element function at points (dimension, n) in µm.

    Raises
    ------
    InputError
        A point outside of the mesh, or the wrong number of coordinates.
    """
    problems = Complaints("points_um")
    d = problem.mesh.dimension
    axes = "(x, z)" if d == 2 else "(x, y, z)"
    if not problems.unless(
        points_um.shape[:1] == (d,), f"shape {points_um.shape}", f"{axes}, shape ({d},) or ({d}, n)"
    ):
        problems.raise_if_any()
    points = points_um.reshape(d, -1)
    low, high = problem.mesh.points_um.min(axis=1), problem.mesh.points_um.max(axis=1)
    outside = ((points < low[:, None] - 1e-6) | (points > high[:, None] + 1e-6)).any(axis=0)
    if outside.any():
        problems.add(
            f"the point {_listed(points[:, outside][:, 0])} µm", f"points from {_listed(low)} to {_listed(high)} µm"
        )
        problems.raise_if_any()
    return Probe(problem.space).values(nodal, points * 1e-4)


def _listed(point: Any) -> str:
    return "(" + ", ".join(f"{x:.6g}" for x in point) + ")"
