"""The linear, symmetric case of the excess-carrier form on triangles, with its data as functions of position."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell.light import RateFunction, UniformRate
from ..errors import Complaints
from ..meshing.mesh import Mesh
from ..meshing.triangles import triangulated
from .excess import ExcessSystem
from .linear import Factorization
from .photon_field import Beam, beams_of, lit, photons_at
from .recombination import base_laws, surface_law
from .spaces import evaluate
from .steady import Constraints, constrain

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from ..cell.light import Source
    from .problem import Problem
    from .recombination import Law

TRIAL_DENSITIES_PER_CM3 = (1e10, 1e14, 1e17)
"""Densities at which a rate is compared with its tangent at zero."""
CONSTANT = 1e-9
"""Relative change below which something counts as constant."""
WHAT = "collected_bounds"


@dataclass(frozen=True, eq=False)
class Sides:
    """Facets of one named surface, or the unnamed ones (name ""), on the outside.

    Parameters
    ----------
    name : str
    index : (n,) int array
    """

    name: str
    index: NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class LinearProblem:
    """∇·(D ∇u) − κ u + G = 0 with u fixed at sinks and D ∂u/∂ν + S u = 0 elsewhere; rates by their slopes at u = 0.

    Parameters
    ----------
    problem : Problem
        On triangles.
    constraints : Constraints
        What is fixed.
    """

    problem: Problem
    constraints: Constraints

    @cached_property
    def system(self) -> ExcessSystem:
        """The discrete equations."""
        return ExcessSystem(self.problem)

    @cached_property
    def D(self) -> float:
        """Diffusivity at low injection, cm²/s."""
        return float(self.system.diffusivity(np.zeros(1))[0][0])

    @cached_property
    def sides(self) -> list[Sides]:
        """All outer facets, by surface."""
        cells = self.problem.mesh.cells
        outside = np.zeros(cells.facets.shape[1], dtype=bool)
        outside[cells.boundary_facets()] = True
        found = []
        for name in self.problem.surfaces:
            own = self.problem.mesh.surfaces[name]
            found.append(Sides(name, own[outside[own]]))
            outside[own] = False
        found.append(Sides("", np.flatnonzero(outside)))
        return [sides for sides in found if sides.index.size]

    @cached_property
    def fixed(self) -> list[Sides]:
        """Sides where u is fixed."""
        fixed = self.constraints.fixed
        return [s for s in self.sides if s.name and fixed[self.problem.space.facet_dofs(s.index)].all()]

    @cached_property
    def insulated(self) -> list[Sides]:
        """Sides without a rate."""
        return [s for s in self._open if s.name not in self.system.surface_laws]

    @cached_property
    def recombining(self) -> list[Sides]:
        """Sides with a rate S u."""
        return [s for s in self._open if s.name in self.system.surface_laws]

    @property
    def _open(self) -> list[Sides]:
        return [s for s in self.sides if s not in self.fixed]

    def law(self, name: str, x_cm: Any) -> Law | None:
        """Recombination of a surface at points; None where there is none."""
        if not name:
            return None
        return surface_law(name, self.problem.surfaces[name], self.problem.base, self.problem.equilibrium, x_cm)

    def srv(self, sides: Sides, x_cm: Any) -> Any:
        """S in cm/s at points (2, n_facets, n_points); on sinks the rate at the density there over it."""
        law, zero = self.law(sides.name, x_cm), np.zeros(x_cm.shape[1:])
        if law is None:
            return zero
        if sides not in self.fixed:
            return law(zero)[1] + zero
        at = self.constraints.values[self.problem.space.facet_dofs(sides.index)][0]
        return zero + (law(zero + at)[0] / at if at else 0.0)

    def kappa(self, x_cm: Any) -> Any:
        """1/τ in 1/s at points (2, n_cells, n_points)."""
        total = np.zeros(x_cm.shape[1:])
        for volume, base in self.problem.volumes.items():
            cells = self.problem.mesh.volumes[volume]
            for _, law in base_laws(base, self.problem.equilibrium, x_cm[:, cells]):
                total[cells] += law(np.zeros(total[cells].shape))[1]
        return total

    def rate(self, x_cm: Any) -> Any:
        """G of light given as a rate, cm⁻³s⁻¹."""
        total = np.zeros(x_cm.shape[1:])
        for source in self._sources:
            if isinstance(source, UniformRate | RateFunction):
                given = source.rate_per_cm3_s if isinstance(source, UniformRate) else source.rate
                part = evaluate("Light.function", given, x_cm, zero=True, inf=False) * np.ones(total.shape)
                total += part * (self.lit(source, x_cm) if source.needs_plane else 1.0)
        return total

    def photons(self, x_cm: Any) -> Any:
        """Φ of light given as a beam, 1/(cm² s), shape of x_cm."""
        return photons_at(self.problem, self.beams, x_cm)

    @property
    def _sources(self) -> tuple[Source, ...]:
        return self.problem.light.sources if self.problem.light is not None else ()

    @cached_property
    def beams(self) -> list[Beam]:
        """Sources that enter through a plane, with their net flux against depth in cm."""
        return beams_of(self.problem)

    def lit(self, source: Source, x_cm: Any) -> Any:
        """1 below the lit part of a source's plane, 0 elsewhere."""
        return lit(self.problem, source, x_cm)

    @cached_property
    def _factors(self) -> Factorization:
        spread = self.constraints.spread
        return Factorization((spread.T @ self._matrix @ spread).tocsr())

    @cached_property
    def _matrix(self) -> Any:
        return self.system.jacobian(np.zeros(self.problem.space.size))

    def solved(self, at_sinks: Mapping[str, float], *, lit: bool) -> NDArray[np.float64]:
        """u_h at the nodes for given values at the sinks, with or without the light."""
        u = np.zeros(self.problem.space.size)
        for sides in self.fixed:
            u[self.problem.space.facet_dofs(sides.index)] = at_sinks[sides.name]
        load = self.system.load if lit else np.zeros(u.size)
        spread = self.constraints.spread
        free = self._factors.solve(spread.T @ (load - self._matrix @ u)) if spread.shape[1] else np.zeros(0)
        return np.asarray(u + spread @ free)


