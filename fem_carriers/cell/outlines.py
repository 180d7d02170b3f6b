"""Plan outlines of patches in µm: copies within the modelled piece, mirror planes, repeats."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from .patches import Dot, Patch, Polygon, Rectangle, Strip

if TYPE_CHECKING:
    import shapely

    from ..errors import Complaints

UNIT_DEPTH_UM = 1e4
"""In 2-D the plan is drawn 1 cm deep, so that areas are cm² per cm of depth."""


@dataclass(frozen=True)
class Frame:
    """The modelled piece in plan: [x_low, x_high] × [y_low, y_high], µm.

    Parameters
    ----------
    x, y : (float, float)
        Limits of the piece; in 2-D y is (0, 1 cm).
    period_x, period_y : float
        Full repeat lengths; `period_y` is None in 2-D.
    mirrors : tuple of str
        The sides that are mirror planes, of "x_min", "x_max", "y_min", "y_max".
    edges : tuple of str
        Axes that end in real edges, beyond which nothing repeats.
    """

    x: tuple[float, float]
    y: tuple[float, float]
    period_x: float
    period_y: float | None
    mirrors: tuple[str, ...]
    edges: tuple[str, ...] = ()

    @property
    def box(self) -> shapely.Polygon:
        """The piece's outline."""
        from shapely import box

        return box(self.x[0], self.y[0], self.x[1], self.y[1])

    def mirror_lines(self) -> list[tuple[str, float]]:
        """(axis, position) of each mirror plane."""
        position = {"x_min": self.x[0], "x_max": self.x[1], "y_min": self.y[0], "y_max": self.y[1]}
        return [(side[0], position[side]) for side in self.mirrors]


def disc(center_um: tuple[float, float], radius_um: float, segments: int) -> shapely.Polygon:
    """A regular polygon with the area of the circle, its axes passing through corners (`segments` a multiple of 4)."""
    from shapely import Polygon as Outline

    corner = radius_um * math.sqrt(2 * math.pi / (segments * math.sin(2 * math.pi / segments)))
    angles = [2 * math.pi * i / segments for i in range(segments)]
    points = [
        (center_um[0] + corner * _exact(math.cos(a)), center_um[1] + corner * _exact(math.sin(a))) for a in angles
    ]
    return Outline(points)


def _exact(value: float) -> float:
    """Round the tiny remainders of cos and sin at right angles to zero."""
    return 0.0 if abs(value) < 1e-15 else value


def patch_outlines(patch: Patch, frame: Frame, segments: int = 64, *, opaque: bool = False) -> list[shapely.Polygon]:
    """Outlines of every copy of the patch that reaches into the piece, clipped to it.

    Parameters
    ----------
    patch : Patch
    frame : Frame
    segments : int
        Corners of a full circle.
    opaque : bool
        The outline that shades instead of the patch's own.

    Returns
    -------
    list of shapely.Polygon
        Empty where there is nothing (a patch that does not shade, a copy outside).
    """
    clipped = (copy.intersection(frame.box) for copy in whole_copies(patch, frame, segments, opaque))
    return [c for c in clipped if c.area > 1e-9]


def check_patch(problems: Complaints, patch: Patch, frame: Frame) -> bool:
    """Complain about a patch that does not fit the piece; return whether it does."""
    before = len(problems.items)
    where = f"patch {patch.name!r}"
    if frame.period_y is None and not (isinstance(patch, Strip) and patch.along == "y"):
        problems.add(
            f"{where}: a {type(patch).__name__} {_along(patch)}in two dimensions",
            "strips along y, which look the same in every cross section",
            "give pitch_y_um for a 3-D cell",
        )
        return False
    _check_size(problems, patch, frame, where)
    _check_repeats(problems, patch, frame, where)
    if len(problems.items) == before:
        _check_mirrors(problems, patch, frame, where)
    return len(problems.items) == before


def _along(patch: Patch) -> str:
    return "along x " if isinstance(patch, Strip) else ""


def shade_size(patch: Patch, has_contact: bool) -> bool:
    """Whether the patch shades: by a stated opaque size, or by its contact."""
    stated = [getattr(patch, name, None) for name in ("opaque_width_um", "opaque_diameter_um", "opaque_length_um")]
    return any(v is not None and v > 0 for v in stated) or (has_contact and not any(v == 0 for v in stated))


