"""A mesh with named surfaces and volumes, in cm."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import MeshError

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

KINDS = {"MeshTri1": "triangle", "MeshQuad1": "quad", "MeshTet1": "tetra", "MeshHex1": "hexahedron"}
"""scikit-fem mesh class to the plain name of its cells."""


@dataclass(frozen=True, eq=False)
class Mesh:
    """Straight-sided triangles, quads, tets or hexahedra with names.

    Parameters
    ----------
    cells : skfem.Mesh
        ``MeshTri1``, ``MeshQuad1``, ``MeshTet1`` or ``MeshHex1``; coordinates in cm. In 2-D the axes are x (across the
        fingers) and z (depth); in 3-D x, y, z. z points from the rear to the front.
    surfaces : mapping of str to (n,) int array
        Facet indices of each named surface.
    volumes : mapping of str to (n,) int array
        Cell indices of each named volume; together they cover every cell once.
    """

    cells: Any
    surfaces: Mapping[str, NDArray[np.int64]] = field(default_factory=dict)
    volumes: Mapping[str, NDArray[np.int64]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if type(self.cells).__name__ not in KINDS:
            raise MeshError(
                f"cells of type {type(self.cells).__name__}; allowed are straight-sided triangles, quads, tets and "
                "hexahedra, one kind per mesh. Try exporting first-order cells of a single kind."
            )

    @property
    def kind(self) -> str:
        """Plain name of the cells: triangle, quad, tetra or hexahedron."""
        return KINDS[type(self.cells).__name__]

    @property
    def dimension(self) -> int:
        """2 or 3."""
        return int(self.cells.dim())

    @property
    def points_um(self) -> NDArray[np.float64]:
        """Vertex coordinates in µm, shape (dimension, n_vertices)."""
        return np.asarray(self.cells.p * 1e4, dtype=float)

    def surface_area_cm2(self, name: str) -> float:
        """Area of a named surface in cm² (in 2-D: length × 1 cm of depth)."""
        return float(facet_areas(self.cells, self.surfaces[name]).sum())

    def inner_share(self, name: str) -> float:
        """Share of a named surface's facets that lie inside the volume, between two cells."""
        return float((self.cells.f2t[1, self.surfaces[name]] >= 0).mean()) if self.surfaces[name].size else 0.0

    def volume_cm3(self, name: str | None = None) -> float:
        """Volume in cm³ of a named volume, or of everything (in 2-D: area × 1 cm)."""
        sizes = cell_sizes(self.cells)
        return float(sizes.sum() if name is None else sizes[self.volumes[name]].sum())

    def refined(self) -> Mesh:
        """Split every cell into 4 (2-D) or 8 (3-D) of its kind; all names survive.

        Returns
        -------
        Mesh
        """
        fine, parent = _split(self.cells)
        return Mesh(
            fine,
            {name: _fine_facets(self.cells, fine, parent, facets) for name, facets in self.surfaces.items()},
            {name: np.flatnonzero(np.isin(parent, cells)) for name, cells in self.volumes.items()},
        )

    def __repr__(self) -> str:
        size = " × ".join(f"{s:.4g}" for s in np.ptp(self.points_um, axis=1))
        return (
            f"Mesh of {self.cells.t.shape[1]} {self.kind} cells, {size} µm; "
            f"surfaces {', '.join(self.surfaces) or 'none'}; volumes {', '.join(self.volumes) or 'none'}"
        )


def facet_areas(cells: Any, facets: NDArray[np.int64]) -> NDArray[np.float64]:
    """Areas of facets in cm² (cm in 2-D), shape (n_facets,); planar facets."""
    corners = cells.p[:, cells.facets[:, facets]]
    if cells.dim() == 2:
        return np.asarray(np.linalg.norm(corners[:, 1] - corners[:, 0], axis=0))
    total = np.zeros(corners.shape[2])
    for i in range(1, corners.shape[1] - 1):
        a, b = corners[:, i] - corners[:, 0], corners[:, i + 1] - corners[:, 0]
        total += 0.5 * np.linalg.norm(np.cross(a, b, axis=0), axis=0)
    return total


def cell_sizes(cells: Any) -> NDArray[np.float64]:
    """Volumes of cells in cm³ (areas in 2-D, cm²), shape (n_cells,)."""
    from skfem import Basis
    from skfem.element import ElementHex1, ElementQuad1, ElementTetP1, ElementTriP1

    element = {"triangle": ElementTriP1, "quad": ElementQuad1, "tetra": ElementTetP1, "hexahedron": ElementHex1}
    basis = Basis(cells, element[KINDS[type(cells).__name__]](), intorder=3)
    return np.asarray(basis.dx.sum(axis=1))


def _split(coarse: Any) -> tuple[Any, NDArray[np.int64]]:
    """Refined cells and the parent of each.

    scikit-fem keeps subdomains (not boundaries) through refinement, so each parent's index travels as binary digits.
    """
    index = np.arange(coarse.t.shape[1])
    digits = {str(bit): np.flatnonzero(index >> bit & 1) for bit in range(max(1, int(index.size - 1).bit_length()))}
    fine = type(coarse)(coarse.p, coarse.t).with_subdomains(digits).refined()
    parent = np.zeros(fine.t.shape[1], dtype=np.int64)
    for bit in digits:
        parent[fine.subdomains[bit]] += 1 << int(bit)
    return type(coarse)(fine.p, fine.t), parent


def _fine_facets(coarse: Any, fine: Any, parent: NDArray[np.int64], facets: NDArray[np.int64]) -> NDArray[np.int64]:
    """Facets of `fine` that lie on the coarse `facets`."""
    wanted = np.zeros(coarse.facets.shape[1], dtype=bool)
    wanted[facets] = True
    found = []
    for local in range(coarse.t2f.shape[0]):
        owners = np.flatnonzero(wanted[coarse.t2f[local]])
        corners = coarse.p[:, coarse.facets[:, coarse.t2f[local, owners]]]
        point, normal = corners[:, 0], _facet_normal(corners)
        size = np.ptp(coarse.p[:, coarse.t[:, owners]], axis=1).max(axis=0)
        slot = np.full(coarse.t.shape[1], -1)
        slot[owners] = np.arange(owners.size)
        children = np.flatnonzero(slot[parent] >= 0)
        k = slot[parent[children]]
        centre = fine.p[:, fine.facets[:, fine.t2f[:, children]]].mean(axis=1)  # (dim, n_local, n_children)
        distance = np.abs(np.einsum("dlc,dc->lc", centre - point[:, None, k], normal[:, k]))
        on = distance < 1e-9 * size[k]
        found.append(fine.t2f[:, children][on])
    return np.unique(np.concatenate(found)) if found else np.zeros(0, dtype=np.int64)


def _facet_normal(corners: NDArray[np.float64]) -> NDArray[np.float64]:
    """Unit normals of facets, shape (dim, n), from corner coordinates (dim, n_corners, n)."""
    edge = corners[:, 1] - corners[:, 0]
    if corners.shape[0] == 2:
        normal = np.array([edge[1], -edge[0]])
    else:
        normal = np.cross(edge, corners[:, 2] - corners[:, 0], axis=0)
    return np.asarray(normal / np.linalg.norm(normal, axis=0))
