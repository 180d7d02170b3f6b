"""What is drawn: cells with fields, outlines and names of surfaces, flux arrows; plain data made into VTK objects."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..files.fields import cell_fields
from ..files.vtk_cells import VtkCells, to_three_axes, vtk_cells
from ..meshing.mesh import cell_sizes
from .images import Image

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..analysis.collection import CollectionProbability
    from ..analysis.solution import Solution

FLUX = "carrier_flux_mA_per_cm2"
ARROWS = {2: 420, 3: 220}
"""About how many arrows are drawn, by dimension of the mesh."""


@dataclass(frozen=True)
class Region:
    """A named surface for drawing.

    Parameters
    ----------
    name : str
    described : bool
        Whether the problem says something about it (else a mirror plane or an insulated surface).
    terminal : str
        Of its contact; empty without one.
    edges_um : (n, 2, 3) array
        Its outline; in a cross section the surface itself.
    spots_um : (m, 3) array
        Centres of its facets.
    """

    name: str
    described: bool
    terminal: str
    edges_um: NDArray[np.float64]
    spots_um: NDArray[np.float64]

    @property
    def title(self) -> str:
        """Name, and terminal if it has a contact."""
        return f"{self.name} (contact {self.terminal})" if self.terminal else self.name

    def anchor_um(self, room_um: NDArray[np.float64]) -> NDArray[np.float64] | None:
        """Where its name stands: a facet far from the outline and near the centroid.

        Parameters
        ----------
        room_um : (m,) array
            Distance of every facet's centre from other limits, such as a cut; not above 0 where nothing is left.
        """
        from scipy.spatial import cKDTree

        spots, room = self.spots_um[room_um > 0], room_um[room_um > 0]
        if not len(spots):
            return None
        if len(self.edges_um):
            room = np.minimum(room, cKDTree(self.edges_um.mean(axis=1)).query(spots)[0])
        return np.asarray(spots[np.argmax(room - 0.3 * np.linalg.norm(spots - spots.mean(axis=0), axis=1))])


class Scene:
    """Everything of a solution that can be drawn.

    Parameters
    ----------
    solution : Solution or CollectionProbability
    stretch_z : float
        Factor by which depth is drawn larger.
    """

    def __init__(self, solution: Solution | CollectionProbability, stretch_z: float = 1.0) -> None:
        self.solution, self.stretch_z = solution, stretch_z
        self.problem = solution.problem
        cell = cell_fields(solution)
        self.nodal = dict(solution.nodal_fields)
        self.per_cell = {"diffusion_length_um": cell["diffusion_length_um"], FLUX: np.linalg.norm(cell[FLUX], axis=1)}
        self.flux = cell[FLUX]

    @property
    def names(self) -> list[str]:
        """Fields in the order in which the window steps through them."""
        return [*self.nodal, *self.per_cell]

    def values(self, name: str) -> NDArray[np.float64]:
        """Nodal values or cell averages."""
        return self.nodal[name] if name in self.nodal else self.per_cell[name]

    @cached_property
    def _sizes(self) -> NDArray[np.float64]:
        return cell_sizes(self.problem.mesh.cells)

    def weights(self, name: str) -> NDArray[np.float64]:
        """Volume that every value of a field stands for."""
        if name in self.per_cell:
            return self._sizes
        dofs = self.problem.space.numbering.element_dofs
        return np.asarray(np.bincount(dofs.ravel(), np.tile(self._sizes, len(dofs)), self.problem.space.size), float)

    @cached_property
    def cells(self) -> VtkCells:
        """The modelled piece."""
        return vtk_cells(self.problem.space)

    def stretched(self, points_um: NDArray[np.float64]) -> NDArray[np.float64]:
        """Positions as drawn."""
        return np.asarray(points_um * np.array([1.0, 1.0, self.stretch_z]))

    def grid(self, images: list[Image]) -> Any:
        """All images as one pyvista grid with every field."""
        import pyvista as pv

        n, count = len(self.cells.points_um), len(images)
        points = np.concatenate([self.stretched(i.points(self.cells.points_um)) for i in images])
        nodes = np.concatenate(
            [(self.cells.mirrored_nodes if i.inverted else self.cells.nodes) + k * n for k, i in enumerate(images)]
        )
        checked = VtkCells(points, nodes, self.cells.kind, self.cells.order)
        grid = pv.UnstructuredGrid({checked.vtk_type: checked.nodes}, checked.points_um)
        for name in self.names:
            data = grid.point_data if name in self.nodal else grid.cell_data
            data[name] = np.tile(self.values(name), count)
        grid.cell_data["flux"] = np.concatenate([i.vectors(self.flux) for i in images])
        return grid

    @cached_property
    def regions(self) -> list[Region]:
        """Named surfaces on the boundary: contacts first, then other described ones, then the rest."""
        mesh, surfaces = self.problem.mesh, self.problem.surfaces
        found = []
        for name, facets in mesh.surfaces.items():
            contact = surfaces[name].contact if name in surfaces else None
            centres = mesh.cells.p[:, mesh.cells.facets[:, facets]].mean(axis=1)
            terminal = contact.terminal if contact is not None else ""
            found.append(Region(name, name in surfaces, terminal, _outline(mesh.cells, facets), to_three_axes(centres)))
        return sorted(found, key=lambda r: (not r.terminal, not r.described))

    def lines(self, region: Region, images: list[Image]) -> Any:
        """Outline of a region in all images, as pyvista lines without seams between images; None if there is none."""
        ends = np.concatenate([i.points(region.edges_um.reshape(-1, 3)) for i in images]).reshape(-1, 2, 3)
        if not len(ends):
            return None
        places = np.round(ends / np.ptp(ends, axis=(0, 1)).max() * 1e8)
        key = np.concatenate([places.min(axis=1), places.max(axis=1), places.sum(axis=1)], axis=1)
        _, which, counts = np.unique(key + 0.0, axis=0, return_inverse=True, return_counts=True)
        alone = counts[which.reshape(-1)] == 1
        return segments(self.stretched(straight_lines(ends[alone]))) if alone.any() else None

    def arrows(self, grid: Any, plane: tuple[Any, Any] | None) -> Any:
        """Flux arrows at even distances: on the cut `plane` (normal, origin), or throughout. None if there is no flux.

        The length grows with the square root of the flux, which is singular at contact edges; it ends at that of the
        largest 5 %.
        """
        import pyvista as pv

        where, step = _even_points(grid.bounds, ARROWS[self.problem.mesh.dimension], plane)
        holder = np.asarray(grid.find_containing_cell(where)).reshape(-1)
        where, flux = where[holder >= 0], np.asarray(grid.cell_data["flux"])[holder[holder >= 0]]
        size = np.linalg.norm(flux, axis=1)
        if not size.size or not size.max() > 0:
            return None
        strength = np.sqrt(np.minimum(size / np.quantile(size, 0.95), 1.0)) if np.quantile(size, 0.95) > 0 else size
        drawn = flux * np.array([1.0, 1.0, self.stretch_z])
        length = np.linalg.norm(drawn, axis=1)
        direction = drawn / np.where(length > 0, length, 1.0)[:, None]
        cloud = pv.PolyData(where - 0.5 * step * (direction * strength[:, None]))
        cloud["direction"], cloud["strength"] = direction, strength
        shape = pv.Arrow(tip_length=0.38, tip_radius=0.13, shaft_radius=0.04, tip_resolution=12)
        return cloud.glyph(geom=shape, orient="direction", scale="strength", factor=float(step))


def segments(ends: NDArray[np.float64]) -> Any:
    """Line segments (n, 2, 3) as pyvista lines."""
    import pyvista as pv

    pairs = np.arange(2 * len(ends)).reshape(-1, 2)
    return pv.PolyData(ends.reshape(-1, 3), lines=np.insert(pairs, 0, 2, axis=1).ravel())


def straight_lines(ends: NDArray[np.float64]) -> NDArray[np.float64]:
    """Join segments (n, 2, 3) that continue each other straight on; a chain of very short ones is drawn with gaps."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    places = np.round(ends.reshape(-1, 3) / np.abs(ends).max() * 1e9)
    _, vertex = np.unique(places + 0.0, axis=0, return_inverse=True)
    order = np.argsort(vertex.reshape(-1), kind="stable")
    _, first, count = np.unique(vertex.reshape(-1)[order], return_index=True, return_counts=True)
    a, b = order[first[count == 2]] // 2, order[first[count == 2] + 1] // 2
    along = ends[:, 1] - ends[:, 0]
    along = along / np.linalg.norm(along, axis=1)[:, None]
    same = np.abs((along[a] * along[b]).sum(axis=1)) > 1 - 1e-9
    links = coo_array((np.ones(same.sum()), (a[same], b[same])), shape=(len(ends), len(ends)))
    number, chain = connected_components(links, directed=False)
    joined = np.empty((number, 2, 3))
    for k in range(number):
        points = ends[chain == k].reshape(-1, 3)
        reach = points @ along[chain == k][0]
        joined[k] = points[np.argmin(reach)], points[np.argmax(reach)]
    return joined


