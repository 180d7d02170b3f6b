"""Plan of a face: which surface lies where, and what is opaque."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from .outlines import Frame, check_patch, patch_outlines, shade_size
from .patches import BELOW
from .surface import Surface

if TYPE_CHECKING:
    import shapely

    from ..errors import Complaints
    from .face import Face
    from .patches import Patch


@dataclass(frozen=True)
class Region:
    """Part of a face with one surface: ``name`` is "front", "front.finger", …; ``shape`` its outline in µm."""

    name: str
    surface: Surface
    shape: Any


@dataclass(frozen=True)
class Layout:
    """The plan of one face.

    Parameters
    ----------
    regions : tuple of Region
        Disjoint; together they cover the piece.
    opaque : shapely geometry
        Union of everything that shades, µm.
    """

    regions: tuple[Region, ...]
    opaque: Any


def face_layout(side: str, face: Face, frame: Frame, problems: Complaints, segments: int = 64) -> Layout:
    """Lay the patches on the face one after another.

    Parameters
    ----------
    side : {"front", "rear"}
    face : Face
    frame : Frame
        The modelled piece.
    problems : Complaints
        Receives every patch that does not fit, or crosses another partly.
    segments : int
        Corners of a full circle.

    Returns
    -------
    Layout
    """
    from shapely import union_all

    layers: list[Region] = [Region(side, face.surface, frame.box)]
    opaque: list[shapely.Polygon] = []
    for patch in face.patches:
        if not check_patch(problems, patch, frame):
            continue
        pieces = patch_outlines(patch, frame, segments)
        surface = _surface_of(side, patch, pieces, layers, problems)
        if surface is None:
            continue
        layers.append(Region(f"{side}.{patch.name}", surface, union_all(pieces)))
        if shade_size(patch, patch.contact is not BELOW and patch.contact is not None):
            opaque += patch_outlines(patch, frame, segments, opaque=True)
    return Layout(_visible(layers), union_all(opaque))


def _surface_of(
    side: str, patch: Patch, pieces: list[shapely.Polygon], layers: list[Region], problems: Complaints
) -> Surface | None:
    """The patch's surface on what lies below; None (with a complaint) if it crosses a patch or has no single ground."""
    below: list[Region] = []
    for piece in pieces:
        holders = [layer for layer in layers if _covered(piece, layer.shape)]
        crossed = [layer for layer in layers if layer not in holders and _overlap(piece, layer.shape)]
        for layer in crossed:
            problems.add(
                f"patch {side}.{patch.name} crosses {layer.name} partly",
                "a later patch wholly inside an earlier one, or beside it",
                "list the larger patch first, or change sizes or centres",
            )
        if crossed:
            return None
        if holders[-1] not in below:
            below.append(holders[-1])
    surfaces = {id(b): patch.surface_on(b.surface) for b in below}
    if len(set(surfaces.values())) > 1:
        grounds = " and ".join(b.name for b in below)
        allowed = "copies on one kind of ground"
        problems.add(f"patch {side}.{patch.name} lies partly on {grounds}", allowed, "one patch per ground, each named")
        return None
    return next(iter(surfaces.values()))


def _covered(piece: shapely.Polygon, shape: Any) -> bool:
    return bool(piece.difference(shape).area <= 1e-9 * piece.area)


def _overlap(piece: shapely.Polygon, shape: Any) -> bool:
    return bool(piece.intersection(shape).area > 1e-9 * min(piece.area, shape.area))


def _visible(layers: list[Region]) -> tuple[Region, ...]:
    """Each layer less what later ones cover; layers that vanish are dropped."""
    seen = []
    for i, layer in enumerate(layers):
        shape = layer.shape
        for later in layers[i + 1 :]:
            shape = shape.difference(later.shape)
        if shape.area > 1e-9 * layer.shape.area:
            seen.append(Region(layer.name, layer.surface, shape))
    return tuple(seen)