def linear_problem(problem: Problem, voltage_V: Any, *, low_injection: bool) -> LinearProblem:
    """The linear problem on triangles; quads are split in two.

    Parameters
    ----------
    problem : Problem
    voltage_V : float or mapping
        As for `solve_excess`.
    low_injection : bool
        Take the limit of low injection of what is not linear.

    Raises
    ------
    InputError
        Everything that this method does not cover, at once.
    """
    complaints = Complaints(WHAT)
    given = f"a mesh of {problem.mesh.kind} cells"
    complaints.unless(problem.mesh.dimension == 2, given, "two dimensions", "error bars of solve_excess")
    given = f"periodic sides along {', '.join(problem.periodic_axes)}"
    complaints.unless(not problem.periodic_axes, given, "mirror planes", 'symmetry="half"')
    complaints.raise_if_any()
    linear = _on_triangles(problem, voltage_V)
    if not low_injection:
        _refuse_nonlinear(complaints, linear)
    _refuse_layers(complaints, linear)
    _refuse_light(complaints, linear)
    complaints.raise_if_any()
    return linear


def _on_triangles(problem: Problem, voltage_V: Any) -> LinearProblem:
    mesh: Mesh = problem.mesh if problem.mesh.kind == "triangle" else triangulated(problem.mesh)
    split = replace(problem, mesh=mesh, order=2, steps=None)
    return LinearProblem(split, constrain(split, voltage_V))


def _refuse_nonlinear(complaints: Complaints, linear: LinearProblem) -> None:
    """Injection-dependent lifetime, diffusivity or surface recombination."""
    remedy = "low_injection=True for the limit of small densities"
    problem, centre = linear.problem, linear.problem.mesh.cells.p[:, linear.problem.mesh.cells.t].mean(axis=1)
    D = linear.system.diffusivity(np.array([0.0, *TRIAL_DENSITIES_PER_CM3]))[0]
    complaints.unless(
        np.ptp(D) <= CONSTANT * D[0], "a diffusivity that depends on injection", "equal mobilities", remedy
    )
    for volume, base in problem.volumes.items():
        x = centre[:, problem.mesh.volumes[volume], None]
        for name, law in base_laws(base, problem.equilibrium, x):
            complaints.unless(_is_linear(law, x), f"{volume}: {name} recombination", "a constant lifetime", remedy)
    for sides in linear.recombining:
        x = np.asarray(problem.space.facets(sides.index, 1).global_coordinates())
        at_surface = linear.law(sides.name, x)
        good = at_surface is None or _is_linear(at_surface, x)
        complaints.unless(good, f"{sides.name}: recombination by J0", "srv_cm_per_s", remedy)


def _is_linear(law: Law, x: Any) -> bool:
    zero = np.zeros(x.shape[1:])
    slope = law(zero)[1] + zero
    return all(
        np.abs(law(zero + d)[0] - slope * d).max() <= CONSTANT * (slope * d).max() for d in TRIAL_DENSITIES_PER_CM3
    )


def _refuse_layers(complaints: Complaints, linear: LinearProblem) -> None:
    problem = linear.problem
    for junction in linear.constraints.junctions:
        given = f"the layer on {', '.join(junction.surfaces)} without a contact"
        complaints.unless(junction.terminal is not None, given, "layers of the opposite type with a contact")
    for name in linear.system.edge_laws:
        complaints.add(f"recombination at the edges of {name}", "J02_edge_nA_per_cm = 0")
    for name, surface in problem.surfaces.items():
        law = linear.system.surface_laws.get(name)
        inner = problem.mesh.inner_share(name) > 0 and (law is not None or surface.pins_to_zero)
        complaints.unless(not inner, f"recombination on {name} inside the volume", "recombination on the outside")
        layer = surface.layer
        lossless = layer is None or layer.absorbing_depth_um == 0 or layer.collection == 1
        complaints.unless(lossless, f"light lost in the layer on {name}", "collection = 1 or absorbing_depth_um = 0")
    for sides in linear.recombining:
        S = linear.srv(sides, np.asarray(problem.space.facets(sides.index).global_coordinates()))
        complaints.unless(bool((S > 0).all()), f"{sides.name}: a recombination velocity of zero in places", "above 0")


def _refuse_light(complaints: Complaints, linear: LinearProblem) -> None:
    """Beams whose outline runs through cells or which cross an insulated side at an angle."""
    problem = linear.problem
    if not linear.beams:
        return
    falls = [linear.lit(source, np.asarray(problem.space.bulk.x_cm)) for source, _ in linear.beams]
    fits = all((v.min(axis=1) == v.max(axis=1)).all() for v in falls)
    complaints.unless(fits, "light whose outline runs through cells", "a mesh that follows it", "the unit cell again")
    for sides in linear.insulated:
        side = problem.space.facets(sides.index)
        photons = linear.photons(np.asarray(side.global_coordinates()))
        through = np.einsum("dij,dij->ij", photons, np.asarray(side.normals))
        even = np.ptp(through, axis=1).max() <= CONSTANT * np.abs(photons).max(initial=1e-300)
        complaints.unless(
            bool(even), f"light that crosses {sides.name or 'a side'} at an angle", "sides along the light"
        )
