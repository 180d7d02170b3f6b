"""How fine a unit cell is meshed: where steps start small, how fast they grow, how large they get."""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from ..cell import checks
from ..cell.patches import Dot, Polygon
from ..errors import Complaints
from ..units import US

if TYPE_CHECKING:
    from ..cell.base import Base
    from ..cell.plan import Layout
    from ..cell.unit_cell import UnitCell

FIRST_STEP_PER_LEVEL = 5.0
LARGEST_GROWTH = 25.0
MILD = 10.0
"""Outlines where the flux stays bounded start this many times coarser than singular ones."""


@dataclass(frozen=True)
class Fineness:
    """Steps of the mesh of a unit cell, µm.

    Parameters
    ----------
    first_step_um : float
        Beside edges where the flux is singular: edges of junctions, of bare metal, of contacts.
    mild_step_um : float
        Beside outlines where the flux stays bounded.
    growth : float
        Ratio of neighbouring steps.
    largest_um : float
        In plan.
    largest_share : float
        Largest step as a share of a stretch between outlines.
    largest_depth_um : float
    plain_step_um : float
        First step below a face without singular edges, and beside a recombining side.
    circle_corners : int
        Corners of a full circle.
    """

    first_step_um: float
    mild_step_um: float
    growth: float
    largest_um: float
    largest_share: float
    largest_depth_um: float
    plain_step_um: float
    circle_corners: int

    def at_level(self, level: float) -> Fineness:
        """A member of the family of meshes in which everything is refined together.

        With quadratic elements the error of a current falls with the fourth power of the logarithm of the growth, and
        in proportion to the first step beside an edge where the flux goes with r^-½. One level divides the first by
        √2 and the second by 5, so that both errors fall four to five times.
        """
        width, first = 2 ** (-level / 2), self.first_step_um * FIRST_STEP_PER_LEVEL**-level
        return dataclasses.replace(
            self,
            first_step_um=first,
            mild_step_um=min(MILD * first, self.mild_step_um * MILD * width),
            growth=min(self.growth**width, LARGEST_GROWTH),
            largest_um=self.largest_um * width,
            largest_share=min(self.largest_share * width, 1.0),
            largest_depth_um=self.largest_depth_um * width,
            plain_step_um=self.plain_step_um * width**2,
        )

    @property
    def can_be_coarser(self) -> bool:
        """Whether the first step is still well below the largest ones."""
        return self.first_step_um < 0.1 * min(self.largest_um, self.largest_depth_um)


def choose_fineness(cell: UnitCell, first_step_um: float | None, growth: float | None, level: float = 0.0) -> Fineness:
    """Default steps, from the smallest feature, the thickness and the diffusion length.

    Parameters
    ----------
    cell : UnitCell
    first_step_um, growth : float, optional
        Replace the defaults: 1/400 (2-D) or 1/40 (3-D) of the smallest feature; 2.2, or 2 for tets (dots, polygons).
    level : float
        Place in the family of meshes of which these are level 0; see `Fineness.at_level`.

    Raises
    ------
    InputError
        A first step or a growth that is not allowed.
    """
    problems = Complaints("mesh fineness")
    if first_step_um is not None:
        checks.positive(problems, "first_step_um", first_step_um, try_="0.1 to 1 µm")
    if growth is not None:
        good = checks.is_number(growth) and 1 < growth <= 4
        problems.unless(good, f"growth = {growth!r}", "a number above 1, at most 4", "2")
    problems.raise_if_any()
    flat = cell.dimension == 2
    feature = smallest_feature_um(cell)
    first = first_step_um or feature / (400 if flat else 200)
    width = max(cell.frame.x[1] - cell.frame.x[0], 0.0 if flat else cell.frame.y[1] - cell.frame.y[0])
    short = diffusion_length_um(cell.base, cell) / 3
    chosen = Fineness(
        first_step_um=first,
        mild_step_um=MILD * first,
        growth=growth or (2.2 if flat else 2.6),
        largest_um=width / 8,
        largest_share=0.25 if flat else 0.5,
        largest_depth_um=cell.thickness_um / (10 if flat else 8),
        plain_step_um=max(min(cell.thickness_um / (60 if flat else 20), short), first),
        circle_corners=0,
    ).at_level(level)
    return dataclasses.replace(chosen, circle_corners=corners_for(feature / chosen.first_step_um))


def _has_other_than_boxes(cell: UnitCell) -> bool:
    patches = [*cell.front.patches, *cell.rear.patches]  # type: ignore[union-attr]
    return any(isinstance(patch, Dot | Polygon) for patch in patches)


def circle_corners(first_step_um: float, cell: UnitCell) -> int:
    """Corners of a full circle, a multiple of 8 from 16 to 96 that grows as the first step shrinks.

    The polygon has the area of the circle; the current into it then differs by 2e-4 for 16 corners, less for more, and
    every corner is a grid line.
    """
    return corners_for(smallest_feature_um(cell) / first_step_um)


def corners_for(ratio: float) -> int:
    """The same from the ratio of the smallest feature to the first step."""
    return int(8 * round(min(max(16.0, 2.4 * math.sqrt(ratio)), 96.0) / 8))


def singular_groups(layout: Layout, base_type: str) -> list[Any]:
    """Unions of the regions that pin or carry current alike; between them the flux is singular."""
    from shapely import union_all

    groups: dict[Any, list[Any]] = {}
    for region in layout.regions:
        s = region.surface
        terminal = s.contact.terminal if s.contact is not None else None
        groups.setdefault((s.is_junction(base_type), s.pins_to_zero, terminal), []).append(region.shape)
    return [union_all(shapes) for shapes in groups.values()]


def smallest_feature_um(cell: UnitCell) -> float:
    """Half width of the narrowest stretch between singular edges, or the thickness if that is less.

    For a polygon twice its area over its perimeter stands for its half width.
    """
    sizes = [cell.thickness_um]
    for side in ("front", "rear"):
        groups = singular_groups(cell.layout(side), cell.base.doping_type)
        if len(groups) > 1:
            parts = [part for group in groups for part in getattr(group, "geoms", [group])]
            sizes += [_half_width(part, cell.dimension == 2) for part in parts]
    return min(sizes)


def _half_width(part: Any, flat: bool) -> float:
    low_x, low_y, high_x, high_y = part.bounds
    if flat:
        return float(high_x - low_x)
    return float(min(2 * part.area / part.length, high_x - low_x, high_y - low_y))


def diffusion_length_um(base: Base, cell: UnitCell) -> float:
    """Shortest low-injection diffusion length √(Dτ) in the piece."""
    lifetimes = (base.lifetime_us, base.tau_n0_us if base.doping_type == "p" else base.tau_p0_us)
    given = next((t for t in lifetimes if t is not None), math.inf)
    shortest = _lowest(given, cell) if callable(given) else given
    return math.sqrt(base.equilibrium().minority_diffusivity * shortest * US) * 1e4


def _lowest(function: Any, cell: UnitCell, samples: int = 9) -> float:
    """Smallest value of a function of position on a coarse grid over the piece."""
    import numpy as np

    spans = [cell.frame.x, (0.0, 0.0) if cell.dimension == 2 else cell.frame.y, (0.0, cell.thickness_um)]
    x, y, z = np.meshgrid(*(np.linspace(a, b, samples) for a, b in spans))
    return float(max(np.min(function(x, y, z)), 1e-9))