def whole_copies(patch: Patch, frame: Frame, segments: int, opaque: bool) -> list[shapely.Polygon]:
    """Copies of the patch over the period and its neighbours."""
    from shapely import affinity

    shape = _shape(patch, frame, segments, opaque)
    offsets = [(dx, dy) for dx, dy in _offsets(patch, frame) for dx, dy in _neighbours(dx, dy, frame)]
    return [affinity.translate(shape, dx, dy) for dx, dy in offsets] if shape is not None else []


def _neighbours(dx: float, dy: float, frame: Frame) -> list[tuple[float, float]]:
    rows = [0.0] if frame.period_y is None or "y" in frame.edges else [-frame.period_y, 0.0, frame.period_y]
    columns = [0.0] if "x" in frame.edges else [-frame.period_x, 0.0, frame.period_x]
    return [(dx + column, dy + row) for column in columns for row in rows]


def _shape(patch: Patch, frame: Frame, segments: int, opaque: bool) -> shapely.Polygon | None:
    """Outline of the first copy, at the patch's own centre."""
    from shapely import Polygon as Outline
    from shapely import box

    if isinstance(patch, Polygon):
        return Outline(patch.points_um)
    if isinstance(patch, Dot):
        diameter = _either(patch.opaque_diameter_um, patch.diameter_um, opaque)
        return disc(patch.center_um, diameter / 2, segments) if diameter > 0 else None
    if isinstance(patch, Rectangle):
        width = _either(patch.opaque_width_um, patch.width_um, opaque)
        length = _either(patch.opaque_length_um, patch.length_um, opaque)
        (x, y), a, b = patch.center_um, width / 2, length / 2
        return box(x - a, y - b, x + a, y + b) if width > 0 and length > 0 else None
    half = _either(patch.opaque_width_um, patch.width_um, opaque) / 2
    low, high, far = patch.center_um - half, patch.center_um + half, 3 * _reach(frame)
    if half == 0:
        return None
    return box(low, -far, high, far) if patch.along == "y" else box(-far, low, far, high)


def _reach(frame: Frame) -> float:
    return max(frame.period_x, frame.period_y or 0.0, UNIT_DEPTH_UM)


def _either(stated: float | None, own: float, opaque: bool) -> float:
    return stated if opaque and stated is not None else own


def _offsets(patch: Patch, frame: Frame) -> list[tuple[float, float]]:
    """Shifts of the repeats within one period."""
    if isinstance(patch, Strip) and patch.spacing_um is not None:
        period = frame.period_x if patch.along == "y" else frame.period_y
        steps = [k * patch.spacing_um for k in range(round((period or 0.0) / patch.spacing_um))]
        return [(s, 0.0) if patch.along == "y" else (0.0, s) for s in steps]
    if isinstance(patch, Dot | Rectangle):
        sx, sy = patch.spacing_x_um or frame.period_x, patch.spacing_y_um or frame.period_y or 1.0
        columns, rows = round(frame.period_x / sx), round((frame.period_y or 1.0) / sy)
        shift = [0.5 * sx * (j % 2) if patch.staggered else 0.0 for j in range(rows)]
        return [(i * sx + shift[j], j * sy) for j in range(rows) for i in range(columns)]
    return [(0.0, 0.0)]


def _repeats(patch: Patch, frame: Frame) -> list[tuple[str, float, float, float]]:
    """(name of the spacing, spacing, period, centre) of every stated repeat."""
    if isinstance(patch, Strip) and patch.spacing_um is not None:
        period = frame.period_x if patch.along == "y" else frame.period_y
        return [("spacing_um", patch.spacing_um, period or 0.0, patch.center_um)]
    if isinstance(patch, Dot | Rectangle):
        stated = [("spacing_x_um", patch.spacing_x_um, frame.period_x, patch.center_um[0])]
        stated.append(("spacing_y_um", patch.spacing_y_um, frame.period_y or 0.0, patch.center_um[1]))
        return [(n, s, p, c) for n, s, p, c in stated if s is not None]
    return []


