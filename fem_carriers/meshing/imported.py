"""Meshes from files, with the names of their surfaces and volumes; checked strictly before use."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from os import PathLike
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints, MeshError
from ..units import LENGTH_UNITS_CM
from .checkup import check_up
from .mesh_file import load

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .mesh import Mesh

FACETS = {"triangle": "line", "quad": "line", "tetra": "triangle", "hexahedron": "quad"}
"""Kind of cells to kind of their facets."""
_KNOWN = {"vertex", "line", *FACETS}
_SOLID = {"tetra": 3, "hexahedron": 3, "triangle": 2, "quad": 2}


def read_mesh(
    path: str | PathLike[str],
    *,
    length_unit: str = "",
    surfaces: Mapping[str, str | int] | None = None,
    volumes: Mapping[str, str | int] | None = None,
) -> Mesh:
    """Read a mesh file and check it.

    MSH 2.2 and 4.1 (text and binary), VTU, XDMF, and what else meshio reads. Cells are first-order triangles,
    quads, tets or hexahedra of one kind; a 2-D mesh lies in the x–y or the x–z plane. Surfaces are made of line cells
    (2-D), triangles or quads (3-D) in the file; they may lie inside. Names come from

    - physical groups (MSH) or cell sets (several formats); names starting with ``gmsh:`` are meshio's own and ignored;
    - `surfaces` and `volumes`, which map a name of yours to a name or an integer tag of the file. Tags are the physical
      tags in MSH; elsewhere the integer cell array called ``tag``, or the only integer cell array. Tag 0 means no group
      unless it is mapped.

    Every group of the file needs a name from either. Groups of points, and of lines in 3-D, are ignored.

    Parameters
    ----------
    path : path
    length_unit : {"nm", "um", "mm", "cm", "m"}
        Unit of the coordinates in the file; must be stated.
    surfaces, volumes : mapping of str to str or int, optional
        Your name to the file's name or tag; groups that are not mentioned keep their names.

    Returns
    -------
    Mesh

    Raises
    ------
    InputError
        For a missing or unknown length unit.
    MeshError
        For a file that cannot be read, and for every defect listed in `check_up`.
    """
    _require_unit(length_unit)
    path = Path(path)
    raw = load(path)
    try:
        return _convert(raw, length_unit, surfaces or {}, volumes or {})
    except MeshError as error:
        raise MeshError(f"{path}: {error}") from error


def _require_unit(length_unit: str) -> None:
    wrong = Complaints("read_mesh")
    given = f"length_unit = {length_unit!r}" if length_unit else "length_unit is not stated"
    units = ", ".join(LENGTH_UNITS_CM)
    wrong.unless(length_unit in LENGTH_UNITS_CM, given, f"the unit of the coordinates: {units}", 'length_unit="um"')
    wrong.raise_if_any()


def _convert(raw: Any, unit: str, surfaces: Mapping[str, str | int], volumes: Mapping[str, str | int]) -> Mesh:
    """Points, cells and named groups of a meshio mesh."""
    kind = _kind_of_cells(raw)
    tags = _tag_array(raw)
    facets, cells = _collect(raw, FACETS[kind], tags), _collect(raw, kind, tags)
    dimension = _SOLID[kind]
    facet_groups = _name_groups(_groups(raw, facets, dimension - 1), surfaces, "surface")
    cell_groups = _name_groups(_groups(raw, cells, dimension), volumes, "volume")
    named_facets = {name: facets.nodes[:, members] for name, members in facet_groups.items()}
    points = np.asarray(raw.points, dtype=float).T
    return check_up(points, cells.nodes, kind, named_facets, cell_groups, unit)


def _kind_of_cells(raw: Any) -> str:
    """The kind of the cells that fill the mesh; all others must be facets or less."""
    count: dict[str, int] = {}
    for block in raw.cells:
        count[block.type] = count.get(block.type, 0) + len(block.data)
    present = {kind for kind, n in count.items() if n}
    listed = ", ".join(f"{count[kind]} {kind}" for kind in sorted(present))
    if curved := [
        k for k in present if re.fullmatch(r"(line|triangle|quad|tetra|hexahedron|wedge|pyramid)\d+|VTK_L.*", k)
    ]:
        raise MeshError(
            f"second- or higher-order cells ({', '.join(sorted(curved))}); allowed are first-order ones. Try exporting "
            "the mesh with element order 1."
        )
    if other := present - _KNOWN:
        raise MeshError(
            f"cells of kind {', '.join(sorted(other))}; allowed are triangles, quads, tets and hexahedra. Try meshing "
            "with one of these."
        )
    top = max((_SOLID.get(kind, 0) for kind in present), default=0)
    filling = sorted(kind for kind in present if _SOLID.get(kind) == top)
    if top == 0:
        raise MeshError(
            f"no triangles, quads, tets or hexahedra, only {listed or 'nothing'}. Try exporting the cells too."
        )
    if len(filling) > 1:
        raise MeshError(
            f"mixed cells ({listed}); allowed is one kind per mesh. Try meshing with {filling[-1]} cells only."
        )
    kind = filling[0]
    if wrong := (present & {"triangle", "quad"}) - {kind, FACETS[kind]}:
        raise MeshError(
            f"mixed cells ({listed}): {', '.join(wrong)} cells are no facets of {kind} cells. Try exporting surfaces "
            "and volumes of one mesh."
        )
    return kind


def _tag_array(raw: Any) -> list[Any] | None:
    """The integer cell data that numbers the groups, one array per block."""
    data = {
        n: v for n, v in raw.cell_data.items() if all(a.ndim == 1 and a.dtype.kind in "iu" for a in map(np.asarray, v))
    }
    for name in ("gmsh:physical", "tag"):
        if name in data:
            return list(data[name])
    data.pop("gmsh:geometrical", None)
    if len(data) > 1:
        raise MeshError(
            f"several integer cell arrays ({', '.join(sorted(data))}); allowed is one with the tags of the groups. Try "
            "calling that one 'tag'."
        )
    return list(next(iter(data.values()))) if data else None


@dataclass(frozen=True, eq=False)
class Elements:
    """All elements of one kind in a file.

    Parameters
    ----------
    nodes : (n_local, n) int array
    tags : (n,) int array
        0 where there is none.
    sets : mapping of str to (n_members,) int array
    """

    nodes: NDArray[np.int64]
    tags: NDArray[np.int64]
    sets: Mapping[str, NDArray[np.int64]]


def _collect(raw: Any, kind: str, tags: list[Any] | None) -> Elements:
    """Elements of one kind from all blocks."""
    blocks = [i for i, block in enumerate(raw.cells) if block.type == kind and len(block.data)]
    if not blocks:
        return Elements(np.zeros((2, 0), dtype=np.int64), np.zeros(0, dtype=np.int64), {})
    sizes = [len(raw.cells[i].data) for i in blocks]
    starts = np.concatenate([[0], np.cumsum(sizes)[:-1]])
    none = [np.zeros(n, dtype=np.int64) for n in sizes]
    numbers = [tags[i] for i in blocks] if tags is not None else none
    sets = {
        name: np.concatenate([_members(by_block[i]) + s for i, s in zip(blocks, starts, strict=True)])
        for name, by_block in raw.cell_sets.items()
        if not name.startswith("gmsh:")
    }
    nodes = np.concatenate([np.asarray(raw.cells[i].data) for i in blocks]).astype(np.int64).T
    return Elements(nodes, np.concatenate(numbers).astype(np.int64), sets)


def _members(members: Any) -> NDArray[np.int64]:
    return np.zeros(0, dtype=np.int64) if members is None else np.asarray(members).astype(np.int64)


def _groups(raw: Any, elements: Elements, dimension: int) -> dict[str | int, tuple[int | None, NDArray[np.int64]]]:
    """Groups by name (by tag if unnamed): tag and members. A name without members is kept, to be refused."""
    named = _physical_names(raw, dimension)
    found: dict[str | int, tuple[int | None, NDArray[np.int64]]] = {}
    for name, tag in named.items():
        tagged = np.flatnonzero(elements.tags == tag)
        members = elements.sets.get(name, tagged[:0])
        found[name] = tag, np.unique(np.concatenate([tagged, members]))
    for name, members in elements.sets.items():
        if members.size and name not in raw.field_data:
            found[name] = None, np.unique(members)
    for tag in np.setdiff1d(elements.tags, list(named.values())):
        found[int(tag)] = int(tag), np.flatnonzero(elements.tags == tag)
    return found


def _physical_names(raw: Any, dimension: int) -> dict[str, int]:
    """Names of the physical groups of one dimension, with their tags."""
    pairs = {name: np.asarray(value).ravel() for name, value in raw.field_data.items()}
    return {n: int(v[0]) for n, v in pairs.items() if v.size == 2 and v.dtype.kind in "iu" and v[1] == dimension}


def _name_groups(
    groups: dict[str | int, tuple[int | None, NDArray[np.int64]]], wanted: Mapping[str, str | int], what: str
) -> dict[str, NDArray[np.int64]]:
    """Give groups the caller's names; refuse groups that stay without a name."""
    named: dict[str, NDArray[np.int64]] = {}
    listed = ", ".join(f"{key!r}" if isinstance(key, str) else f"tag {key}" for key in groups) or "none"
    taken: set[str | int] = set()
    for name, theirs in wanted.items():
        key = next((k for k, (tag, _) in groups.items() if k == theirs or (tag is not None and tag == theirs)), None)
        if key is None or key in taken:
            problem = "is not in the file" if key is None else "is named twice"
            raise MeshError(
                f"{what} {name!r}: group {theirs!r} {problem}; {what} groups found: {listed}. Try one of these."
            )
        taken.add(key)
        named[name] = groups[key][1]
    for key, (_, members) in groups.items():
        if isinstance(key, str) and key not in taken:
            if key in named:
                raise MeshError(f"{what} {key!r} exists in the file already. Try another name for {wanted[key]!r}.")
            named[key] = members
    if unnamed := [key for key in groups if isinstance(key, int) and key not in taken and key != 0]:
        tags = ", ".join(map(str, unnamed))
        raise MeshError(
            f"unnamed {what} groups with tags {tags}. Try naming them in the mesh generator or "
            f"{what}s={{'name': {unnamed[0]}, …}} in read_mesh."
        )
    return named
