"""Recombination of a problem: bulk channels per volume, laws per surface; rate and derivative at quadrature points."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from ..materials import recombination as laws
from ..units import FA, NA, US
from .spaces import evaluate

if TYPE_CHECKING:
    from ..cell.base import Base, Equilibrium
    from ..cell.surface import Surface
    from .problem import Problem

Law = Callable[[Any], tuple[Any, Any]]
"""Δn (cm⁻³) to rate and its derivative: 1/(cm³ s) in the bulk, 1/(cm² s) on a surface."""


@dataclass(frozen=True)
class Channel:
    """One recombination channel in the cells of one volume."""

    volume: str
    name: str
    cells: Any
    law: Law


def bulk_channels(problem: Problem) -> list[Channel]:
    """Channels of every volume, with position-dependent lifetimes evaluated at the quadrature points.

    Parameters
    ----------
    problem : Problem

    Returns
    -------
    list of Channel
    """
    x = problem.space.bulk.x_cm
    channels = []
    for volume, base in problem.volumes.items():
        cells = problem.mesh.volumes[volume]
        for name, law in base_laws(base, problem.equilibrium, x[:, cells]):
            channels.append(Channel(volume, name, cells, law))
    return channels


def base_laws(base: Base, eq: Equilibrium, x_cm: Any) -> list[tuple[str, Law]]:
    """(name, law) of every channel of a base at the positions x_cm, shape (dimension, ...)."""
    found = _defect_laws(base, eq, x_cm) + _auger_laws(base, eq)
    given = base.radiative_cm3_per_s
    B = laws.radiative_coefficient_cm3_per_s(base.temperature_K) if isinstance(given, str) else float(given)
    if B > 0:
        found.append(("radiative", lambda dn: laws.radiative(dn, eq.n0, eq.p0, B)))
    return found


def _defect_laws(base: Base, eq: Equilibrium, x_cm: Any) -> list[tuple[str, Law]]:
    if base.lifetime_us is not None:
        if base.lifetime_us == math.inf:
            return []
        tau = evaluate("lifetime_us", base.lifetime_us, x_cm) * US
        return [("lifetime", lambda dn: laws.constant_lifetime(dn, tau))]
    if math.inf in (base.tau_n0_us, base.tau_p0_us):  # one carrier is never captured
        return []
    tau_n0 = evaluate("tau_n0_us", base.tau_n0_us, x_cm) * US  # type: ignore[arg-type]
    tau_p0 = evaluate("tau_p0_us", base.tau_p0_us, x_cm) * US  # type: ignore[arg-type]
    return [("SRH", lambda dn: laws.srh(dn, eq.n0, eq.p0, eq.ni, tau_n0, tau_p0))]


def _auger_laws(base: Base, eq: Equilibrium) -> list[tuple[str, Law]]:
    if base.auger is None:
        return []
    if isinstance(base.auger, str):
        return [("Auger", lambda dn: laws.auger_richter2012(dn, eq.n0, eq.p0))]
    Cn, Cp = base.auger
    return [("Auger", lambda dn: laws.constant_auger(dn, eq.n0, eq.p0, Cn, Cp))] if Cn or Cp else []


def surface_law(name: str, surface: Surface, base: Base, eq: Equilibrium, x_cm: Any) -> Law | None:
    """Recombination of a surface at the positions x_cm, or None if it does not recombine by a rate.

    An infinite srv fixes Δn = 0 and is no rate.
    """
    parts: list[Law] = []
    scale = laws.J0_temperature_factor(base.temperature_K) if base.material == "silicon" else 1.0
    if surface.J0_fA_per_cm2 not in (None, 0):
        J0 = evaluate(f"{name}: J0_fA_per_cm2", surface.J0_fA_per_cm2, x_cm, zero=True) * FA * scale
        parts.append(lambda dn: laws.surface_J0(dn, eq.n0, eq.p0, eq.ni, J0))
    elif surface.srv_cm_per_s not in (None, 0, math.inf):
        srv = evaluate(f"{name}: srv_cm_per_s", surface.srv_cm_per_s, x_cm, zero=True)
        parts.append(lambda dn: laws.surface_srv(dn, srv))
    if surface.J02_nA_per_cm2 > 0:
        J02 = surface.J02_nA_per_cm2 * NA * math.sqrt(scale)
        parts.append(lambda dn: laws.surface_J02(dn, eq.n0, eq.p0, eq.ni, J02))
    return _total(parts) if parts else None


def _total(parts: list[Law]) -> Law:
    """The sum of several laws."""

    def law(dn: Any) -> tuple[Any, Any]:
        rates, slopes = zip(*(part(dn) for part in parts), strict=True)
        return sum(rates), sum(slopes)

    return law
