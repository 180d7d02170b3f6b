"""Read and change numeric inputs of a unit cell by path, e.g. ``front.finger.width_um``."""

from __future__ import annotations

import dataclasses
import difflib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from ..cell.face import Face
from ..cell.light import Light
from ..cell.patches import BELOW, SURFACE_FIELDS
from ..errors import Complaints

if TYPE_CHECKING:
    from ..cell.unit_cell import UnitCell

Node = tuple[str, ...]
"""Place of a description in the cell: ``("front", "finger", "layer")``; the surface of a face is ``("front", "")``."""

REPLACES = {
    "resistivity_ohm_cm": ("doping_per_cm3",),
    "doping_per_cm3": ("resistivity_ohm_cm",),
    "lifetime_us": ("tau_n0_us", "tau_p0_us"),
    "tau_n0_us": ("lifetime_us",),
    "tau_p0_us": ("lifetime_us",),
    "J0_fA_per_cm2": ("srv_cm_per_s",),
    "srv_cm_per_s": ("J0_fA_per_cm2",),
    "wavelength_nm": ("absorption_per_cm",),
    "absorption_per_cm": ("wavelength_nm",),
}
"""Inputs that exclude each other: changing one withdraws the others."""
CENTER = {"center_x_um": 0, "center_y_um": 1}


@dataclass(frozen=True)
class Place:
    """Where an input stands: the description that holds it, and its field (or a coordinate of its centre)."""

    node: Node
    name: str


def known_paths(cell: UnitCell) -> tuple[str, ...]:
    """All paths of a cell that can be read and changed, sorted.

    Parameters
    ----------
    cell : UnitCell

    Returns
    -------
    tuple of str
        Inputs that have no value yet, or that a patch takes from the face below, are among them.
    """
    return tuple(sorted(_short(cell, place) for place in _places(_nodes(cell)).values()))


def value_at(cell: UnitCell, path: str) -> Any:
    """The input at a path.

    Parameters
    ----------
    cell : UnitCell
    path : str
        See `changed`.

    Returns
    -------
    float, function of position, or None
        What holds: a patch that does not state the input gives that of the face below it.

    Raises
    ------
    InputError
        Unknown path.
    """
    nodes = _nodes(cell)
    place = _located(cell, nodes, [path])[path]
    if place.name in CENTER:
        return nodes[place.node].center_um[CENTER[place.name]]
    value = getattr(nodes[place.node], place.name)
    return getattr(_ground(cell, place.node), place.name) if value is BELOW else value


def check_paths(cell: UnitCell, paths: Iterable[str]) -> None:
    """Refuse paths that the cell does not have.

    Parameters
    ----------
    cell : UnitCell
    paths : iterable of str

    Raises
    ------
    InputError
        Names the nearest known paths.
    """
    _located(cell, _nodes(cell), paths)


def places_of(cell: UnitCell, paths: Iterable[str]) -> dict[str, Place]:
    """Where the inputs at these paths stand.

    Raises
    ------
    InputError
        Unknown paths, or two for one input.
    """
    return _located(cell, _nodes(cell), paths)


def changed(cell: UnitCell, changes: Mapping[str, Any]) -> UnitCell:
    """A new cell with all changes applied together, validated once.

    Paths start at the cell: ``pitch_um``, ``base.lifetime_us``, ``front.J0_fA_per_cm2`` (or ``front.surface.…``: where
    no patch lies), ``front.finger.width_um`` (a patch by its name), ``front.finger.layer.sheet_resistance_ohm_per_sq``,
    ``front.finger.contact.contact_resistivity_mohm_cm2``, ``rear.dot.center_x_um``, ``sides.x_max.srv_cm_per_s``,
    ``inner.grain_boundary.x_um``, ``light.suns`` (``light.0.suns`` where there are several sources). An input that
    excludes another (resistivity and doping, J0 and srv, lifetime and tau) replaces it.

    Parameters
    ----------
    cell : UnitCell
    changes : mapping of path to number
        Functions of position are taken where the input allows them.

    Returns
    -------
    UnitCell

    Raises
    ------
    InputError
        Unknown paths, or a cell that is not allowed.
    """
    nodes = _nodes(cell)
    places = _located(cell, nodes, changes)
    stated: dict[Node, dict[str, Any]] = {}
    for path, value in changes.items():
        stated.setdefault(places[path].node, {})[places[path].name] = plain(value)
    children: dict[Node, dict[str, Any]] = {}
    for depth in (3, 2, 1, 0):  # from the innermost description outwards
        for node in [n for n in {*stated, *children} if len(n) == depth]:
            new = _rebuilt(_at(cell, nodes, node), stated.get(node, {}), children.get(node, {}))
            if not node:
                return new  # type: ignore[no-any-return]
            children.setdefault(node[:-1], {})[node[-1]] = new
    return cell


def plain(value: Any) -> Any:
    """A Python number in place of a NumPy scalar; anything else as it is."""
    return value.item() if hasattr(value, "item") and getattr(value, "ndim", None) == 0 else value


def _nodes(cell: UnitCell) -> dict[Node, Any]:
    """Every description in the cell that holds numbers."""
    nodes: dict[Node, Any] = {(): cell, ("base",): cell.base}
    for side in ("front", "rear"):
        face = getattr(cell, side)
        nodes |= _with_parts((side, ""), face.surface, face.surface)
        for patch in face.patches:
            nodes |= _with_parts((side, patch.name), patch, _ground(cell, (side, patch.name)))
    for side, surface in cell.sides.items():
        nodes |= _with_parts(("sides", side), surface, surface)
    nodes |= {("inner", name): plane for name, plane in cell.inner.items()}
    for i, source in enumerate(cell.light.sources if cell.light is not None else ()):
        nodes["light", str(i)] = source
    return nodes


