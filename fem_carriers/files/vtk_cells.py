"""Finite-element nodes in the order in which VTK numbers the nodes of its cells.

The order is found by matching positions on the reference cell, so there is no table of numbers to get wrong.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..transport.spaces import Space

# Corners in VTK's order, then the corner pairs of edge nodes and the corner groups of face nodes, as in the node
# pictures of the classes vtkQuadraticTriangle, vtkBiQuadraticQuad, vtkQuadraticTetra and vtkTriQuadraticHexahedron.
_CORNERS = {
    "line": [(0,), (1,)],
    "triangle": [(0, 0), (1, 0), (0, 1)],
    "quad": [(0, 0), (1, 0), (1, 1), (0, 1)],
    "tetra": [(0, 0, 0), (1, 0, 0), (0, 1, 0), (0, 0, 1)],
    "hexahedron": [(0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0), (0, 0, 1), (1, 0, 1), (1, 1, 1), (0, 1, 1)],
}
_GROUPS: dict[str, list[tuple[int, ...]]] = {
    "line": [(0, 1)],
    "triangle": [(0, 1), (1, 2), (2, 0)],
    "quad": [(0, 1), (1, 2), (2, 3), (3, 0), (0, 1, 2, 3)],
    "tetra": [(0, 1), (1, 2), (2, 0), (0, 3), (1, 3), (2, 3)],
    "hexahedron": [
        *[(0, 1), (1, 2), (2, 3), (3, 0), (4, 5), (5, 6), (6, 7), (7, 4), (0, 4), (1, 5), (2, 6), (3, 7)],
        *[(0, 3, 4, 7), (1, 2, 5, 6), (0, 1, 4, 5), (2, 3, 6, 7), (0, 1, 2, 3), (4, 5, 6, 7), tuple(range(8))],
    ],
}
NAMES = {
    ("line", 1): ("line", 3), ("line", 2): ("line3", 21),
    ("triangle", 1): ("triangle", 5), ("triangle", 2): ("triangle6", 22),
    ("quad", 1): ("quad", 9), ("quad", 2): ("quad9", 28),
    ("tetra", 1): ("tetra", 10), ("tetra", 2): ("tetra10", 24),
    ("hexahedron", 1): ("hexahedron", 12), ("hexahedron", 2): ("hexahedron27", 29),
}  # fmt: skip
"""Kind and order to meshio's name and VTK's type number."""


@dataclass(frozen=True, eq=False)
class VtkCells:
    """Cells of one kind, as VTK wants them.

    Parameters
    ----------
    points_um : (n, 3) array
        Nodes; a 2-D mesh lies in the x–z plane at y = 0.
    nodes : (n_cells, n_local) int array
        Rows of `points_um`, in VTK's order.
    kind : str
        line, triangle, quad, tetra or hexahedron.
    order : {1, 2}
    """

    points_um: NDArray[np.float64]
    nodes: NDArray[np.int64]
    kind: str
    order: int

    def __post_init__(self) -> None:
        # VTK does not check and would crash the process
        if self.nodes.size and not (self.nodes.min() >= 0 and self.nodes.max() < len(self.points_um)):
            raise IndexError(f"nodes from {self.nodes.min()} to {self.nodes.max()} with {len(self.points_um)} points")
        if not np.isfinite(self.points_um).all():
            raise ValueError("points that are not finite")

    @property
    def meshio_name(self) -> str:
        """Cell type in meshio's words, e.g. "tetra10"."""
        return NAMES[self.kind, self.order][0]

    @property
    def vtk_type(self) -> int:
        """VTK's number of the cell type."""
        return NAMES[self.kind, self.order][1]

    @property
    def mirrored_nodes(self) -> NDArray[np.int64]:
        """`nodes` numbered for cells seen in a mirror, so that they keep a positive volume."""
        return self.nodes[:, mirror(self.kind, self.order)]


def node_positions(kind: str, order: int) -> NDArray[np.float64]:
    """Positions of the nodes on the unit cell in VTK's order, shape (n_local, dimension)."""
    corners = np.array(_CORNERS[kind], dtype=float)
    groups = _GROUPS[kind] if order == 2 else []
    return np.concatenate([corners, *(corners[list(g)].mean(axis=0)[None] for g in groups)])


def match(wanted: NDArray[np.float64], given: NDArray[np.float64]) -> NDArray[np.int64]:
    """Index into `given` of every position in `wanted`; positions on a unit cell, (n, dimension)."""
    distance = np.abs(wanted[:, None] - given[None]).max(axis=2)
    if (distance.min(axis=1) > 1e-9).any() or len(given) < len(wanted):
        raise ValueError("elements whose nodes are not those of a VTK cell")
    return np.asarray(distance.argmin(axis=1), dtype=np.int64)


def mirror(kind: str, order: int) -> NDArray[np.int64]:
    """Local renumbering that swaps the first two reference axes."""
    positions = node_positions(kind, order)
    return match(positions[:, [1, 0, *range(2, positions.shape[1])]], positions)


def to_three_axes(points_cm: Any) -> NDArray[np.float64]:
    """Coordinates (dimension, n) in cm as (n, 3) in µm; a 2-D mesh goes to the x–z plane."""
    p = np.asarray(points_cm, dtype=float) * 1e4
    return np.stack([p[0], np.zeros_like(p[0]) if len(p) == 2 else p[1], p[-1]], axis=1)


def vtk_cells(space: Space) -> VtkCells:
    """All cells of a space; point i is its node i.

    Parameters
    ----------
    space : Space

    Returns
    -------
    VtkCells
        Every cell of positive volume (of two axes: x towards z).
    """
    kind, order = space.mesh.kind, space.order
    local = match(node_positions(kind, order), space.element.doflocs)
    nodes = np.array(space.numbering.element_dofs[local].T, dtype=np.int64)
    inverted = _volumes(space.points_cm, nodes, kind) < 0
    nodes[inverted] = nodes[inverted][:, mirror(kind, order)]
    return VtkCells(to_three_axes(space.points_cm), nodes, kind, order)


def _volumes(points: Any, nodes: NDArray[np.int64], kind: str) -> Any:
    """Jacobian determinants at the first corner, whose neighbours on the axes are looked up by position."""
    axes = match(np.eye(points.shape[0]), node_positions(kind, 1))
    edges = points[:, nodes[:, axes]] - points[:, nodes[:, :1]]
    return np.linalg.det(np.moveaxis(edges, 1, 0))


def vtk_facets(space: Space, facets: NDArray[np.int64]) -> VtkCells:
    """Facets (lines, triangles or quads) of a space as cells, in the given order; point i is node i of the space.

    Parameters
    ----------
    space : Space
    facets : (n,) int array

    Returns
    -------
    VtkCells
    """
    mesh, element = space.mesh.cells, space.element
    corners = np.asarray(element.refdom.p).T
    kind = {2: "line", 3: "triangle", 4: "quad"}[len(element.refdom.facets[0])]
    groups = _GROUPS[kind] if space.order == 2 else []
    owner = mesh.f2t[0, facets]
    nodes = np.empty((len(facets), len(node_positions(kind, space.order))), dtype=np.int64)
    for i, of_facet in enumerate(element.refdom.facets):
        own = corners[list(of_facet)]
        wanted = np.concatenate([own, *(own[list(g)].mean(axis=0)[None] for g in groups)])
        here = mesh.t2f[i, owner] == facets
        nodes[here] = space.numbering.element_dofs[match(wanted, element.doflocs)][:, owner[here]].T
    return VtkCells(to_three_axes(space.points_cm), nodes, kind, space.order)
