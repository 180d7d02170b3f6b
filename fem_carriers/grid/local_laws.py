"""How J(u) varies over the cell: parts with another law, a map of light, metal above, recombination along edges."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..constants import STANDARD_TEMPERATURE_K
from ..errors import Complaints
from ..units import MM, NA
from .cell_current import CellCurrent, Law, mixed
from .diodes import exponential

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .shading import Bands

Map = Callable[[Any, Any], Any]
"""``f(x_mm, y_mm)`` on arrays, returning an array."""
SIDES = ("left", "right", "bottom", "top")


@dataclass(frozen=True, repr=False)
class Region:
    """A part of the cell with a law of its own: a shaded part, a poor lifetime.

    Parameters
    ----------
    name : str
    current : CellCurrent
        For a shaded part ``current.with_light(factor)``.
    box_mm : (x_min, x_max, y_min, y_max), optional
    inside : function, optional
        ``f(x_mm, y_mm)`` giving True inside, instead of a box.
    """

    name: str
    current: CellCurrent
    box_mm: Sequence[float] | None = None
    inside: Map | None = None

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints(f"Region {self.name!r}")
        problems.unless(isinstance(self.current, CellCurrent), f"current = {self.current!r}", "a CellCurrent")
        if checks.exactly_one(problems, "extent", {"box_mm": self.box_mm, "inside": self.inside}):
            box = self.box_mm
            good = box is None or (len(box) == 4 and box[0] < box[1] and box[2] < box[3])
            problems.unless(good, f"box_mm = {box!r}", "(x_min, x_max, y_min, y_max), rising")
            problems.unless(self.inside is None or callable(self.inside), f"inside = {self.inside!r}", "a function")
        problems.raise_if_any()

    def holds(self, x_mm: NDArray[np.float64], y_mm: NDArray[np.float64]) -> NDArray[np.bool_]:
        """Where the region lies."""
        if self.box_mm is None:
            assert self.inside is not None
            return np.broadcast_to(np.asarray(self.inside(x_mm, y_mm), dtype=bool), x_mm.shape)
        x0, x1, y0, y1 = self.box_mm
        return (x_mm >= x0) & (x_mm <= x1) & (y_mm >= y0) & (y_mm <= y1)


@dataclass(frozen=True, repr=False)
class EdgeRecombination:
    """A recombination current per length of the outline, J (e^(u/(n V_T)) − 1).

    Parameters
    ----------
    current_nA_per_cm : float
        Saturation current per length of edge, at the cell's temperature.
    ideality : float
        2 for recombination in the space-charge region that reaches the edge.
    sides : sequence of {"left", "right", "bottom", "top"}, or function
        Which outlines: sides of the bounding box (a corner cut belongs to the nearer left or right side), or
        ``f(x_mm, y_mm)`` giving True on them.
    temperature_K : float
    """

    current_nA_per_cm: float
    ideality: float = 2.0
    sides: Sequence[str] | Map = SIDES
    temperature_K: float = STANDARD_TEMPERATURE_K

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("EdgeRecombination")
        checks.positive(problems, "current_nA_per_cm", self.current_nA_per_cm, zero=True)
        checks.positive(problems, "ideality", self.ideality)
        checks.positive(problems, "temperature_K", self.temperature_K)
        named = callable(self.sides) or all(side in SIDES for side in self.sides)
        problems.unless(named, f"sides = {self.sides!r}", f"some of {', '.join(SIDES)}, or a function")
        problems.raise_if_any()

    @property
    def law(self) -> Law:
        """Current per length of edge, A/cm, photocurrent positive."""
        return mixed((-1.0, exponential(self.current_nA_per_cm * NA, self.ideality, self.temperature_K)))

    def holds(self, places: NDArray[np.float64], size_cm: tuple[float, float]) -> NDArray[np.bool_]:
        """Which places (2, n) on the outline, in cm, belong to the chosen sides."""
        x, y = places
        if callable(self.sides):
            return np.broadcast_to(np.asarray(self.sides(x / MM, y / MM), dtype=bool), x.shape)
        width, height = size_cm
        near = 1e-6 * max(size_cm)
        level_low, level_high = y < near, y > height - near
        nearest = np.where(x < width / 2, "left", "right")
        side = np.where(level_low, "bottom", np.where(level_high, "top", nearest))
        return np.isin(side, list(self.sides))


@dataclass(frozen=True, eq=False)
class LocalLaws:
    """What J(u) holds where.

    Parameters
    ----------
    current : CellCurrent
        Where nothing else is stated.
    under_metal : CellCurrent, optional
        Dark law of the cell under metal that touches it; default: the cell's own without light.
    regions : tuple of Region
        A later one lies on an earlier one.
    light : Map, optional
        Factor on the light current against position.
    edge : EdgeRecombination, optional
    """

    current: CellCurrent
    under_metal: CellCurrent | None = None
    regions: tuple[Region, ...] = ()
    light: Map | None = None
    edge: EdgeRecombination | None = None

    @property
    def uniform(self) -> bool:
        """Whether all places are alike."""
        return not self.regions and self.light is None

    def borders(self, axis: int) -> list[float]:
        """Where boxes of regions begin and end along an axis, cm."""
        boxes = [region.box_mm for region in self.regions if region.box_mm is not None]
        return [float(v) * MM for box in boxes for v in box[2 * axis : 2 * axis + 2]]


Chain = Callable[["NDArray[np.int64]"], "tuple[tuple[str, Law], ...]"]


def laws_at(
    laws: LocalLaws, places: NDArray[np.float64], centres: NDArray[np.float64], bands: Bands
) -> Iterator[tuple[str, NDArray[np.bool_], Chain]]:
    """Groups of places under one law: name, mask, and the laws from the unshaded cell's to theirs.

    Parameters
    ----------
    laws : LocalLaws
    places : (2, n) float array
        cm.
    centres : (2, n) float array
        Middle of the cell each lies in; metal and boxes fit the cells.
    bands : Bands
        Metal.
    """
    region = np.full(places.shape[1], -1)
    for k, one in enumerate(laws.regions):
        region[one.holds(*(places if one.box_mm is None else centres) / MM)] = k
    cover = bands.cover(centres)
    factor = _light(laws, places)
    for k in np.unique(region):
        for c in np.unique(cover[region == k]):
            mask = (region == k) & (cover == c)
            name = "lit" if c < 0 else f"under {bands.kinds[c].kind}"
            yield (
                (name if k < 0 else f"{laws.regions[k].name}, {name}"),
                mask,
                _chain(laws, int(k), int(c), bands, factor),
            )


def _light(laws: LocalLaws, places: NDArray[np.float64]) -> NDArray[np.float64] | None:
    """Factor on the light at places, or None."""
    if laws.light is None:
        return None
    factor = np.broadcast_to(np.asarray(laws.light(places[0] / MM, places[1] / MM), dtype=float), places[0].shape)
    problems = Complaints("light map")
    problems.unless(
        bool(np.isfinite(factor).all()) and bool((factor >= 0).all()), "a light map", "values of at least 0"
    )
    problems.raise_if_any()
    return factor


def _chain(laws: LocalLaws, region: int, cover: int, bands: Bands, factor: NDArray[np.float64] | None) -> Chain:
    def chain(on: NDArray[np.int64]) -> tuple[tuple[str, Law], ...]:
        here = laws.current if region < 0 else laws.regions[region].current
        steps: list[tuple[str, Law]] = [("", laws.current.law)]
        if region >= 0:
            steps.append((laws.regions[region].name, here.law))
        share: Any = 1.0
        if factor is not None:
            share = factor[on]
            steps.append(("light map", _lit(here, share)))
        if cover >= 0:
            metal = bands.kinds[cover]
            if metal.shaded > 0:
                share = share * (1 - metal.shaded)
                steps.append((f"shading by {metal.kind}s", _lit(here, share)))
            if metal.touches and laws.under_metal is not None:
                extra = (1.0, steps[-1][1]), (-1.0, here.dark), (1.0, laws.under_metal.dark)
                steps.append(("recombination under metal", mixed(*extra)))
        return tuple(steps)

    return chain


def _lit(current: CellCurrent, share: Any) -> Law:
    """J_dark + share (J − J_dark)."""
    return mixed((share, current.law), (1 - share, current.dark))
