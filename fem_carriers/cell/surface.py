"""Surfaces of a cell: recombination, doped layer, contact."""

from __future__ import annotations

import math
from dataclasses import dataclass

from ..errors import Complaints
from . import checks
from .checks import Varying


@dataclass(frozen=True, repr=False)
class DopedLayer:
    """A thin doped layer treated as a sheet.

    Parameters
    ----------
    doping_type : {"n", "p"}
        Type of the layer; opposite to the base it is a junction.
    sheet_resistance_ohm_per_sq : float
        Of the layer alone, Ω/sq; ``math.inf`` for a layer that does not conduct sideways.
    absorbing_depth_um : float
        The layer absorbs the light of this depth (counted as part of the base's thickness).
    collection : float
        Share of the carriers generated in that depth that reach the base side; the rest is lost in the layer.
    """

    doping_type: str
    sheet_resistance_ohm_per_sq: float
    absorbing_depth_um: float = 0.0
    collection: float = 1.0

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("DopedLayer")
        checks.one_of(problems, "doping_type", self.doping_type, ("n", "p"))
        checks.positive(problems, "sheet_resistance_ohm_per_sq", self.sheet_resistance_ohm_per_sq, inf=True)
        checks.positive(problems, "absorbing_depth_um", self.absorbing_depth_um, zero=True)
        share = checks.is_number(self.collection) and 0 <= self.collection <= 1
        problems.unless(share, f"collection = {self.collection!r}", "a share from 0 to 1")
        problems.raise_if_any()


@dataclass(frozen=True, repr=False)
class Contact:
    """Metal on a surface; contacts of one name are one terminal.

    Parameters
    ----------
    terminal : str
        The terminal's name.
    contact_resistivity_mohm_cm2 : float
        ρc in mΩ·cm²; 0 is an ideal contact.
    """

    terminal: str
    contact_resistivity_mohm_cm2: float = 0.0

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Contact")
        checks.name_of(problems, "terminal", self.terminal)
        value = self.contact_resistivity_mohm_cm2
        checks.positive(problems, "contact_resistivity_mohm_cm2", value, zero=True)
        problems.raise_if_any()


@dataclass(frozen=True, repr=False)
class Surface:
    """A surface: how it recombines, which layer it carries, whether metal touches it.

    With neither J0 nor srv the surface does not recombine.

    Parameters
    ----------
    J0_fA_per_cm2 : float or function of position, optional
        qU = J0 (np/ni² − 1); stated at 298.15 K and scaled with ni(T)².
    srv_cm_per_s : float or function of position, optional
        U = S Δn; ``math.inf`` is bare metal, Δn = 0.
    J02_nA_per_cm2 : float
        Adds J02 (√(np/ni²) − 1).
    shunt_ohm_cm2 : float, optional
        Ohmic leakage across a junction: adds (φp − φn)/shunt. On opposite-type layers only; without effect in the
        excess-carrier form at 0 V.
    layer : DopedLayer, optional
    contact : Contact, optional
    J02_edge_nA_per_cm : float
        For an outer edge of the cell: adds J02 (√(np/ni²) − 1) per length of the line where it meets an opposite-type
        layer, the recombination where the edge cuts through the space-charge region. Stated at 298.15 K.
    """

    J0_fA_per_cm2: Varying | None = None
    srv_cm_per_s: Varying | None = None
    J02_nA_per_cm2: float = 0.0
    shunt_ohm_cm2: float | None = None
    layer: DopedLayer | None = None
    contact: Contact | None = None
    J02_edge_nA_per_cm: float = 0.0

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Surface")
        check_recombination(problems, self.J0_fA_per_cm2, self.srv_cm_per_s, self.J02_nA_per_cm2)
        check_parts(problems, self.layer, self.contact)
        check_shunt(problems, self.shunt_ohm_cm2)
        checks.positive(problems, "J02_edge_nA_per_cm", self.J02_edge_nA_per_cm, zero=True)
        problems.raise_if_any()

    @property
    def pins_to_zero(self) -> bool:
        """True where infinite recombination fixes Δn = 0."""
        return self.srv_cm_per_s == math.inf

    def is_junction(self, base_type: str) -> bool:
        """True if the layer's type is opposite to `base_type`."""
        return self.layer is not None and self.layer.doping_type != base_type


