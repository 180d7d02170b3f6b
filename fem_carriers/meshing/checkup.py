"""Check-up of a mesh: every defect that would spoil a solution silently is refused, with its place and a remedy."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import MeshError
from ..units import LENGTH_UNITS_CM, UM
from .defects import (
    FLAT,
    coincident_nodes,
    corner_volumes,
    folded_facets,
    parts,
    touching_points,
    turn_inverted,
    twins,
)
from .mesh import Mesh
from .named_parts import amid, at, cells_of, facets_of, refuse_no_facet

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

THICKNESS_UM = (0.1, 20e3)
"""Plausible smallest extent of a mesh, µm."""
OVERALL_UM = (1.0, 1e6)
"""Plausible largest extent of a mesh, µm."""
TYPICAL_THICKNESS_UM = 150.0


def check_mesh(mesh: Mesh) -> None:
    """Check a mesh as `check_up` does; places are given in µm.

    Parameters
    ----------
    mesh : Mesh

    Raises
    ------
    MeshError
        For the first defect found.
    """
    cells, n_facets = mesh.cells, mesh.cells.facets.shape[1]
    for name, facets in mesh.surfaces.items():
        if np.any((np.asarray(facets) < 0) | (np.asarray(facets) >= n_facets)):
            raise MeshError(
                f"surface {name!r} has facet indices outside 0 … {n_facets - 1}. Try indices into mesh.cells.facets."
            )
    surfaces = {name: cells.facets[:, facets] for name, facets in mesh.surfaces.items()}
    corners = cells.t[np.argsort(_corner_order(type(cells)))] if mesh.kind == "hexahedron" else cells.t
    check_up(mesh.points_um, corners, mesh.kind, surfaces, mesh.volumes, "um")


def check_up(
    points: NDArray[np.float64],
    cells: NDArray[np.int64],
    kind: str,
    surfaces: Mapping[str, NDArray[np.int64]],
    volumes: Mapping[str, NDArray[np.int64]],
    length_unit: str,
) -> Mesh:
    """Check points, cells and names, and put them together.

    Nodes that no cell uses are left out, which is harmless, and inverted cells are turned. Facets between two cells are
    allowed in a surface (an internal surface).

    Parameters
    ----------
    points : (2 or 3, n_points) float array
        In `length_unit`. For triangles and quads with three coordinates, the mesh must be parallel to the x–y or the
        x–z plane; the second of these axes becomes z.
    cells : (n_local, n_cells) int array
        Corners of each cell, in the order of the VTK file formats.
    kind : {"triangle", "quad", "tetra", "hexahedron"}
    surfaces : mapping of str to (n_corners, n) int array
        Corners of the facets of each surface, in any order.
    volumes : mapping of str to (n,) int array
        Cell indices.
    length_unit : str
        nm, um, mm, cm or m.

    Returns
    -------
    Mesh
        In cm.

    Raises
    ------
    MeshError
        For the first defect found: NaN or infinite coordinates; node numbers out of range; a mesh that is not plane; an
        implausible size; flat, twisted or duplicate cells; coincident or hanging nodes; facets of three cells or that
        do not match; overlapping cells; separate parts; a surface that is empty, is no facet of the cells, or shares a
        facet with another; an empty volume; cells in no volume or in two.
    """
    unit = length_unit
    _require_finite(points, unit)
    for what, nodes in [("cell", cells), *((f"facet of surface {name!r}", s) for name, s in surfaces.items())]:
        _require_indices(nodes, points.shape[1], what)
    points = _flatten(points, cells, unit) if kind in ("triangle", "quad") else points
    points, cells, surfaces = _without_unused(points, cells, surfaces, unit)
    _require_plausible_size(points, unit)
    cells = _sound_cells(points, cells, kind, volumes, unit)
    _require_single_nodes(points, unit)
    built = _build(points * LENGTH_UNITS_CM[unit], cells, kind)
    _require_conforming(points, built, unit)
    facets = facets_of(surfaces, built, points, unit)
    return Mesh(built, facets, cells_of(volumes, points, cells, unit))


def _require_finite(points: NDArray[np.float64], unit: str) -> None:
    bad = np.flatnonzero(~np.isfinite(points).all(axis=0))
    if bad.size:
        raise MeshError(
            f"{bad.size} of {points.shape[1]} nodes have NaN or infinite coordinates, the first is node {bad[0] + 1} "
            f"{at(points[:, bad[0]], unit)}. Try exporting the mesh again."
        )


def _require_indices(nodes: NDArray[np.int64], n_points: int, what: str) -> None:
    bad = np.argwhere((nodes < 0) | (nodes >= n_points))
    if bad.size:
        local, i = bad[0]
        raise MeshError(
            f"{what} {i + 1} names node {nodes[local, i] + 1}, which does not exist; there are nodes 1 … {n_points}. "
            "Try exporting the mesh again; the file may be damaged."
        )


def _flatten(points: NDArray[np.float64], cells: NDArray[np.int64], unit: str) -> NDArray[np.float64]:
    """Two coordinates of a plane mesh."""
    if points.shape[0] == 2:
        return points
    extent = np.ptp(points[:, np.unique(cells)], axis=1)
    for constant in (2, 1):
        if extent[constant] <= 1e-6 * extent.max():
            return np.delete(points, constant, axis=0)
    size = " × ".join(f"{e:.4g}" for e in extent)
    raise MeshError(
        f"the mesh has no solid cells, only a surface of {size} {unit} in space. Try a mesh in the x–y or x–z plane "
        "for a 2-D cell, or export tets or hexahedra for a 3-D one."
    )


def _without_unused(
    points: NDArray[np.float64], cells: NDArray[np.int64], surfaces: Mapping[str, NDArray[np.int64]], unit: str
) -> tuple[NDArray[np.float64], NDArray[np.int64], dict[str, NDArray[np.int64]]]:
    """Leave out nodes that no cell uses and renumber the others."""
    used = np.unique(cells)
    number = np.full(points.shape[1], -1)
    number[used] = np.arange(used.size)
    for name, nodes in surfaces.items():
        bad = np.flatnonzero((number[nodes] < 0).any(axis=0))
        if bad.size:
            refuse_no_facet(name, bad.size, amid(points, nodes[:, bad[0]], unit))
    return points[:, used], number[cells], {name: number[nodes] for name, nodes in surfaces.items()}


def _require_plausible_size(points: NDArray[np.float64], unit: str) -> None:
    extent = np.ptp(points, axis=1)
    if _is_plausible(extent * LENGTH_UNITS_CM[unit] / UM):
        return
    fits = [u for u, cm in LENGTH_UNITS_CM.items() if _is_plausible(extent * cm / UM)]
    by_thickness = lambda u: abs(np.log(extent.min() * LENGTH_UNITS_CM[u] / UM / TYPICAL_THICKNESS_UM))
    advice = f"length_unit={min(fits, key=by_thickness)!r}" if fits else "checking the scale of the drawing"
    raise MeshError(
        f"implausible size {' × '.join(f'{e:.4g}' for e in extent)} {unit} with length_unit={unit!r}: the smallest "
        f"extent may be 0.1 µm to 20 mm, the largest 1 µm to 1 m. Try {advice}."
    )


def _is_plausible(extent_um: NDArray[np.float64]) -> bool:
    low, high = float(extent_um.min()), float(extent_um.max())
    return THICKNESS_UM[0] <= low <= THICKNESS_UM[1] and OVERALL_UM[0] <= high <= OVERALL_UM[1]


def _sound_cells(
    points: NDArray[np.float64],
    cells: NDArray[np.int64],
    kind: str,
    volumes: Mapping[str, NDArray[np.int64]],
    unit: str,
) -> NDArray[np.int64]:
    """Cells that are neither twins nor flat nor twisted, all turned the right way round."""
    same = twins(cells)
    if same.size:
        owners = sorted({name for name, members in volumes.items() if np.isin(same[:, 0], members).any()})
        where = f" (in volumes {' and '.join(owners)})" if len(owners) > 1 else ""
        raise MeshError(
            f"{same.shape[1]} duplicate cells: {kind} cells {same[0, 0] + 1} and {same[1, 0] + 1} have the same nodes "
            f"{amid(points, cells[:, same[0, 0]], unit)}{where}. Try removing one of them; a cell may "
            "belong to one volume only."
        )
    volume = corner_volumes(points, cells, kind)
    sign = np.sign(volume[0])
    flat = np.flatnonzero(~(np.abs(volume) > FLAT).all(axis=0))
    twisted = np.flatnonzero((np.sign(volume) != sign).any(axis=0))
    for bad, what in ((flat, "flat (no volume)"), (twisted, "twisted or not convex")):
        if bad.size:
            raise MeshError(
                f"{bad.size} {kind} cells are {what}, the first is cell {bad[0] + 1} "
                f"{amid(points, cells[:, bad[0]], unit)}. Try meshing again with a better cell quality there."
            )
    return turn_inverted(cells, kind, volume)


def _require_single_nodes(points: NDArray[np.float64], unit: str) -> None:
    pairs = coincident_nodes(points)
    if pairs.size:
        raise MeshError(
            f"{len(pairs)} pairs of duplicate nodes, the first {at(points[:, pairs.min(axis=0)[0]], unit)}: cells that "
            "use different copies are not joined there. Try merging coincident nodes before exporting."
        )


def _build(points_cm: NDArray[np.float64], cells: NDArray[np.int64], kind: str) -> Any:
    """The scikit-fem mesh."""
    import skfem

    made = {"triangle": skfem.MeshTri1, "quad": skfem.MeshQuad1, "tetra": skfem.MeshTet1, "hexahedron": skfem.MeshHex1}
    ordered = cells[_corner_order(skfem.MeshHex1)] if kind == "hexahedron" else cells
    return made[kind](np.ascontiguousarray(points_cm), np.ascontiguousarray(ordered))


def _corner_order(hexahedra: Any) -> NDArray[np.int64]:
    """Which corner of a hexahedron in VTK's order is scikit-fem's corner 0, 1, …, 7."""
    vtk = np.array([(0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0), (0, 0, 1), (1, 0, 1), (1, 1, 1), (0, 1, 1)])
    same = (hexahedra.elem.refdom.p.T[:, None] == vtk).all(axis=2)
    return np.asarray(same.argmax(axis=1))


def _require_conforming(points: NDArray[np.float64], mesh: Any, unit: str) -> None:
    """Neighbours share whole facets, lie on either side of them, and are all connected."""
    crowded = np.flatnonzero(np.bincount(mesh.t2f.ravel()) > 2)
    folded = crowded if crowded.size else folded_facets(points, mesh)
    if folded.size:
        raise MeshError(
            f"cells overlap: {folded.size} facets have several cells on one side, the first "
            f"{amid(points, mesh.facets[:, folded[0]], unit)}. Try removing overlapping bodies and meshing again."
        )
    hanging = touching_points(points, mesh.facets[:, mesh.boundary_facets()])
    if hanging.size:
        raise MeshError(
            f"neighbours do not match: {hanging.shape[1]} hanging nodes or facets lie on a facet of another cell "
            f"without being its own, the first {at(hanging[:, 0], unit)}. Try joining the bodies into one before "
            "meshing (fragment or glue), so that both sides share their nodes."
        )
    sizes = np.bincount(part := parts(mesh))
    if sizes.size > 1:
        centre = points[:, mesh.t].mean(axis=1)
        listed = [f"{sizes[i]} cells {at(centre[:, part == i][:, 0], unit)}" for i in np.argsort(-sizes)[:5]]
        raise MeshError(
            f"{sizes.size} separate parts that share no facet: {', '.join(listed)}{', …' if sizes.size > 5 else ''}. "
            "Try exporting one body, or joining the bodies before meshing."
        )
