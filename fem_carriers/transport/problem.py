"""A description on a mesh: what is solved."""

from __future__ import annotations

import dataclasses
import difflib
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

from ..cell.base import Base
from ..cell.light import Light
from ..cell.surface import Surface, check_inner_surface, check_surface
from ..cell.unit_cell import UnitCell
from ..errors import Complaints
from ..meshing.mesh import Mesh
from .generation import LitPlane
from .lit_planes import plane_of_cell, plane_of_facets
from .spaces import Space

if TYPE_CHECKING:
    from ..cell.base import Equilibrium


@dataclass(frozen=True)
class MeshSteps:
    """How the mesh of a unit cell was asked for; see `fem_carriers.problem`."""

    first_step_um: float | None = None
    growth: float | None = None
    level: float = 0.0


@dataclass(frozen=True, eq=False)
class Problem:
    """Everything a solver needs; made by `problem` from a unit cell, or directly on an imported mesh.

    Parameters
    ----------
    mesh : Mesh
    volumes : mapping of str to Base
        One for every named volume. Doping, mobilities and ni must agree; lifetimes may differ.
    surfaces : mapping of str to Surface
        A named surface left out is insulated (a mirror plane); inside the volume it is without effect. Surfaces inside
        the volume (grain boundaries, cracks) recombine, U = S Δn counting the carriers from both sides.
    light : Light, optional
    lit_surface : str, or mapping of {"front", "rear"} to str
        The flat surface(s) that light enters.
    cell_area_cm2 : float
        Area that currents refer to; in 2-D per cm of depth.
    order : {1, 2}
        Order of the Lagrange elements.
    cell : UnitCell, optional
        The unit cell the mesh was built from; gives shading outlines and periodic sides.
    steps : MeshSteps, optional
        How that mesh was asked for.

    Raises
    ------
    InputError
        Every problem of the input at once.
    """

    mesh: Mesh
    volumes: Mapping[str, Base]
    surfaces: Mapping[str, Surface]
    light: Light | None = None
    lit_surface: str | Mapping[str, str] | None = None
    cell_area_cm2: float = 0.0
    order: int = 2
    cell: UnitCell | None = field(default=None, repr=False)
    steps: MeshSteps | None = field(default=None, repr=False)

    def __post_init__(self) -> None:
        problems = Complaints("Problem")
        problems.unless(isinstance(self.mesh, Mesh), f"mesh = {self.mesh!r}", "a Mesh", "fc.read_mesh(...)")
        problems.unless(self.order in (1, 2), f"order = {self.order!r}", "1 or 2")
        good = isinstance(self.cell_area_cm2, int | float) and self.cell_area_cm2 > 0
        problems.unless(good, f"cell_area_cm2 = {self.cell_area_cm2!r}", "the plan area of the piece, above 0")
        problems.raise_if_any()
        self._check_names(problems, "volume", self.volumes, self.mesh.volumes, Base, all_needed=True)
        self._check_names(problems, "surface", self.surfaces, self.mesh.surfaces, Surface, all_needed=False)
        for name, surface in self.surfaces.items():
            if isinstance(surface, Surface) and self.volumes and isinstance(self.base, Base):
                check_surface(problems, name, surface, self.base.doping_type)
        self._check_inner_surfaces(problems)
        self._check_one_doping(problems)
        self._check_lit(problems)
        problems.raise_if_any()

    def _check_names(
        self, problems: Complaints, what: str, given: Mapping[str, Any], known: Mapping[str, Any], kind: type,
        *, all_needed: bool,
    ) -> None:  # fmt: skip
        for name, value in given.items():
            if name not in known:
                near = difflib.get_close_matches(name, known, 1)
                problems.add(f"{what} {name!r}", f"one of {', '.join(known)}", repr(near[0]) if near else "")
            problems.unless(isinstance(value, kind), f"{what} {name!r} = {value!r}", f"a {kind.__name__}")
        for name in known if all_needed else ():
            problems.unless(name in given, f"no Base for the volume {name!r}", "one Base for every volume")

    def _check_inner_surfaces(self, problems: Complaints) -> None:
        for name, surface in self.surfaces.items():
            if name not in self.mesh.surfaces or not isinstance(surface, Surface):
                continue
            empty, inside = self.mesh.surfaces[name].size == 0, self.mesh.inner_share(name)
            problems.unless(not empty, f"surface {name!r} without facets", "a surface with at least one facet")
            given = f"surface {name!r}, of which {100 * inside:.0f} % lies inside the volume"
            problems.unless(inside in (0, 1), given, "all of it inside or on the outside", "two names")
            if inside == 1:
                check_inner_surface(problems, name, surface)

    def _check_one_doping(self, problems: Complaints) -> None:
        bases = [b for b in self.volumes.values() if isinstance(b, Base)]
        if len({b.equilibrium() for b in bases}) > 1:
            problems.add(
                "volumes that differ in doping, mobility, ni or temperature",
                "volumes that differ in lifetime, Auger and radiative recombination only",
                "one doping for all volumes; describe doped regions as layers",
            )

    def _check_lit(self, problems: Complaints) -> None:
        for name in self._lit_names.values():
            outside = [n for n in self.mesh.surfaces if self.mesh.inner_share(n) == 0]
            problems.unless(name in outside, f"lit_surface {name!r}", f"one of {', '.join(outside)}")
        for source in self.light.sources if self.light is not None else ():
            if self.cell is None and source.needs_plane and source.enters not in self._lit_names:
                problems.add(
                    f"light that enters the {source.enters} of an imported mesh",
                    'lit_surface, or {"front": ..., "rear": ...}, naming the flat surface it enters',
                )

    @property
    def _lit_names(self) -> Mapping[str, str]:
        if self.lit_surface is None:
            return {}
        return {"front": self.lit_surface} if isinstance(self.lit_surface, str) else self.lit_surface

    def lit_name(self, enters: str) -> str:
        """The named surface of an imported mesh that light enters; empty if there is none."""
        return self._lit_names.get(enters, "")

    @cached_property
    def space(self) -> Space:
        """The finite-element space."""
        return Space(self.mesh, self.order)

    @property
    def base(self) -> Base:
        """One of the bases; all agree in doping, mobility, ni and temperature."""
        return next(iter(self.volumes.values()))

    @cached_property
    def equilibrium(self) -> Equilibrium:
        """Equilibrium densities and mobilities of the base."""
        return self.base.equilibrium()

    @cached_property
    def lit_planes(self) -> dict[str, LitPlane]:
        """The planes light may enter."""
        if self.cell is not None:
            return {side: plane_of_cell(self.cell, side) for side in ("front", "rear")}
        return {side: plane_of_facets(self.mesh, name) for side, name in self._lit_names.items()}

    @property
    def periodic_axes(self) -> tuple[str, ...]:
        """Axes along which opposite sides are one and the same."""
        return self.cell.periodic_axes if self.cell is not None else ()

    def junctions(self) -> list[str]:
        """Surfaces whose layer is of the type opposite to the base."""
        return [name for name, s in self.surfaces.items() if s.is_junction(self.base.doping_type)]

    def changed(self, **changes: Any) -> Problem:
        """A copy with other inputs on the same mesh, e.g. ``problem.changed(light=...)``."""
        copy = dataclasses.replace(self, **changes)
        if not {"mesh", "order"} & changes.keys():
            copy.__dict__["space"] = self.space  # a cached property; shared, since it depends on mesh and order only
        return copy

    def refined(self) -> Problem:
        """The same on the uniformly refined mesh."""
        return dataclasses.replace(self, mesh=self.mesh.refined(), steps=None)

    def __repr__(self) -> str:
        return f"Problem on {self.mesh!r}; {self.space.size} unknowns of order {self.order}"
