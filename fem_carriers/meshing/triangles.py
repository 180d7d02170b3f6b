"""Quads split into triangles, names and all."""

from __future__ import annotations

import numpy as np

from .defects import find_columns
from .mesh import Mesh


def triangulated(mesh: Mesh) -> Mesh:
    """Every quad split in two along a diagonal; surfaces and volumes keep their names.

    Parameters
    ----------
    mesh : Mesh
        Of quads.

    Returns
    -------
    Mesh
        Of triangles, with the same vertices.
    """
    import skfem

    t = mesh.cells.t
    cells = skfem.MeshTri1(mesh.cells.p, np.hstack([t[[0, 1, 3]], t[[1, 2, 3]]]))
    surfaces = {name: find_columns(cells.facets, mesh.cells.facets[:, f]) for name, f in mesh.surfaces.items()}
    count = t.shape[1]
    return Mesh(cells, surfaces, {name: np.concatenate([own, own + count]) for name, own in mesh.volumes.items()})
