"""The linear problems of `compare.py` with the general-purpose library ngsolve: its elements, its loop, its solvers.

The loop is that of the library's tutorials: solve, interpolate the flux into H(div), take the distance of the two in
every element as estimate (recovered flux; O. C. Zienkiewicz, J. Z. Zhu, Int. J. Numer. Meth. Eng. 24, 337 (1987)), mark
what is above a quarter of the largest, bisect. With `goal` elements are marked by the product of the estimates for the
solution and for the collection probability, which share matrix and factors.
"""

from __future__ import annotations

import math
import time
from collections.abc import Iterator
from typing import Any

from compare_cells import Linear

UNIT = 100e-4
"""Length unit of the meshes in cm, so that numbers are near 1."""
MARK_ABOVE = 0.25


def available() -> bool:
    """Whether the library is installed."""
    import importlib.util

    return importlib.util.find_spec("ngsolve") is not None


def threads(number: int) -> None:
    """How many threads the library uses."""
    import ngsolve

    ngsolve.SetNumThreads(number)


def shape_of(problem: Linear) -> Any:
    """The box with faces named "contact" and "dot"; what is below an opaque contact is the volume "shaded"."""
    from netgen.occ import Axes, Box, Glue, Pnt, WorkPlane, X, Z

    (a, b, c), (d, e) = ([v / UNIT for v in sizes] for sizes in (problem.size, problem.contact))
    radius = problem.dot_radius / UNIT
    plane = lambda z: WorkPlane(Axes(Pnt(0, 0, z), Z, X))
    whole = Box(Pnt(0, 0, 0), Pnt(a, b, c))
    parts = [whole, plane(c).Rectangle(d, e).Face()]
    if problem.absorption:
        shaded = Box(Pnt(0, 0, 0), Pnt(d, e, c))
        shaded.mat("shaded")
        whole = whole - shaded
        parts = [shaded, whole]
    whole.mat("lit")
    if radius:
        parts.append(plane(0).Circle(radius).Face() * plane(0).Rectangle(a, b).Face())
    shape = Glue(parts)
    for face in shape.faces:
        m = face.center
        on_contact = abs(m.z - c) < 1e-9 and m.x < d and m.y < e
        face.name = "contact" if on_contact else "dot" if abs(m.z) < 1e-9 and math.hypot(m.x, m.y) < radius else "other"
    return shape


class Equations:
    """The weak form on a mesh; spaces and functions follow when the mesh is refined.

    Parameters
    ----------
    problem : Linear
    mesh : ngsolve.Mesh
    order : int
    solver : str
        The library's name of a direct solver, or of a preconditioner for conjugate gradients.
    """

    def __init__(self, problem: Linear, mesh: Any, order: int, solver: str) -> None:
        import ngsolve as ng

        self.problem, self.mesh, self.solver = problem, mesh, solver
        self.space = ng.H1(mesh, order=order, dirichlet="contact", autoupdate=True)
        u, v = self.space.TnT()
        self.matrix = ng.BilinearForm(self.space, symmetric=True)
        reaction = UNIT**2 / (problem.lifetime * problem.D)
        self.matrix += (ng.grad(u) * ng.grad(v) + reaction * u * v) * ng.dx
        if problem.dot_srv:
            on_dot = ng.ds(definedon=mesh.Boundaries("dot"))
            self.matrix += problem.dot_srv * UNIT / problem.D * u * v * on_dot
        alpha = problem.absorption * UNIT
        depth = problem.size[2] / UNIT - ng.z
        rate = mesh.MaterialCF({"lit": alpha * ng.exp(-alpha * depth), "shaded": 0}) if alpha else ng.CF(1.0)
        self.right = ng.LinearForm(self.space)
        self.right += rate * v * ng.dx(bonus_intorder=4 if alpha else 0)
        self.iterative = ng.Preconditioner(self.matrix, solver) if solver in ("bddc", "multigrid") else None
        self.u, self.probability = (ng.GridFunction(self.space, autoupdate=True) for _ in range(2))

    def solve(self, goal: bool) -> float:
        """Collected share of the generated carriers: the reaction tested with the function that is 1 on the contact."""
        import ngsolve as ng

        self.matrix.Assemble()
        self.right.Assemble()
        A, f = self.matrix.mat, self.right.vec
        if self.iterative is None:
            inverse = A.Inverse(self.space.FreeDofs(), inverse=self.solver)
        else:
            inverse = ng.CGSolver(A, self.iterative.mat, maxiter=1000, tol=1e-9)
        one = f.CreateVector()
        self.probability.vec[:] = 0
        self.probability.Set(1, definedon=self.mesh.Boundaries("contact"))
        one.data = self.probability.vec
        self.u.vec.data = inverse * f
        rest = f.CreateVector()
        rest.data = f - A * self.u.vec
        if goal:
            lifted = f.CreateVector()
            lifted.data = A * one
            self.probability.vec.data -= inverse * lifted
        unit = UNIT**3 if self.problem.absorption == 0 else UNIT**2
        return float(ng.InnerProduct(rest, one) * unit / self.problem.generated)