def _with_parts(node: Node, owner: Any, surface: Any) -> dict[Node, Any]:
    """A surface or patch with its layer and contact; a patch may take these from the `surface` it has in the end."""
    parts = {(*node, p): getattr(owner, p) for p in ("layer", "contact")}
    parts = {n: getattr(surface, n[-1], None) if part is BELOW else part for n, part in parts.items()}
    return {node: owner} | {n: part for n, part in parts.items() if part is not None}


def _ground(cell: UnitCell, node: Node) -> Any:
    """The surface of a patch after it has taken what it does not state from below (None if it is covered)."""
    name = ".".join(node[:2])
    return next((r.surface for r in cell.layout(node[0]).regions if r.name == name), None)


def _places(nodes: Mapping[Node, Any]) -> dict[str, Place]:
    """Places by their full path."""
    places = {}
    for node, owner in nodes.items():
        for name in _numeric(owner):
            full = ".".join("surface" if key == "" else key for key in (*node, name))
            if full not in places or node[1:2] != ("",):  # a patch called "surface" goes before the surface itself
                places[full] = Place(node, name)
    return places


def _numeric(owner: Any) -> list[str]:
    """Names of the inputs that take a number."""
    names = [f.name for f in dataclasses.fields(owner) if _takes_number(f)]
    pair = getattr(owner, "center_um", None)
    return names + (list(CENTER) if isinstance(pair, tuple | list) else [])


def _takes_number(field: dataclasses.Field[Any]) -> bool:
    if field.default is BELOW:
        return field.name in SURFACE_FIELDS and field.name not in ("layer", "contact")
    return bool({"float", "Varying"} & {part.strip() for part in str(field.type).split("|")})


def _located(cell: UnitCell, nodes: Mapping[Node, Any], paths: Iterable[str]) -> dict[str, Place]:
    """Place of every path; refuses unknown ones and two paths to one place."""
    places = _places(nodes)
    found: dict[str, Place] = {}
    problems = Complaints("path")
    for path in paths:
        place = next((places[full] for full in _spellings(cell, path) if full in places), None)
        if place is None:
            problems.add(f"path {path!r}", *_help(cell, places, str(path)))
        elif place in found.values():
            problems.add(f"path {path!r}, given twice under different names", "one path per input")
        else:
            found[path] = place
    problems.raise_if_any()
    return found


def _spellings(cell: UnitCell, path: str) -> list[str]:
    """Full paths that a path may stand for: a patch or part by its name, the face's surface, the only light source."""
    first, _, rest = str(path).partition(".")
    spellings = [str(path)]
    if first in ("front", "rear"):
        spellings.append(f"{first}.surface.{rest}")
    if first == "light" and cell.light is not None and len(cell.light.sources) == 1:
        spellings.append(f"light.0.{rest}")
    return spellings


def _short(cell: UnitCell, place: Place) -> str:
    """The shortest path to a place."""
    keys = [key for key in (*place.node, place.name) if key != ""]
    if keys[0] == "light" and cell.light is not None and len(cell.light.sources) == 1:
        keys.pop(1)
    return ".".join(keys)


def _help(cell: UnitCell, places: Mapping[str, Place], path: str) -> tuple[str, str]:
    """What is allowed, and the nearest known paths."""
    known = sorted({_short(cell, place) for place in places.values()})
    near = difflib.get_close_matches(path, known, 3, cutoff=0.5)
    siblings = [p for p in known if p.rpartition(".")[0] == path.rpartition(".")[0]]
    siblings = siblings or [p for p in known if p.partition(".")[0] == path.partition(".")[0]] or known
    shown = ", ".join(siblings[:12]) + (", …" if len(siblings) > 12 else "")
    return f"a numeric input of this cell: {shown}; known_paths(cell) lists all {len(known)}", " or ".join(near)


def _at(cell: UnitCell, nodes: Mapping[Node, Any], node: Node) -> Any:
    """The description at a node, also where it holds only other descriptions."""
    return nodes[node] if node in nodes else getattr(cell, node[0])


def _rebuilt(owner: Any, numbers: Mapping[str, Any], children: Mapping[str, Any]) -> Any:
    """A copy of a description with other numbers and other parts."""
    if isinstance(owner, Face):
        surface = children.get("", owner.surface)
        return Face(surface, [children.get(p.name, p) for p in owner.patches])
    if isinstance(owner, Light):
        return Light(tuple(children.get(str(i), s) for i, s in enumerate(owner.sources)))
    if isinstance(owner, Mapping):
        return {**owner, **children}
    return dataclasses.replace(owner, **{**_withdrawn(owner, numbers), **_fields(owner, numbers), **children})


def _withdrawn(owner: Any, numbers: Mapping[str, Any]) -> dict[str, None]:
    """Inputs that give way to those stated."""
    names = {f.name for f in dataclasses.fields(owner)}
    others = {other for name, value in numbers.items() if value is not None for other in REPLACES.get(name, ())}
    return dict.fromkeys(others & names)


def _fields(owner: Any, numbers: Mapping[str, Any]) -> dict[str, Any]:
    """Numbers as fields of their owner; the two coordinates of a centre are one field."""
    stated = {name: value for name, value in numbers.items() if name not in CENTER}
    if CENTER.keys() & numbers.keys():
        stated["center_um"] = tuple(numbers.get(name, owner.center_um[i]) for name, i in CENTER.items())
    return stated
