"""Where light falls in the plan, beside what metal shades."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from ..errors import Complaints
from . import checks

if TYPE_CHECKING:
    import shapely

FAR_UM = 1e9


@dataclass(frozen=True)
class LitRectangle:
    """Light falls on x_um[0] < x < x_um[1] (and y_um[0] < y < y_um[1] in 3-D)."""

    x_um: tuple[float, float]
    y_um: tuple[float, float] = (-FAR_UM, FAR_UM)

    def __post_init__(self) -> None:
        problems = Complaints("LitRectangle")
        for name, value in (("x_um", self.x_um), ("y_um", self.y_um)):
            if checks.pair(problems, name, value):
                problems.unless(value[0] < value[1], f"{name} = {value!r}", "the smaller number first")
        problems.raise_if_any()

    def outline(self, dimension: int) -> shapely.Polygon:
        """Outline in µm in a 2-D or 3-D cell."""
        from shapely import box

        return box(self.x_um[0], self.y_um[0], self.x_um[1], self.y_um[1])


@dataclass(frozen=True)
class HalfPlane:
    """Light falls on one side of a line: `side` "below" or "above" `edge_um` on `axis`."""

    edge_um: float
    axis: str = "x"
    side: str = "below"

    def __post_init__(self) -> None:
        problems = Complaints("HalfPlane")
        checks.finite(problems, "edge_um", self.edge_um)
        checks.one_of(problems, "axis", self.axis, ("x", "y"))
        checks.one_of(problems, "side", self.side, ("below", "above"))
        problems.raise_if_any()

    def outline(self, dimension: int) -> shapely.Polygon:
        """Outline in µm in a 2-D or 3-D cell."""
        from shapely import box

        low, high = (-FAR_UM, self.edge_um) if self.side == "below" else (self.edge_um, FAR_UM)
        return box(low, -FAR_UM, high, FAR_UM) if self.axis == "x" else box(-FAR_UM, low, FAR_UM, high)


@dataclass(frozen=True)
class Spot:
    """Light falls on a disc; in 2-D on a line of this width."""

    diameter_um: float
    center_um: tuple[float, float] = (0.0, 0.0)

    def __post_init__(self) -> None:
        problems = Complaints("Spot")
        checks.positive(problems, "diameter_um", self.diameter_um)
        checks.pair(problems, "center_um", self.center_um)
        problems.raise_if_any()

    def outline(self, dimension: int) -> shapely.Polygon:
        """Outline in µm: in 3-D a polygon of 256 corners with the disc's area, in 2-D a line of the disc's width."""
        from .outlines import disc

        if dimension == 2:
            half = self.diameter_um / 2
            return LitRectangle((self.center_um[0] - half, self.center_um[0] + half)).outline(2)
        return disc(self.center_um, self.diameter_um / 2, 256)


Mask = LitRectangle | HalfPlane | Spot


def check_masks_on(problems: Complaints, mask: tuple[Mask, ...], box: Any, dimension: int) -> None:
    """Complain about a mask that the piece cannot hold: a limit in y in 2-D, or no light inside.

    Masks are not repeated from period to period.
    """
    from shapely import union_all

    for m in mask:
        across_y = isinstance(m, HalfPlane) and m.axis == "y"
        limited = isinstance(m, LitRectangle) and m.y_um != (-FAR_UM, FAR_UM)
        given = f"mask {m!r} with a limit in y"
        problems.unless(dimension == 3 or not (across_y or limited), given, "limits in x in a 2-D cell")
    if mask and union_all([m.outline(dimension) for m in mask]).intersection(box).area == 0:
        x_low, _, x_high, _ = box.bounds
        given = f"mask {', '.join(map(repr, mask))} outside of the modelled piece"
        problems.add(given, f"light on some of x from {x_low:g} to {x_high:g} µm")


def check_masks(problems: Complaints, mask: Any) -> tuple[Mask, ...]:
    """The mask as a tuple of shapes; complains about anything else."""
    shapes = () if mask is None else mask if isinstance(mask, tuple | list) else (mask,)
    for shape in shapes:
        if not isinstance(shape, LitRectangle | HalfPlane | Spot):
            problems.add(f"mask {shape!r}", "LitRectangle, HalfPlane, Spot, or several of them")
    return tuple(shapes)