def _check_repeats(problems: Complaints, patch: Patch, frame: Frame, where: str) -> None:
    for name, spacing, period, center in _repeats(patch, frame):
        number = period / spacing
        if abs(number - round(number)) > 1e-9 or round(number) < 1:
            nearest = sorted({period / max(1, math.floor(number)), period / math.ceil(number)})
            text = " or ".join(f"{s:g}" for s in nearest)
            problems.add(f"{where}: {name} = {spacing:g} in a period of {period:g} µm", "a divisor of the period", text)
        elif frame.mirrors and abs(2 * center / spacing - round(2 * center / spacing)) > 1e-9:
            allowed = f"0 or {spacing / 2:g} (or these plus multiples of the spacing), which keep the mirror planes"
            problems.add(f"{where}: centre {center:g} with {name} = {spacing:g}", allowed, 'symmetry="periodic"')
        elif name == "spacing_y_um" and getattr(patch, "staggered", False) and round(number) % 2:
            allowed = "an even number of rows, so that the stagger repeats"
            problems.add(f"{where}: {round(number)} staggered rows per period", allowed, f"pitch_y_um = {2 * period:g}")


def _check_size(problems: Complaints, patch: Patch, frame: Frame, where: str) -> None:
    for name, size, limit in _sizes(patch, frame):
        text = f"{where}: {name} = {size:g}"
        problems.unless(size <= limit * (1 + 1e-12), text, f"at most the repeat length {limit:g} µm", "a wider pitch")


def _sizes(patch: Patch, frame: Frame) -> list[tuple[str, float, float]]:
    """(name, size, repeat length) of every stated size."""
    x, y = frame.period_x, frame.period_y or math.inf
    if isinstance(patch, Strip):
        limit = patch.spacing_um or (x if patch.along == "y" else y)
        sizes: list[tuple[str, Any, float]] = [(n, getattr(patch, n), limit) for n in ("width_um", "opaque_width_um")]
    elif isinstance(patch, Dot):
        limit = min(patch.spacing_x_um or x, patch.spacing_y_um or y)
        if patch.staggered:
            limit = min(patch.spacing_x_um or x, math.hypot((patch.spacing_x_um or x) / 2, patch.spacing_y_um or y))
        sizes = [(n, getattr(patch, n), limit) for n in ("diameter_um", "opaque_diameter_um")]
    elif isinstance(patch, Rectangle):
        limit_x, limit_y = patch.spacing_x_um or x, patch.spacing_y_um or y
        sizes = [(n, getattr(patch, n), limit_x) for n in ("width_um", "opaque_width_um")]
        sizes += [(n, getattr(patch, n), limit_y) for n in ("length_um", "opaque_length_um")]
    else:
        low_x, low_y, high_x, high_y = _shape(patch, frame, 4, False).bounds  # type: ignore[union-attr]
        sizes = [("size in x", high_x - low_x, x), ("size in y", high_y - low_y, y)]
    return [(name, size, limit) for name, size, limit in sizes if size is not None]


def _check_mirrors(problems: Complaints, patch: Patch, frame: Frame, where: str) -> None:
    copies = whole_copies(patch, frame, 64, False)
    inside = [c for c in copies if c.intersection(frame.box).area > 1e-9]
    if not inside:
        place = f"x from {frame.x[0]:g} to {frame.x[1]:g} µm"
        place += f", y from {frame.y[0]:g} to {frame.y[1]:g} µm" if frame.period_y is not None else ""
        hint = "a centre inside it; mirror images are implied" if frame.mirrors else "a centre inside it"
        problems.add(f"{where} lies outside of the modelled piece", place, hint)
    for axis, position in frame.mirror_lines():
        if axis != getattr(patch, "along", None) and any(_crosses(c, axis, position) for c in inside):
            problems.add(
                f"{where} crosses the mirror plane {axis} = {position:g} µm unevenly",
                "patches centred on a mirror plane, or clear of it",
                'another centre, or symmetry="periodic"',
            )


def _crosses(shape: shapely.Polygon, axis: str, position: float) -> bool:
    """True if the plane cuts the shape into unequal halves."""
    from shapely import affinity

    low_x, low_y, high_x, high_y = shape.bounds
    low, high = (low_x, high_x) if axis == "x" else (low_y, high_y)
    tolerance = 1e-9 * max(1.0, abs(position), high - low)
    if not low + tolerance < position < high - tolerance:
        return False
    if axis == "x":
        mirrored = affinity.scale(shape, xfact=-1, origin=(position, 0))
    else:
        mirrored = affinity.scale(shape, yfact=-1, origin=(0, position))
    return bool(shape.symmetric_difference(mirrored).area > 1e-9 * shape.area)
