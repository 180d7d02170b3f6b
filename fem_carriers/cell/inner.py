"""Recombining planes inside the piece: grain boundaries, cracks."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from ..errors import Complaints
from . import checks
from .checks import Varying
from .surface import Surface, check_recombination

if TYPE_CHECKING:
    from .unit_cell import UnitCell

SIDES = ("x_min", "x_max", "y_min", "y_max")


@dataclass(frozen=True, repr=False)
class InnerSurface:
    """A vertical plane across the piece at which carriers recombine, such as a grain boundary.

    The excess density is continuous across it. U = S Δn counts the carriers from both sides per area of the plane, so
    that the flux into it from each side of a symmetric one is S Δn/2. A crack whose faces have the recombination
    velocity S each is a plane with 2 S; that it also stops the current of majority carriers is not modelled.

    Parameters
    ----------
    x_um, y_um : float
        Position; exactly one of the two. In a piece between mirror planes its mirror images are implied.
    srv_cm_per_s : float or function of position, optional
        U = S Δn; ``math.inf`` fixes Δn = 0.
    J0_fA_per_cm2 : float or function of position, optional
        qU = J0 (np/ni² − 1); instead of `srv_cm_per_s`.
    J02_nA_per_cm2 : float
        Adds J02 (√(np/ni²) − 1).
    from_z_um, to_z_um : float, optional
        Lower and upper end, from the rear; default is the whole thickness.
    """

    x_um: float | None = None
    y_um: float | None = None
    srv_cm_per_s: Varying | None = None
    J0_fA_per_cm2: Varying | None = None
    J02_nA_per_cm2: float = 0.0
    from_z_um: float | None = None
    to_z_um: float | None = None

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("InnerSurface")
        checks.exactly_one(problems, "position", {"x_um": self.x_um, "y_um": self.y_um}, "x_um=100")
        for name in ("x_um", "y_um", "from_z_um", "to_z_um"):
            if getattr(self, name) is not None:
                checks.finite(problems, name, getattr(self, name))
        check_recombination(problems, self.J0_fA_per_cm2, self.srv_cm_per_s, self.J02_nA_per_cm2)
        laws = (self.J0_fA_per_cm2, self.srv_cm_per_s, self.J02_nA_per_cm2 or None)
        given = "none of srv_cm_per_s, J0_fA_per_cm2, J02_nA_per_cm2"
        problems.unless(laws != (None, None, None), given, "a recombination law", "srv_cm_per_s=1e4")
        problems.raise_if_any()

    @property
    def axis(self) -> str:
        """The axis at right angles to the plane."""
        return "x" if self.x_um is not None else "y"

    @property
    def position_um(self) -> float:
        """Position on that axis."""
        return float(self.x_um if self.x_um is not None else self.y_um)  # type: ignore[arg-type]

    @property
    def surface(self) -> Surface:
        """How it recombines."""
        return Surface(self.J0_fA_per_cm2, self.srv_cm_per_s, self.J02_nA_per_cm2)

    def heights_um(self, thickness_um: float) -> tuple[float, float]:
        """Lower and upper end."""
        low = 0.0 if self.from_z_um is None else float(self.from_z_um)
        return low, thickness_um if self.to_z_um is None else float(self.to_z_um)


def check_inner(problems: Complaints, cell: UnitCell) -> None:
    """Complain about planes outside of the piece, on its sides, upon each other, or with a name that is taken."""
    taken = {*SIDES, "front", "rear", "base"}
    for name, plane in cell.inner.items():
        if not problems.unless(
            isinstance(plane, InnerSurface), f"inner[{name!r}] = {plane!r}", "an InnerSurface",
            "fc.InnerSurface(x_um=100, srv_cm_per_s=1e4)",
        ):  # fmt: skip
            continue
        checks.name_of(problems, "inner surface", name)
        problems.unless(name not in taken, f"inner surface named {name!r}", f"a name other than {', '.join(taken)}")
        _check_position(problems, name, plane, cell)
    _check_apart(problems, {n: p for n, p in cell.inner.items() if isinstance(p, InnerSurface)}, cell.thickness_um)


def _check_position(problems: Complaints, name: str, plane: InnerSurface, cell: UnitCell) -> None:
    given = f"{name}: {plane.axis}_um = {plane.position_um:g}"
    if not problems.unless(plane.axis == "x" or cell.dimension == 3, given, "x_um in a 2-D cell"):
        return
    low, high = cell.frame.x if plane.axis == "x" else cell.frame.y
    allowed = f"a position inside the modelled piece, {low:g} to {high:g} µm"
    try_ = f'on a mirror plane: half of its srv on sides={{"{plane.axis}_min": ...}}, or symmetry="periodic"'
    margin = 1e-6 * (high - low)
    problems.unless(low + margin < plane.position_um < high - margin, given, allowed, try_)
    bottom, top = plane.heights_um(cell.thickness_um)
    given = f"{name}: from_z_um = {bottom:g}, to_z_um = {top:g}"
    problems.unless(0 <= bottom < top <= cell.thickness_um, given, f"0 ≤ from < to ≤ {cell.thickness_um:g} µm")


def _check_apart(problems: Complaints, planes: Mapping[str, InnerSurface], thickness_um: float) -> None:
    items = [(n, p, p.heights_um(thickness_um)) for n, p in planes.items()]
    for i, (name, a, (a_low, a_high)) in enumerate(items):
        for other, b, (b_low, b_high) in items[i + 1 :]:
            together = a.axis == b.axis and math.isclose(a.position_um, b.position_um, abs_tol=1e-6)
            if together and max(a_low, b_low) < min(a_high, b_high):
                problems.add(f"inner surfaces {name} and {other} in one place", "one law per place", "a sum of the two")


def inner_mapping(problems: Complaints, inner: Any) -> dict[str, Any]:
    """The planes by name; complains about anything but a mapping."""
    good = isinstance(inner, Mapping)
    example = 'e.g. {"grain_boundary": fc.InnerSurface(x_um=100, srv_cm_per_s=1e4)}'
    return dict(inner) if problems.unless(good, f"inner = {inner!r}", example) else {}
