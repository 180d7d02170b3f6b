"""The unit cell: a wafer piece with patterns on both faces."""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from dataclasses import dataclass, field

from ..errors import Complaints, ModelWarning
from . import checks
from .base import Base
from .face import Face
from .inner import SIDES, InnerSurface, check_inner, inner_mapping
from .light import Light
from .masks import check_masks_on
from .outlines import UNIT_DEPTH_UM, Frame
from .plan import Layout, face_layout
from .surface import Surface, check_depth, check_no_edge, check_surface


@dataclass(frozen=True, repr=False)
class UnitCell:
    """One repeat unit of a cell, 2-D (cross section) or 3-D.

    Parameters
    ----------
    base : Base
        With its thickness.
    pitch_um : float
        Repeat length in x, across the fingers.
    pitch_y_um : float, optional
        Repeat length in y; without it the cell is two-dimensional.
    front, rear : Face or Surface
    sides : mapping of {"x_min", "x_max", "y_min", "y_max"} to Surface
        Real edges; a side not named is a mirror plane (or periodic).
    light : Light, optional
    symmetry : {"half", "periodic"}
        "half": the piece 0 ≤ x ≤ pitch/2 (and y likewise) between mirror planes. "periodic": the whole period.
    inner : mapping of str to InnerSurface
        Recombining planes inside the piece by name: grain boundaries, cracks.

    Raises
    ------
    InputError
        Every problem of the input at once.
    """

    base: Base
    pitch_um: float
    pitch_y_um: float | None = None
    front: Face | Surface = field(default_factory=lambda: Face(Surface()))
    rear: Face | Surface = field(default_factory=lambda: Face(Surface()))
    sides: Mapping[str, Surface] = field(default_factory=dict)
    light: Light | None = None
    symmetry: str = "half"
    inner: Mapping[str, InnerSurface] = field(default_factory=dict)

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("UnitCell")
        sound = self._check_types(problems)
        sound &= checks.positive(problems, "pitch_um", self.pitch_um)
        if self.pitch_y_um is not None:
            sound &= checks.positive(problems, "pitch_y_um", self.pitch_y_um)
        sound &= checks.one_of(problems, "symmetry", self.symmetry, ("half", "periodic"))
        self._check_sides(problems)
        object.__setattr__(self, "inner", inner_mapping(problems, self.inner))
        if sound:
            self._check_faces(problems)
        problems.raise_if_any()

    def _check_types(self, problems: Complaints) -> bool:
        sound = problems.unless(isinstance(self.base, Base), f"base = {self.base!r}", "a Base")
        if sound:
            sound = problems.unless(self.base.thickness_um is not None, "base without thickness_um", "a thickness")
        for name in ("front", "rear"):
            face = getattr(self, name)
            if isinstance(face, Surface):
                object.__setattr__(self, name, Face(face))
            else:
                sound &= problems.unless(isinstance(face, Face), f"{name} = {face!r}", "a Face or a Surface")
        if self.light is not None:
            problems.unless(isinstance(self.light, Light), f"light = {self.light!r}", "a Light", "fc.Light.sunlight()")
        return sound

    def _check_sides(self, problems: Complaints) -> None:
        if not problems.unless(isinstance(self.sides, Mapping), f"sides = {self.sides!r}", 'e.g. {"x_max": Surface}'):
            object.__setattr__(self, "sides", {})
        object.__setattr__(self, "sides", dict(self.sides))
        allowed = SIDES[:2] if self.pitch_y_um is None else SIDES
        for side, surface in self.sides.items():
            checks.one_of(problems, "side", side, allowed)
            problems.unless(isinstance(surface, Surface), f"sides[{side!r}] = {surface!r}", "a Surface")
        for axis in ("x", "y"):
            pair = {f"{axis}_min", f"{axis}_max"} & set(self.sides)
            if self.symmetry == "periodic" and len(pair) == 1:
                problems.add(f"side {pair.pop()} in a periodic cell", "both sides of an axis, or none")

    def _check_faces(self, problems: Complaints) -> None:
        for side in ("front", "rear"):
            layout = self._layout(side, problems, 64)
            for region in layout.regions:
                check_surface(problems, region.name, region.surface, self.base.doping_type)
                check_depth(problems, region.name, region.surface, self.thickness_um)
                check_no_edge(problems, region.name, region.surface)
            _warn_bare_metal(layout, self.base.doping_type)
        for name, surface in self.sides.items():
            if isinstance(surface, Surface):
                check_surface(problems, name, surface, self.base.doping_type)
        check_inner(problems, self)
        self._check_light(problems)

    def _check_light(self, problems: Complaints) -> None:
        for source in self.light.sources if isinstance(self.light, Light) else ():
            check_masks_on(problems, source.mask, self.frame.box, self.dimension)

    @property
    def dimension(self) -> int:
        """2 or 3."""
        return 2 if self.pitch_y_um is None else 3

    @property
    def thickness_um(self) -> float:
        """Thickness of the base."""
        return float(self.base.thickness_um)  # type: ignore[arg-type]

    @property
    def frame(self) -> Frame:
        """The modelled piece in plan."""
        mirrors = () if self.symmetry == "periodic" else tuple(s for s in SIDES if s not in self.sides)
        edges = tuple(sorted({side[0] for side in self.sides}))
        if self.dimension == 2:
            return Frame(
                self._span(self.pitch_um), (0.0, UNIT_DEPTH_UM), self.pitch_um, None,
                tuple(m for m in mirrors if m[0] == "x"), edges,
            )  # fmt: skip
        y = float(self.pitch_y_um)  # type: ignore[arg-type]
        return Frame(self._span(self.pitch_um), self._span(y), self.pitch_um, y, mirrors, edges)

    def _span(self, period: float) -> tuple[float, float]:
        return (0.0, period / 2) if self.symmetry == "half" else (-period / 2, period / 2)

    @property
    def periodic_axes(self) -> tuple[str, ...]:
        """Axes along which opposite sides are one and the same."""
        if self.symmetry == "half":
            return ()
        axes = ("x",) if self.dimension == 2 else ("x", "y")
        return tuple(a for a in axes if f"{a}_min" not in self.sides)

    @property
    def area_cm2(self) -> float:
        """Plan area of the modelled piece in cm² (in 2-D per cm of depth)."""
        return float(self.frame.box.area * 1e-8)

    def layout(self, side: str, segments: int = 64) -> Layout:
        """Plan of "front" or "rear".

        Parameters
        ----------
        side : {"front", "rear"}
        segments : int
            Corners of a full circle.
        """
        problems = Complaints("UnitCell")
        layout = self._layout(side, problems, segments)
        problems.raise_if_any()
        return layout

    def _layout(self, side: str, problems: Complaints, segments: int) -> Layout:
        return face_layout(side, getattr(self, side), self.frame, problems, segments)


def _warn_bare_metal(layout: Layout, base_type: str) -> None:
    """Metal that touches the base inside or beside a junction of its own terminal shorts it; say so."""
    junctions = [r for r in layout.regions if r.surface.is_junction(base_type)]
    for region in layout.regions:
        if region.surface.contact is None or region.surface.layer is not None:
            continue
        for junction in junctions:
            if junction.shape.boundary.intersection(region.shape.boundary).length > 0:
                warnings.warn(
                    f"{region.name}: a contact on the bare base beside the junction {junction.name}; carriers "
                    "recombine there. Leave layer unstated to put the contact on the layer, or keep a gap.",
                    ModelWarning,
                    stacklevel=5,
                )
