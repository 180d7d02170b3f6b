"""Lines where an outer edge of the cell meets a junction: recombination in the space-charge region that it cuts."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from ..errors import Complaints
from ..materials import recombination as laws
from ..units import NA

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .problem import Problem
    from .recombination import Law


def edge_laws(problem: Problem) -> dict[str, tuple[NDArray[np.float64], Law]]:
    """Weights of the unknowns on the line (n,), in cm, and the law per length, 1/(cm s), of every surface with one.

    Raises
    ------
    InputError
        A surface with an edge current that meets no opposite-type layer.
    """
    found = {}
    eq = problem.equilibrium
    scale = laws.J0_temperature_factor(problem.base.temperature_K) if problem.base.material == "silicon" else 1.0
    for name, surface in problem.surfaces.items():
        if surface.J02_edge_nA_per_cm > 0:
            J02 = surface.J02_edge_nA_per_cm * NA * math.sqrt(scale)
            found[name] = line_weights(problem, name), _law(eq.n0, eq.p0, eq.ni, J02)
    return found


def _law(n0: float, p0: float, ni: float, J02: float) -> Law:
    return lambda dn: laws.surface_J02(dn, n0, p0, ni, J02)


def line_weights(problem: Problem, name: str) -> NDArray[np.float64]:
    """∫ v along the line where a surface meets opposite-type layers, shape (n,); in 2-D 1 cm at each corner."""
    space, cells = problem.space, problem.mesh.cells
    own = problem.mesh.surfaces[name]
    junctions = [problem.mesh.surfaces[n] for n in problem.junctions() if n != name]
    others = np.concatenate(junctions) if junctions else np.zeros(0, dtype=np.int64)
    weights = np.zeros(space.size)
    if problem.mesh.dimension == 2:
        corners = np.intersect1d(cells.facets[:, own], cells.facets[:, others])
        weights[space.numbering.nodal_dofs[0, corners]] = 1.0
    else:
        _add_lines(problem, np.intersect1d(cells.f2e[:, own], cells.f2e[:, others]), weights)
    problems = Complaints(f"surface {name}")
    given = "J02_edge_nA_per_cm where the surface meets no layer of the type opposite to the base"
    problems.unless(bool(weights.any()), given, "a side that meets such a layer", "srv_cm_per_s on that side")
    problems.raise_if_any()
    return weights


def _add_lines(problem: Problem, edges: NDArray[np.int64], weights: NDArray[np.float64]) -> None:
    """Trapezoidal rule (order 1) or Simpson's rule (order 2) along mesh edges."""
    cells, numbering = problem.mesh.cells, problem.space.numbering
    ends = cells.edges[:, edges]
    length = np.linalg.norm(cells.p[:, ends[0]] - cells.p[:, ends[1]], axis=0)
    quadratic = problem.order == 2
    for end in ends:
        np.add.at(weights, numbering.nodal_dofs[0, end], length / (6 if quadratic else 2))
    if quadratic:
        np.add.at(weights, numbering.edge_dofs[0, edges], 4 * length / 6)