def _outline(cells: Any, facets: NDArray[np.int64]) -> NDArray[np.float64]:
    """Edges that belong to one facet only, (n, 2, 3) in µm; in 2-D all facets."""
    corners = cells.facets[:, facets]
    if cells.dim() == 2:
        pairs = corners.T
    else:
        pairs = _facet_edges(cells, facets)
        unique, counts = np.unique(np.sort(pairs, axis=1), axis=0, return_counts=True)
        pairs = unique[counts == 1]
    return to_three_axes(cells.p[:, pairs.ravel()]).reshape(-1, 2, 3)


def _facet_edges(cells: Any, facets: NDArray[np.int64]) -> NDArray[np.int64]:
    """Vertex pairs of the edges of facets, facet by facet."""
    owner = cells.f2t[0, facets]
    pairs = []
    for i, local in enumerate(cells.elem.refdom.facets):
        ring = cells.t[list(local)][:, owner[cells.t2f[i, owner] == facets]]
        pairs.append(np.stack([ring, np.roll(ring, -1, axis=0)], axis=-1).reshape(-1, 2))
    return np.concatenate(pairs)


def _even_points(bounds: Any, count: int, plane: tuple[Any, Any] | None) -> tuple[NDArray[np.float64], float]:
    """About `count` points on a regular grid in a box, or where an axis-parallel grid on a plane crosses it."""
    low, high = np.array(bounds[0::2], dtype=float), np.array(bounds[1::2], dtype=float)
    size = high - low
    flat = size < 1e-9 * size.max()
    if plane is None:
        dimension = int((~flat).sum())
        step = float((np.prod(size[~flat]) / count) ** (1 / dimension))
        axes = [np.zeros(1) + a if f else _centred(a, b, step) for a, b, f in zip(low, high, flat, strict=True)]
        return np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3), step
    normal = np.asarray(plane[0], dtype=float) / np.linalg.norm(plane[0])
    u = np.cross(normal, np.eye(3)[np.argmin(np.abs(normal))])
    u /= np.linalg.norm(u)
    v = np.cross(normal, u)
    reach = float(np.linalg.norm(size))
    step = _plane_step(size, normal, count)
    grid = np.arange(-reach, reach, step)
    a, b = (g.ravel()[:, None] for g in np.meshgrid(grid, grid))
    points = np.asarray(plane[1], dtype=float) + a * u + b * v
    inside = ((points > low) & (points < high)).all(axis=1)
    return points[inside], step


def _plane_step(size: Any, normal: Any, count: int) -> float:
    """Spacing for about `count` points on the cut of a box, from the area of the box face nearest to it."""
    kept = np.delete(size, int(np.argmax(np.abs(normal))))
    return float(np.sqrt(np.prod(kept) / count))


def _centred(low: float, high: float, step: float) -> NDArray[np.float64]:
    n = max(1, round((high - low) / step))
    return low + (np.arange(n) + 0.5) * (high - low) / n
