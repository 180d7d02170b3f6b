"""Patches on a face: strips, dots, rectangles, polygons. What a patch does not state it takes from the face below."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Final

from ..errors import Complaints
from . import checks
from .surface import Surface, check_parts, check_recombination, check_shunt

if TYPE_CHECKING:
    from collections.abc import Sequence


class _Below:
    """Marks a property that a patch takes from the face below."""

    def __repr__(self) -> str:
        return "BELOW"

    def __reduce__(self) -> str:
        return "BELOW"  # stays one object when sent to another process


BELOW: Final = _Below()
SURFACE_FIELDS = ("J0_fA_per_cm2", "srv_cm_per_s", "J02_nA_per_cm2", "shunt_ohm_cm2", "layer", "contact")


@dataclass(frozen=True, kw_only=True)
class _Changes:
    """Surface properties a patch may change; the default is that of the face below. J0 and srv replace each other."""

    J0_fA_per_cm2: Any = BELOW
    srv_cm_per_s: Any = BELOW
    J02_nA_per_cm2: Any = BELOW
    shunt_ohm_cm2: Any = BELOW
    layer: Any = BELOW
    contact: Any = BELOW

    def surface_on(self, below: Surface) -> Surface:
        """The patch's surface when it lies on `below`.

        Parameters
        ----------
        below : Surface

        Returns
        -------
        Surface
        """
        stated = {f: getattr(self, f) for f in SURFACE_FIELDS if getattr(self, f) is not BELOW}
        if stated.get("J0_fA_per_cm2") is not None and "srv_cm_per_s" not in stated:
            stated["srv_cm_per_s"] = None
        if stated.get("srv_cm_per_s") is not None and "J0_fA_per_cm2" not in stated:
            stated["J0_fA_per_cm2"] = None
        return dataclasses.replace(below, **stated)

    def _check_changes(self, problems: Complaints) -> None:
        stated = {f: None if getattr(self, f) is BELOW else getattr(self, f) for f in SURFACE_FIELDS}
        J02 = 0.0 if stated["J02_nA_per_cm2"] is None else stated["J02_nA_per_cm2"]
        check_recombination(problems, stated["J0_fA_per_cm2"], stated["srv_cm_per_s"], J02)
        check_parts(problems, stated["layer"], stated["contact"])
        check_shunt(problems, stated["shunt_ohm_cm2"])


@dataclass(frozen=True, repr=False)
class Strip(_Changes):
    """An infinitely long strip.

    Parameters
    ----------
    name : str
    width_um : float
    center_um : float
        Position of the centre line on the axis across the strip.
    along : {"y", "x"}
    spacing_um : float, optional
        Repeats the strip at this distance within the period; must divide it.
    opaque_width_um : float, optional
        Width that shades; default is the width if the strip has a contact, else none.
    """

    name: str
    width_um: float
    center_um: float = 0.0
    along: str = "y"
    spacing_um: float | None = None
    opaque_width_um: float | None = None

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints(f"Strip {self.name!r}")
        checks.name_of(problems, "patch", self.name)
        checks.positive(problems, "width_um", self.width_um)
        checks.finite(problems, "center_um", self.center_um)
        checks.one_of(problems, "along", self.along, ("x", "y"))
        _check_optional(problems, self, "spacing_um")
        _check_optional(problems, self, "opaque_width_um", zero=True)
        self._check_changes(problems)
        problems.raise_if_any()


@dataclass(frozen=True, repr=False)
class Dot(_Changes):
    """A round patch, repeated on a grid if spacings are given.

    Parameters
    ----------
    name : str
    diameter_um : float
    center_um : (float, float)
    spacing_x_um, spacing_y_um : float, optional
        Distances between repeats within the period; must divide it.
    staggered : bool
        Every second row (in y) is shifted by half the spacing in x.
    opaque_diameter_um : float, optional
        Diameter that shades; default is the diameter if the dot has a contact, else none.
    """

    name: str
    diameter_um: float
    center_um: tuple[float, float] = (0.0, 0.0)
    spacing_x_um: float | None = None
    spacing_y_um: float | None = None
    staggered: bool = False
    opaque_diameter_um: float | None = None

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints(f"Dot {self.name!r}")
        checks.positive(problems, "diameter_um", self.diameter_um)
        _check_optional(problems, self, "opaque_diameter_um", zero=True)
        _check_island(problems, self)
        problems.raise_if_any()


@dataclass(frozen=True, repr=False)
class Rectangle(_Changes):
    """A rectangle with sides along x and y, repeated on a grid if spacings are given.

    Parameters
    ----------
    name : str
    width_um, length_um : float
        Sizes in x and y.
    center_um : (float, float)
    spacing_x_um, spacing_y_um, staggered
        As for `Dot`.
    opaque_width_um, opaque_length_um : float, optional
        Sizes that shade; default is the rectangle itself if it has a contact, else none.
    """

    name: str
    width_um: float
    length_um: float
    center_um: tuple[float, float] = (0.0, 0.0)
    spacing_x_um: float | None = None
    spacing_y_um: float | None = None
    staggered: bool = False
    opaque_width_um: float | None = None
    opaque_length_um: float | None = None

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints(f"Rectangle {self.name!r}")
        checks.positive(problems, "width_um", self.width_um)
        checks.positive(problems, "length_um", self.length_um)
        _check_optional(problems, self, "opaque_width_um", zero=True)
        _check_optional(problems, self, "opaque_length_um", zero=True)
        _check_island(problems, self)
        problems.raise_if_any()


@dataclass(frozen=True, repr=False)
class Polygon(_Changes):
    """A polygon; it shades itself if it has a contact.

    Parameters
    ----------
    name : str
    points_um : sequence of (float, float)
        Corners in order, at least three; the outline may not cross itself.
    """

    name: str
    points_um: Sequence[tuple[float, float]] = field(default_factory=tuple)

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints(f"Polygon {self.name!r}")
        checks.name_of(problems, "patch", self.name)
        points = tuple(map(tuple, self.points_um))
        object.__setattr__(self, "points_um", points)
        wrong = [p for i, p in enumerate(points) if not checks.pair(problems, f"points_um[{i}]", p)]
        if (
            problems.unless(len(points) >= 3, f"points_um with {len(points)} corners", "three corners or more")
            and not wrong
        ):
            _check_simple(problems, points)
        self._check_changes(problems)
        problems.raise_if_any()


Patch = Strip | Dot | Rectangle | Polygon


def _check_optional(problems: Complaints, patch: Any, name: str, *, zero: bool = False) -> None:
    value = getattr(patch, name)
    if value is not None:
        checks.positive(problems, name, value, zero=zero)


def _check_island(problems: Complaints, patch: Dot | Rectangle) -> None:
    """Checks shared by the patches that can repeat on a grid."""
    checks.name_of(problems, "patch", patch.name)
    checks.pair(problems, "center_um", patch.center_um)
    _check_optional(problems, patch, "spacing_x_um")
    _check_optional(problems, patch, "spacing_y_um")
    problems.unless(
        not patch.staggered or (patch.spacing_x_um is not None and patch.spacing_y_um is not None),
        "staggered = True without both spacings",
        "staggered together with spacing_x_um and spacing_y_um",
    )
    patch._check_changes(problems)


def _check_simple(problems: Complaints, points: tuple[Any, ...]) -> None:
    from shapely import Polygon as Outline
    from shapely import is_valid_reason

    outline = Outline(points)
    reason = is_valid_reason(outline)
    problems.unless(
        outline.is_valid and outline.area > 0,
        f"points_um: the outline crosses or touches itself ({reason})",
        "a simple outline with an area",
        "list the corners in order around the outline",
    )