def adaptive(
    problem: Linear, *, goal: bool, solver: str, order: int = 2, largest: int = 150_000
) -> Iterator[tuple[int, float]]:
    """Unknowns and collected share on every mesh of the loop, from the coarsest one that fits the outlines."""
    import ngsolve as ng
    from netgen.occ import OCCGeometry

    mesh = ng.Mesh(OCCGeometry(shape_of(problem)).GenerateMesh())
    mesh.Curve(max(order, 2))
    equations = Equations(problem, mesh, order, solver)
    fluxes = ng.HDiv(mesh, order=order, autoupdate=True)
    recovered = ng.GridFunction(fluxes, autoupdate=True)

    def estimate(function: Any) -> Any:
        recovered.Set(ng.grad(function))
        return ng.Integrate((recovered - ng.grad(function)) ** 2, mesh, ng.VOL, element_wise=True).NumPy()

    while True:
        yield equations.space.ndof, equations.solve(goal)
        if equations.space.ndof > largest:
            return
        errors = estimate(equations.u)
        if goal:
            errors = (errors * estimate(equations.probability)) ** 0.5
        mesh.ngmesh.Elements3D().NumPy()["refine"] = errors > MARK_ABOVE * errors.max()
        mesh.Refine()
        mesh.Curve(max(order, 2))


def geometric(problem: Linear, order: int, layers: int, largest: float = 0.8) -> tuple[int, float]:
    """Unknowns and collected share on one mesh with anisotropic geometric layers along the singular edges."""
    import ngsolve as ng
    from netgen.occ import OCCGeometry

    shape = shape_of(problem)
    (_, b, c), (d, e) = ([v / UNIT for v in sizes] for sizes in (problem.size, problem.contact))
    near = lambda p, q: abs(p - q) < 1e-7
    radius = problem.dot_radius / UNIT
    for edge in shape.edges:
        m, ends = edge.center, [math.hypot(p.x, p.y) for p in (edge.start, edge.end)]
        beside = (near(m.x, d) and m.y < e) or (e < b and near(m.y, e) and m.x < d)
        round_ = radius > 0 and near(m.z, 0) and all(near(r, radius) for r in ends)
        if (near(m.z, c) and beside) or round_:
            edge.hpref = 1
    for vertex in shape.vertices:
        if e < b - 1e-7 and near(vertex.p.x, d) and near(vertex.p.y, e) and near(vertex.p.z, c):
            vertex.hpref = 1
    mesh = ng.Mesh(OCCGeometry(shape).GenerateMesh(maxh=largest))
    mesh.RefineHP(layers, factor=0.2)
    mesh.Curve(order)
    equations = Equations(problem, mesh, order, "pardiso")
    return equations.space.ndof, equations.solve(goal=False)


def seconds_to(problem: Linear, percent: float, **options: Any) -> tuple[int, float, float, float]:
    """The adaptive loop until its error, known by hindsight, is and stays below `percent`.

    Returns
    -------
    unknowns, error in percent, processor seconds, wall seconds
    """
    wall, busy, seen = time.perf_counter(), time.process_time(), []
    for unknowns, share in adaptive(problem, **options):
        error = 100 * abs(share / problem.truth - 1)
        seen.append((unknowns, error, time.process_time() - busy, time.perf_counter() - wall))
        if error < 0.7 * percent and unknowns > 4 * next(n for n, e, *_ in seen if e < percent):
            break
    good = len(seen)
    while good > 1 and seen[good - 2][1] < percent:
        good -= 1
    return seen[good - 1]
