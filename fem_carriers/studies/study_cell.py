"""The unit cell of a study file. Keys are the inputs of the descriptions themselves, so both always agree."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import fields
from pathlib import Path
from typing import Any

from ..cell.base import Base
from ..cell.face import Face
from ..cell.inner import SIDES, InnerSurface
from ..cell.light import Light
from ..cell.masks import HalfPlane, LitRectangle, Spot
from ..cell.patches import Dot, Polygon, Rectangle, Strip
from ..cell.surface import Contact, DopedLayer, Surface
from ..cell.unit_cell import UnitCell
from ..errors import InputError
from .study_lines import KeyPath
from .study_notes import BROKEN, Notes, attempt, dotted, inputs_of, is_table, made, plain_value, shown

SHAPES = {"strip": Strip, "dot": Dot, "rectangle": Rectangle, "polygon": Polygon}
MASKS = {"rectangle": LitRectangle, "half_plane": HalfPlane, "spot": Spot}
LIGHTS: dict[str, Callable[..., Light]] = {
    "sunlight": Light.sunlight, "monochromatic": Light.monochromatic, "depth_profile": Light.depth_profile,
    "uniform": Light.uniform,
}  # fmt: skip
CELL_PARTS = ("base", "front", "rear", "sides", "inner", "light")
"""Inputs of a unit cell that have tables of their own; the others stand in [cell]."""


def cell_sections() -> dict[str, set[str]]:
    """Keys by table, to tell where a misplaced key belongs."""
    tables = {
        "[cell]": inputs_of(UnitCell, CELL_PARTS),
        "[base]": inputs_of(Base),
        "[front] or [rear]": inputs_of(Surface),
    }
    tables |= {"[[front.patches]]": {k: p for s in SHAPES.values() for k, p in inputs_of(s).items()}}
    tables |= {"layer": inputs_of(DopedLayer), "contact": inputs_of(Contact)}
    tables |= {"[[light]]": {k: p for s in LIGHTS.values() for k, p in inputs_of(s).items()}}
    return {table: set(keys) for table, keys in tables.items()}


def read_cell(notes: Notes, data: Mapping[str, Any], folder: Path) -> Any:
    """The unit cell from the tables of a file.

    Parameters
    ----------
    notes : Notes
    data : mapping
        The whole file.
    folder : Path
        Where files that it names are looked for.

    Returns
    -------
    UnitCell
        `BROKEN` if anything was wrong.
    """
    before = len(notes.found)
    base = made(notes, ("base",), data.get("base", {}), Base, {"auger": plain_value})
    parts = {"base": base}
    for side in ("front", "rear"):
        if side in data:
            parts[side] = _face(notes, (side,), data[side])
    parts["sides"] = _named(notes, "sides", data.get("sides", {}), Surface)
    parts["inner"] = _named(notes, "inner", data.get("inner", {}), InnerSurface)
    parts["light"] = _lights(notes, data.get("light"), folder)
    stated = data.get("cell", {})
    if len(notes.found) > before or any(part is BROKEN for part in parts.values()):
        _check_alone(notes, stated)
        return BROKEN
    cell = _unit_cell(notes, data, stated, parts)
    return BROKEN if len(notes.found) > before else cell


def _unit_cell(notes: Notes, data: Mapping[str, Any], stated: Any, parts: Mapping[str, Any]) -> Any:
    inner = Notes(notes.lines, notes.elsewhere)
    cell = made(inner, ("cell",), stated, UnitCell, given=parts)
    for line, c in inner.found:
        text = c.given.split(": ", 1)[1]
        notes.add_at(_line_of_part(notes, data, text, line), text, c.allowed, c.try_)
    return cell


def _line_of_part(notes: Notes, data: Mapping[str, Any], text: str, line: int) -> int:
    """Line of the patch, face or side that a complaint about the whole cell speaks of."""
    if line != notes.line(("cell",)):
        return line
    for side in ("front", "rear"):
        patches = data.get(side, {}).get("patches", [])
        for i, patch in enumerate(patches):
            if f"{side}.{patch.get('name')}" in text or f"patch {patch.get('name')!r}" in text:
                return notes.line((side, "patches", i))
    word = next((s for s in ("front", "rear", "sides", "light", "base") if s in text.replace(".", " ").split()), None)
    return notes.line((word,)) if word else line


def _check_alone(notes: Notes, stated: Any) -> None:
    """The numbers of [cell] where a part of the cell is broken."""
    base = Base("p", doping_per_cm3=1e16, thickness_um=100, lifetime_us=100)
    parts = {"base": base, "front": Surface(), "rear": Surface(), "sides": {}, "inner": {}, "light": None}
    made(notes, ("cell",), stated, UnitCell, given=parts)


def _face(notes: Notes, where: KeyPath, table: Any) -> Any:
    if not is_table(notes, where, table, "[front] with the keys of its surface, and [[front.patches]]"):
        return BROKEN
    surface = made(notes, where, table, Surface, PARTS, ignore=("patches",))
    rows = table.get("patches", [])
    if not isinstance(rows, list):
        notes.add(
            (*where, "patches"), f"{dotted(where)}.patches = {shown(rows)}", f"tables [[{dotted(where)}.patches]]"
        )
        return BROKEN
    patches = [_patch(notes, (*where, "patches", i), row) for i, row in enumerate(rows)]
    sound = [p for p in patches if p is not BROKEN]
    broken = surface is BROKEN or len(sound) < len(patches)
    face = attempt(notes, (*where, "patches"), {}, lambda: Face(Surface() if surface is BROKEN else surface, sound))
    return BROKEN if broken else face


def _patch(notes: Notes, where: KeyPath, table: Any) -> Any:
    maker = _chosen(notes, where, table, "shape", SHAPES)
    return BROKEN if maker is None else made(notes, where, table, maker, PARTS, ignore=("shape",))


def _chosen(notes: Notes, where: KeyPath, table: Any, key: str, makers: Mapping[str, Any]) -> Any:
    """What a table says it describes."""
    if not is_table(notes, where, table, f'{key} = "{next(iter(makers))}" and its sizes'):
        return None
    kind = table.get(key)
    if isinstance(kind, str) and kind in makers:
        return makers[kind]
    given = f"{dotted((*where, key))} = {shown(kind)}" if key in table else f"{key} missing in {dotted(where)}"
    notes.add((*where, key), given, " or ".join(f'"{name}"' for name in makers))
    return None


def _layer(notes: Notes, where: KeyPath, value: Any) -> Any:
    return value if value is None else made(notes, where, value, DopedLayer)


def _contact(notes: Notes, where: KeyPath, value: Any) -> Any:
    return value if value is None else made(notes, where, value, Contact)


PARTS = {"layer": _layer, "contact": _contact}


def _named(notes: Notes, section: str, table: Any, maker: Any) -> Any:
    """Tables by name: sides and inner surfaces."""
    example = "[sides.x_max] with the keys of a surface" if section == "sides" else "[inner.NAME] with x_um = 100"
    if not is_table(notes, (section,), table, example):
        return BROKEN
    found = {name: made(notes, (section, name), inputs, maker, PARTS) for name, inputs in table.items()}
    return BROKEN if BROKEN in found.values() else found


def _lights(notes: Notes, value: Any, folder: Path) -> Any:
    """One [light] or several [[light]], added up."""
    if value is None:
        notes.add((), "no light", "one table [[light]] or more", 'kind = "sunlight"')
        return BROKEN
    rows = value if isinstance(value, list) else [value]
    where: list[KeyPath] = [("light", i) if isinstance(value, list) else ("light",) for i in range(len(rows))]
    lights = [_light(notes, w, row, folder) for w, row in zip(where, rows, strict=True)]
    if not lights or BROKEN in lights:
        return BROKEN
    return Light(tuple(source for light in lights for source in light.sources))


def _light(notes: Notes, where: KeyPath, table: Any, folder: Path) -> Any:
    maker = _chosen(notes, where, table, "kind", LIGHTS)
    if maker is None:
        return BROKEN

    def path_or_plain(notes: Notes, where: KeyPath, value: Any) -> Any:
        return folder / value if isinstance(value, str) else plain_value(notes, where, value)

    def absorption(notes: Notes, where: KeyPath, value: Any) -> Any:
        from ..materials.absorption import read_absorption_csv

        if isinstance(value, str):
            return attempt(notes, where, {}, lambda: read_absorption_csv(folder / value))
        notes.add(where, f"{dotted(where)} = {shown(value)}", "the name of a CSV file")
        return BROKEN

    readers = {"mask": _masks, "depth_um": path_or_plain, "absorption": absorption}
    return made(notes, where, table, maker, readers, ignore=("kind",))


def _masks(notes: Notes, where: KeyPath, value: Any) -> Any:
    masks = []
    rows = value if isinstance(value, list) else [value]
    for i, row in enumerate(rows):
        place = (*where, i) if isinstance(value, list) else where
        maker = _chosen(notes, place, row, "shape", MASKS)
        masks.append(BROKEN if maker is None else made(notes, place, row, maker, ignore=("shape",)))
    return BROKEN if BROKEN in masks else tuple(masks)


def paths_stated(data: Mapping[str, Any]) -> set[str]:
    """Paths that can be swept, told from the tables of a file whose cell was refused; rather too many than too few."""
    paths = set(inputs_of(UnitCell, CELL_PARTS)) | {f"base.{k}" for k in inputs_of(Base)}
    tables: dict[str, Any] = {f"sides.{s}": Surface for s in SIDES}
    tables |= {f"inner.{name}": InnerSurface for name in data.get("inner", {})}
    for side in ("front", "rear"):
        tables |= {side: Surface, f"{side}.surface": Surface}
        rows = data[side].get("patches", []) if isinstance(data.get(side), Mapping) else []
        for row in rows if isinstance(rows, list) else []:
            if isinstance(row, Mapping):
                tables[f"{side}.{row.get('name')}"] = SHAPES.get(str(row.get("shape")), Strip)
    for table, maker in tables.items():
        names = [f.name for f in fields(maker)] + ["center_x_um", "center_y_um"]
        paths |= {f"{table}.{name}" for name in names}
        paths |= {f"{table}.layer.{k}" for k in inputs_of(DopedLayer)}
        paths |= {f"{table}.contact.{k}" for k in inputs_of(Contact)}
    keys = {k for light in LIGHTS.values() for k in inputs_of(light)}
    number = len(data["light"]) if isinstance(data.get("light"), list) else 1
    return paths | {f"light.{k}" for k in keys} | {f"light.{i}.{k}" for i in range(number) for k in keys}


def path_complaints(cell: UnitCell, path: str) -> tuple[str, str] | None:
    """What is allowed in place of a path, and the nearest one; None if the cell has it."""
    from .paths import check_paths

    try:
        check_paths(cell, [path])
    except InputError as error:
        return error.complaints[0].allowed, error.complaints[0].try_
    return None
