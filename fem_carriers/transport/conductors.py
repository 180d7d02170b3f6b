"""Sheets, contacts and terminals of the bipolar form: which potential they act on, and their assembled matrices."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell.terminal_check import complain_of_terminals, complain_of_touching
from ..errors import Complaints
from ..units import MOHM
from .ties import Junction, find_junctions, periodic_map

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from ..cell.surface import Surface
    from .problem import Problem


@dataclass(frozen=True)
class Metal:
    """One contacted surface.

    Parameters
    ----------
    surface, terminal : str
    on_layer : bool
        True if it touches an opposite-type layer (acts on the layer's potential), False if it acts on the base's
        majority carriers, directly or through a layer of the base's type.
    reference : str
        The terminal to which the potential here is stored relative.
    resistivity_ohm_cm2 : float
        0 for an ideal contact.
    dofs : int array
    mass : sparse matrix (n, n)
        ∫ u v over the contact.
    load : (n,) array
        ∫ v over the contact.
    """

    surface: str
    terminal: str
    on_layer: bool
    reference: str
    resistivity_ohm_cm2: float
    dofs: NDArray[np.int64]
    mass: Any
    load: NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Conductors:
    """Sheets, contacts and terminals of a problem.

    Parameters
    ----------
    problem : Problem
    """

    problem: Problem

    @cached_property
    def partner(self) -> NDArray[np.int64]:
        """Periodic partner of every unknown."""
        return periodic_map(self.problem.space, self.problem.periodic_axes)

    @cached_property
    def junctions(self) -> list[Junction]:
        """Connected opposite-type layers."""
        return find_junctions(self.problem, self.partner, several_terminals=True)

    @cached_property
    def layer(self) -> NDArray[np.bool_]:
        """Unknowns on opposite-type layers, shape (n,)."""
        on = np.zeros(self.problem.space.size, dtype=bool)
        for junction in self.junctions:
            on[junction.dofs] = True
        return on

    @cached_property
    def bare(self) -> NDArray[np.bool_]:
        """Unknowns on bare metal, Δn = 0, shape (n,)."""
        on = np.zeros(self.problem.space.size, dtype=bool)
        for name, surface in self.problem.surfaces.items():
            if surface.pins_to_zero:
                on[self.problem.space.facet_dofs(self.problem.mesh.surfaces[name])] = True
        return on

    @cached_property
    def sheets(self) -> dict[str, tuple[bool, Any]]:
        """(acts on layer potential, ∫ ∇s u·∇s v / R_sh in 1/Ω) of every conducting layer."""
        found = {}
        for name, surface in self.problem.surfaces.items():
            if surface.layer is not None and np.isfinite(surface.layer.sheet_resistance_ohm_per_sq):
                stiffness = sheet_stiffness(self.problem.space.surfaces[name])
                opposite = surface.is_junction(self.problem.base.doping_type)
                found[name] = (opposite, stiffness / surface.layer.sheet_resistance_ohm_per_sq)
        return found

    @cached_property
    def shunts(self) -> dict[str, Any]:
        """∫ u v / r_shunt in 1/Ω of every shunted junction surface."""
        return {
            name: mass_of(self.problem.space.surfaces[name]) / surface.shunt_ohm_cm2
            for name, surface in self.problem.surfaces.items()
            if surface.shunt_ohm_cm2 is not None and surface.is_junction(self.problem.base.doping_type)
        }

    @cached_property
    def metals(self) -> list[Metal]:
        """All contacts."""
        found = []
        for name, surface in self.problem.surfaces.items():
            if surface.contact is not None:
                found.append(self._metal(name, surface))
        return found

    def _metal(self, name: str, surface: Surface) -> Metal:
        assert surface.contact is not None
        basis = self.problem.space.surfaces[name]
        mass = mass_of(basis)
        opposite = surface.is_junction(self.problem.base.doping_type)
        terminal = surface.contact.terminal
        reference = self._layer_reference(name) if opposite else self.majority_reference
        rho = surface.contact.contact_resistivity_mohm_cm2 * MOHM
        dofs = self.problem.space.facet_dofs(self.problem.mesh.surfaces[name])
        load = np.asarray(mass.sum(axis=1)).ravel()
        return Metal(name, terminal, opposite, reference or terminal, rho, dofs, mass, load)

    def _layer_reference(self, name: str) -> str | None:
        return next((j.terminal for j in self.junctions if name in j.surfaces), None)

    @cached_property
    def majority_reference(self) -> str | None:
        """Terminal to which the majority potential is stored relative; None if no metal reaches the majority."""
        names = sorted(
            s.contact.terminal
            for s in self.problem.surfaces.values()
            if s.contact is not None and not s.is_junction(self.problem.base.doping_type)
        )
        return names[0] if names else None

    @cached_property
    def minority_terminals(self) -> list[str]:
        """Terminals on opposite-type layers."""
        return sorted({m.terminal for m in self.metals if m.on_layer})

    @cached_property
    def majority_terminals(self) -> list[str]:
        """Terminals that reach the base's majority carriers."""
        return sorted({m.terminal for m in self.metals if not m.on_layer})

    @cached_property
    def hole_terminals(self) -> list[str]:
        """Terminals that collect holes."""
        return self.majority_terminals if self.problem.base.doping_type == "p" else self.minority_terminals

    def offsets(self, voltages: Mapping[str, float]) -> NDArray[np.float64]:
        """What the terminals add to f − s on layer unknowns, V, shape (n,); zero elsewhere."""
        offset = np.zeros(self.problem.space.size)
        base = voltages.get(self.majority_reference or "", 0.0)
        for junction in self.junctions:
            own = voltages[junction.terminal] if junction.terminal is not None else base
            offset[junction.dofs] = base - own
        return offset

    def check(self) -> None:
        """Refuse layouts without a finite, unique answer.

        Raises
        ------
        InputError
            One terminal on both polarities; a terminal without a way for the other carriers; touching patches that
            impose different potentials.
        """
        problems = Complaints("solve_bipolar")
        complain_of_terminals(problems, self.minority_terminals, self.majority_terminals)
        if (self.layer & self.bare).any():
            complain_of_touching(problems)
        self._check_references(problems)
        self._check_ideal(problems)
        problems.raise_if_any()

    def _check_references(self, problems: Complaints) -> None:
        """All pieces of a contact must store the layer's potential relative to one terminal."""
        for metal in self.metals:
            own = {j.terminal for j in self.junctions if metal.surface in j.surfaces}
            if len(own) > 1:
                given = f"the contact {metal.surface!r} on separate layers, one of which carries another terminal too"
                problems.add(given, "layers with the same terminals", "contacts with different names on the layers")

    def _check_ideal(self, problems: Complaints) -> None:
        ideal = [m for m in self.metals if m.resistivity_ohm_cm2 == 0]
        for i, a in enumerate(ideal):
            for b in ideal[i + 1 :]:
                if a.terminal != b.terminal and a.on_layer == b.on_layer and np.intersect1d(a.dofs, b.dofs).size:
                    given = f"ideal contacts {a.surface} and {b.surface} of different terminals that touch"
                    problems.add(given, "a finite current between them", "a gap or a contact_resistivity_mohm_cm2")


def mass_of(basis: Any) -> Any:
    """∫ u v over a surface."""
    from skfem import BilinearForm

    return BilinearForm(lambda u, v, w: u * v).assemble(basis).tocsr()


def sheet_stiffness(basis: Any) -> Any:
    """∫ ∇s u·∇s v over a surface, ∇s the gradient along it.

    The normal part is taken off each gradient, not off their product: in flat cells it is many decades larger.
    """
    from skfem import BilinearForm
    from skfem.helpers import dot, grad

    def along(u: Any, w: Any) -> Any:
        return grad(u) - w.n * dot(grad(u), w.n)

    def integrand(u: Any, v: Any, w: Any) -> Any:
        return dot(along(u, w), along(v, w))

    return BilinearForm(integrand).assemble(basis).tocsr()
