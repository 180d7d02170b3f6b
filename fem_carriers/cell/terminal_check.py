"""Layouts that have no finite, unique terminal currents, found in the description alone."""

from __future__ import annotations

from collections.abc import Collection
from typing import TYPE_CHECKING

from ..errors import Complaints

if TYPE_CHECKING:
    from .plan import Region
    from .unit_cell import UnitCell


def check_terminals(cell: UnitCell) -> None:
    """Refuse, before any mesh is made, what a current-voltage calculation could only fail on.

    Parameters
    ----------
    cell : UnitCell

    Raises
    ------
    InputError
        One terminal on both polarities; no path for one of the carriers; bare metal beside a junction.
    """
    problems = Complaints("terminals of the cell")
    kind = cell.base.doping_type
    layouts = [cell.layout(side).regions for side in ("front", "rear")]
    surfaces = [r.surface for regions in layouts for r in regions] + list(cell.sides.values())
    contacts = [(s.contact.terminal, s.is_junction(kind)) for s in surfaces if s.contact is not None]
    minority, majority = ({t for t, junction in contacts if junction == side} for side in (True, False))
    complain_of_terminals(problems, minority, majority)
    if any(_touch(a, b) for regions in layouts for a in regions for b in regions if _clash(a, b, kind)):
        complain_of_touching(problems)
    problems.raise_if_any()


def complain_of_terminals(problems: Complaints, minority: Collection[str], majority: Collection[str]) -> None:
    """Complain about a terminal on both polarities, and where one of the carriers has no way in and out.

    Majority carriers alone may flow between two contacts (a resistor).
    """
    for name in sorted(set(minority) & set(majority)):
        given = f"the terminal {name!r} on layers of both polarities (or on a layer and on the bare base)"
        problems.add(given, "one polarity per terminal; this would short the cell", "two terminal names")
    if bool(minority) == bool(majority) or len(majority) > 1:
        return
    kind = "majority" if minority else "minority"
    given = f"the terminal {min(minority or majority)!r} alone: no path for {kind} carriers to a terminal"
    allowed = "contacts for both carriers, two or more that reach the base's majority carriers, or none at all"
    problems.add(given, allowed, f"a contact for the {kind} carriers")


def complain_of_touching(problems: Complaints) -> None:
    """Complain about bare metal in touch with a junction."""
    given = "bare metal (infinite srv) that touches a layer of the type opposite to the base"
    allowed = "no touching surfaces that impose different potentials: the current between them is infinite"
    problems.add(given, allowed, "a gap, or a finite srv_cm_per_s (1e7 is near the thermal velocity)")


def _clash(a: Region, b: Region, base_type: str) -> bool:
    return a.surface.pins_to_zero and b.surface.is_junction(base_type)


def _touch(a: Region, b: Region) -> bool:
    return bool(a.shape.boundary.intersection(b.shape.boundary).length > 0)
