"""Collected currents against an independent finite-element library (ngsolve, if it is installed).

J. Schöberl, "C++11 implementation of finite elements in NGSolve", ASC Report 30/2014, TU Wien. Its elements are of high
order on anisotropic geometric layers along the singular edges (I. Babuška, B. Q. Guo, SIAM J. Numer. Anal. 25, 837
(1988)); its current is the reaction tested with the function that is 1 on the contact. Mesh, elements, assembly and
solver share nothing with the package.
"""

from __future__ import annotations

import sys
from pathlib import Path

import pytest
from simple_cells import BARE_METAL, constant_base

import fem_carriers as fc

pytest.importorskip("ngsolve")
sys.path.append(str(Path(__file__).parents[1] / "benchmarks"))
pytestmark = [pytest.mark.slow, pytest.mark.filterwarnings("ignore::fem_carriers.ModelWarning")]
JUNCTION = {"layer": fc.DopedLayer("n", 100), "contact": fc.Contact("metal")}
D, LIFETIME_US, RATE = 30.0, 50.0, 1e16


@pytest.mark.parametrize("short", ["corner", "wide"])
def test_three_dimensions(short):
    """A rectangle in a corner; a finger over rear dots (curved cells there, polygons here)."""
    from compare_cells import linear_problems
    from general_library import geometric

    problem = linear_problems()[short]
    coarse, expected = (geometric(problem, order, layers)[1] for order, layers in ((3, 5), (4, 6)))
    assert abs(coarse - expected) < 4e-4 * expected
    solution = fc.solve_excess(problem.cell, target_error_percent=0.3, progress=False)
    share, bar = solution.ledger.share("metal"), solution.uncertainty["collected_metal_mA_per_cm2"]
    bar = bar / solution.ledger.generated_mA_per_cm2
    assert 0 < bar <= 3e-3 * share
    assert abs(share - expected) <= bar + abs(coarse - expected) / 4


def test_two_dimensions():
    """A strip on the front and a sink on part of the rear: two singular edges."""
    front = fc.Face(fc.Surface(), [fc.Strip("strip", 60, **JUNCTION)])
    rear = fc.Face(
        fc.Surface(srv_cm_per_s=500), [fc.Strip("sink", 100, center_um=300, srv_cm_per_s=BARE_METAL.srv_cm_per_s)]
    )
    base = constant_base(D, LIFETIME_US, thickness_um=150)
    cell = fc.UnitCell(base, 600, front=front, rear=rear, light=fc.Light.uniform(RATE))
    coarse, expected = section_share(6, 9), section_share(8, 12)
    assert abs(coarse - expected) < 1e-5 * expected
    for percent in (0.3, 0.01):
        solution = fc.solve_excess(cell, target_error_percent=percent, progress=False)
        share, bar = solution.ledger.share("metal"), solution.uncertainty["collected_metal_mA_per_cm2"]
        bar = bar / solution.ledger.generated_mA_per_cm2
        assert 0 < bar <= percent / 100 * share
        assert abs(share - expected) <= bar


def section_share(order: int, layers: int) -> float:
    """The two-dimensional problem in the library, lengths in 100 µm."""
    import ngsolve as ng
    from netgen.occ import Glue, MoveTo, OCCGeometry

    unit, width, height, strip, sink = 1e-2, 3.0, 1.5, 0.3, 0.5
    outline = MoveTo(0, 0).Line(width - sink).Line(sink).Rotate(90).Line(height).Rotate(90)
    outline = outline.Line(width - strip).Line(strip).Rotate(90).Line(height)
    shape = Glue([outline.Face()])
    for edge in shape.edges:
        m = edge.center
        rear = "sink" if m.x > width - sink else "rear"
        front = "strip" if m.x < strip else "front"
        edge.name = rear if m.y < 1e-9 else front if m.y > height - 1e-9 else "side"
    for vertex in shape.vertices:
        on_rear = abs(vertex.p.x - width + sink) < 1e-9 and vertex.p.y < 1e-9
        if on_rear or (abs(vertex.p.x - strip) < 1e-9 and vertex.p.y > height - 1e-9):
            vertex.hpref = 1
    mesh = ng.Mesh(OCCGeometry(shape, dim=2).GenerateMesh(maxh=0.3))
    mesh.RefineHP(layers, factor=0.2)
    space = ng.H1(mesh, order=order, dirichlet="strip|sink")
    u, v = space.TnT()
    matrix, right = ng.BilinearForm(space, symmetric=True), ng.LinearForm(space)
    matrix += (ng.grad(u) * ng.grad(v) + unit**2 / (D * LIFETIME_US * 1e-6) * u * v) * ng.dx
    matrix += 500 * unit / D * u * v * ng.ds(definedon=mesh.Boundaries("rear"))
    right += 1.0 * v * ng.dx
    matrix.Assemble()
    right.Assemble()
    solved, one = ng.GridFunction(space), ng.GridFunction(space)
    solved.vec.data = matrix.mat.Inverse(space.FreeDofs(), inverse="sparsecholesky") * right.vec
    one.Set(1, definedon=mesh.Boundaries("strip"))
    rest = right.vec.CreateVector()
    rest.data = right.vec - matrix.mat * solved.vec
    return float(ng.InnerProduct(rest, one.vec) / (width * height))