def check_recombination(problems: Complaints, J0: object, srv: object, J02: object) -> None:
    """Complain about J0, S and J02 values that are not allowed, or given together."""
    if J0 is not None:
        checks.varying(problems, "J0_fA_per_cm2", J0, zero=True)
    if srv is not None:
        checks.varying(problems, "srv_cm_per_s", srv, zero=True, inf=True)
    problems.unless(
        J0 is None or srv is None,
        f"J0_fA_per_cm2 = {J0!r} and srv_cm_per_s = {srv!r}",
        "one recombination law per surface",
        "J0 for doped or charged surfaces, srv for bare ones",
    )
    checks.positive(problems, "J02_nA_per_cm2", J02, zero=True)


def check_shunt(problems: Complaints, shunt: object) -> None:
    """Complain unless the shunt is None or positive."""
    if shunt is not None:
        checks.positive(problems, "shunt_ohm_cm2", shunt)


def check_parts(problems: Complaints, layer: object, contact: object) -> None:
    """Complain unless layer and contact are of their classes or None."""
    if not (layer is None or isinstance(layer, DopedLayer)):
        problems.add(
            f"layer = {layer!r}", "a DopedLayer or None", 'fc.DopedLayer("n", sheet_resistance_ohm_per_sq=120)'
        )
    if not (contact is None or isinstance(contact, Contact)):
        problems.add(f"contact = {contact!r}", "a Contact or None", 'fc.Contact("front")')


def check_surface(problems: Complaints, name: str, surface: Surface, base_type: str) -> None:
    """Complain about laws that make no sense on this surface of a base of this type."""
    if surface.is_junction(base_type) and surface.srv_cm_per_s is not None:
        problems.add(
            f"{name}: srv_cm_per_s = {surface.srv_cm_per_s!r} on a layer of the type opposite to the base",
            "J0_fA_per_cm2 on such a layer",
            "J0_fA_per_cm2=50",
        )
    shunted = surface.shunt_ohm_cm2 is not None and not surface.is_junction(base_type)
    given = f"{name}: shunt_ohm_cm2 = {surface.shunt_ohm_cm2!r} where there is no junction"
    problems.unless(not shunted, given, "a shunt across a layer of the type opposite to the base")


def check_depth(problems: Complaints, name: str, surface: Surface, thickness_um: float) -> None:
    """Complain about a layer that would absorb light beyond the base."""
    if surface.layer is not None:
        depth = surface.layer.absorbing_depth_um
        given = f"{name}: absorbing_depth_um = {depth:g}"
        problems.unless(depth <= thickness_um, given, f"at most the thickness, {thickness_um:g} µm")


def check_no_edge(problems: Complaints, name: str, surface: Surface) -> None:
    """Complain about an edge current on a face, which has no edge of its own."""
    given = f"{name}: J02_edge_nA_per_cm = {surface.J02_edge_nA_per_cm!r} on a face"
    allowed = "an edge current on a side of the cell"
    problems.unless(not surface.J02_edge_nA_per_cm, given, allowed, 'sides={"x_max": fc.Surface(...)}')


def check_inner_surface(problems: Complaints, name: str, surface: Surface) -> None:
    """Complain about what a surface inside the volume cannot carry."""
    extra = {"layer": surface.layer, "contact": surface.contact, "shunt_ohm_cm2": surface.shunt_ohm_cm2}
    extra["J02_edge_nA_per_cm"] = surface.J02_edge_nA_per_cm or None
    given = ", ".join(key for key, value in extra.items() if value is not None)
    allowed = "srv_cm_per_s, J0_fA_per_cm2 and J02_nA_per_cm2 there"
    problems.unless(not given, f"{name}, which lies inside the volume, with {given}", allowed)
