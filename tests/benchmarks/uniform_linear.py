"""The linear problems of `compare.py` the way a careful person writes them first.

Linear tets of one size that fit the outlines, scikit-fem's forms, SciPy's direct solver; the collected current by the
reaction of the fixed unknowns.
"""

from __future__ import annotations

import time
from typing import Any

import numpy as np
from compare_cells import Linear
from general_library import UNIT, shape_of


def mesh_of(problem: Linear, largest: float) -> tuple[Any, dict[str, Any]]:
    """scikit-fem mesh, and facets (corner numbers) of the contact and the dot."""
    import skfem
    from netgen.occ import OCCGeometry

    made = OCCGeometry(shape_of(problem)).GenerateMesh(maxh=largest)
    points = np.ascontiguousarray(made.Coordinates().T)
    tets = made.Elements3D().NumPy()["nodes"][:, :4].T.astype(np.int64) - 1
    mesh = skfem.MeshTet(points, tets)
    middle = mesh.p[:, mesh.facets].mean(axis=1)
    outside = np.isin(np.arange(mesh.facets.shape[1]), mesh.boundary_facets())
    c, (d, e) = problem.size[2] / UNIT, (v / UNIT for v in problem.contact)
    contact = outside & (middle[2] > c - 1e-9) & (middle[0] < d) & (middle[1] < e)
    dot = outside & (middle[2] < 1e-9) & (np.hypot(middle[0], middle[1]) < problem.dot_radius / UNIT)
    return mesh, {"contact": np.flatnonzero(contact), "dot": np.flatnonzero(dot)}


def solve(problem: Linear, largest: float) -> tuple[int, float, float, float]:
    """Unknowns, collected share, processor seconds, wall seconds for tets of a largest edge (in `UNIT`)."""
    import skfem
    from scipy.sparse.linalg import spsolve
    from skfem.helpers import dot, grad

    wall, busy = time.perf_counter(), time.process_time()
    mesh, named = mesh_of(problem, largest)
    basis = skfem.Basis(mesh, skfem.ElementTetP1(), intorder=3)
    reaction, alpha = UNIT**2 / (problem.lifetime * problem.D), problem.absorption * UNIT

    @skfem.BilinearForm
    def transport(u: Any, v: Any, w: Any) -> Any:
        return dot(grad(u), grad(v)) + reaction * u * v

    @skfem.LinearForm
    def generation(v: Any, w: Any) -> Any:
        if alpha == 0:
            return 1.0 * v
        lit = w.x[0].mean(axis=-1, keepdims=True) > problem.contact[0] / UNIT
        return lit * alpha * np.exp(-alpha * (problem.size[2] / UNIT - w.x[2])) * v

    A, f = transport.assemble(basis), generation.assemble(basis)
    if named["dot"].size:
        rear = skfem.FacetBasis(mesh, skfem.ElementTetP1(), facets=named["dot"], intorder=3)
        S = problem.dot_srv * UNIT / problem.D
        A = A + skfem.BilinearForm(lambda u, v, w: S * u * v).assemble(rear)
    fixed = basis.get_dofs(named["contact"]).all()
    free = np.setdiff1d(np.arange(basis.N), fixed)
    u = np.zeros(basis.N)
    u[free] = spsolve(A[free][:, free].tocsc(), f[free])
    unit = UNIT**3 if alpha == 0 else UNIT**2
    share = float((f - A @ u)[fixed].sum()) * unit / problem.generated
    return basis.N, share, time.process_time() - busy, time.perf_counter() - wall
