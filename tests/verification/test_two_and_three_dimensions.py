"""Singular, two- and three-dimensional problems with exact answers, reciprocity, and answers that must not change.

Without recombination Δn obeys Laplace's equation like a potential; D takes the place of a conductivity, carriers per
second that of a current. Printed digits come from the quoted formula or definition, evaluated independently of this
package.
"""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from simple_cells import BARE_METAL, VT, box_mesh, constant_base, junction

import fem_carriers as fc
from fem_carriers.constants import ELEMENTARY_CHARGE_C as Q
from fem_carriers.meshing.grading import graded_axis
from fem_carriers.transport.adjoint import collection_field
from fem_carriers.transport.drift import make_drift
from fem_carriers.transport.excess import ExcessSystem
from fem_carriers.transport.steady import solve_state

D = 30.0  # cm²/s
EMITTER = fc.DopedLayer("n", 100)
METAL = {"layer": EMITTER, "contact": fc.Contact("metal")}


def conductance(solution, terminal="metal"):
    """Carriers per second from `terminal`, over D and the Δn there; per cm of depth in 2-D, in cm in 3-D."""
    current = -solution.collected_mA_per_cm2[terminal] * 1e-3 * solution.problem.cell_area_cm2
    return current / (Q * D * solution.excess_density_per_cm3.max())


# Strip contact of half width a on a slab of thickness h, period 2L, full back plane, by conformal mapping (classical):
# k1 from K(k1)/K′(k1) = L/h, κ = k1 sn(K(k1) a/L, k1); resistance × conductivity × depth of the half cell K′(κ)/K(κ).


def strip_resistance(L, h, a):
    from scipy.optimize import brentq
    from scipy.special import ellipj, ellipk, ellipkm1

    # in terms of the complementary parameter m1 = 1 − k², which may be tiny
    log_m1 = brentq(lambda s: ellipkm1(math.exp(s)) / ellipk(math.exp(s)) - L / h, -60, -1e-9)
    m1 = math.exp(log_m1)
    kappa = math.sqrt(1 - m1) * ellipj(ellipkm1(m1) * a / L, 1 - m1)[0]
    return ellipk(1 - kappa**2) / ellipk(kappa**2)


STRIPS = {
    (100, 100, 50): 1.2200415913,
    (500, 180, 20): 1.9958805835,
    (750, 150, 25): 1.7393246179,
    (100, 20, 10): 1.0663596264,
}


@pytest.mark.parametrize(("sizes", "expected"), STRIPS.items())
@pytest.mark.parametrize(
    ("fineness", "tolerance"), [({}, 3e-4), ({"first_step_um": 0.003, "growth": 1.6}, 1e-4)], ids=["default", "fine"]
)
def test_strip_contact_on_a_slab(sizes, expected, fineness, tolerance):
    assert strip_resistance(*sizes) == pytest.approx(expected, rel=1e-8)
    L, h, a = sizes
    front = fc.Face(fc.Surface(), [fc.Strip("strip", 2 * a, **METAL)])
    cell = fc.UnitCell(constant_base(D, thickness_um=h), 2 * L, front=front, rear=BARE_METAL)
    solution = fc.solve_excess(fc.problem(cell, **fineness), 0.2)
    assert 1 / conductance(solution) == pytest.approx(expected, rel=tolerance)


# Disc contact on an infinite slab with an ideal back plane, from a Fredholm equation of the second kind for the
# equipotential disc: R a/ρ. A piece of half width a + 12 h stands for the infinite slab.


@pytest.mark.slow
@pytest.mark.parametrize(("a_over_h", "expected"), [(0.25, 0.2227843658), (0.5, 0.1975412163), (1.0, 0.1566630921)])
def test_disc_contact_on_a_slab(a_over_h, expected):
    h = 100.0
    a = a_over_h * h
    front = fc.Face(fc.Surface(), [fc.Dot("disc", 2 * a, **METAL)])
    pitch = 2 * (a + 12 * h)
    cell = fc.UnitCell(constant_base(D, thickness_um=h), pitch, pitch, front=front, rear=BARE_METAL)
    solution = fc.solve_excess(fc.problem(cell), 0.2)
    quarter = conductance(solution) / (a * 1e-4)
    assert 1 / (4 * quarter) == pytest.approx(expected, rel=5e-3)


# Corner contact of 20 × 75 µm on a piece of 600 × 300 × 180 µm, diffusion length 500 µm, uniform generation: collected
# share 0.29220, the limit of five independent families of meshes (hexahedra, tets, uniform and adaptive).


@pytest.mark.parametrize(
    ("fineness", "tolerance"),
    [
        ({"level": 0}, 1.5e-3),
        pytest.param({"first_step_um": 0.06, "growth": 1.8}, 2e-4, marks=pytest.mark.slow),
    ],
    ids=["default", "fine"],
)
def test_corner_contact(fineness, tolerance):
    base = constant_base(D, 500e-4**2 / D * 1e6)
    front = fc.Face(fc.Surface(), [fc.Rectangle("corner", 40, 150, **METAL)])
    cell = fc.UnitCell(base, 1200, 600, front=front, light=fc.Light.uniform(1e16))
    solution = fc.solve_excess(fc.problem(cell, **fineness))
    assert solution.ledger.share("metal") == pytest.approx(0.29220, rel=tolerance)


# Motz problem: Δu = 0 on (−1, 1) × (0, 1); u = 0 on y = 0, x < 0; u = 500 on x = 1; insulated elsewhere. H. Motz, Q.
# Appl. Math. 4, 371 (1947) (definition). u = Σ D_i r^(i+1/2) cos((i+1/2)θ).

MOTZ = (401.162453745, 87.6559201951, 17.2379150794, -8.07121525970)
MOTZ_ENERGY = 170158.543265


def motz(first_step, growth):
    """Lengths in units of 100 µm, graded towards the singular point in the middle of the lower side."""
    x = 100 * graded_axis(-1, 1, [(0, first_step)], growth, 0.25)
    z = 100 * graded_axis(0, 1, [(0, first_step)], growth, 0.25)
    mesh = box_mesh("quad", x, z)
    cells, bottom = mesh.cells, mesh.surfaces["z_min"]
    left = bottom[cells.p[0, cells.facets[:, bottom]].mean(axis=0) < 0]
    mesh = fc.Mesh(cells, {"cold": left, "hot": mesh.surfaces["x_max"]}, mesh.volumes)
    surfaces = {"cold": BARE_METAL, "hot": junction("metal")}
    problem = fc.Problem(mesh, {"base": constant_base(D)}, surfaces, cell_area_cm2=2e-2)
    return fc.solve_excess(problem, 0.2)


@pytest.mark.parametrize(("first_step", "growth", "tolerance"), [(1e-3, 2.0, 3e-4), (1e-6, 1.4, 3e-6)])
def test_energy_of_the_motz_problem(first_step, growth, tolerance):
    """∫ |∇u|² = 500 × flux through x = 1."""
    solution = motz(first_step, growth)
    assert 500**2 * conductance(solution) == pytest.approx(MOTZ_ENERGY, rel=tolerance)
    assert solution.ledger.rows["surface", "cold"] == pytest.approx(-solution.collected_mA_per_cm2["metal"], rel=1e-10)


def test_first_coefficients_of_the_motz_problem():
    solution = motz(1e-6, 1.2)
    r = np.array([0.01, 0.03, 0.1])
    u = 500 * solution.at(np.array([100 * r, 0 * r])) / solution.excess_density_per_cm3.max()
    series = sum(c * r ** (i + 0.5) for i, c in enumerate(MOTZ))
    np.testing.assert_allclose(u, series, rtol=3e-5)


def test_l_shaped_domain():
    """(−1, 1)² without a quadrant, −Δu = 1, u = 0 all round: ∫ u = ∫ |∇u|² = 0.2140758."""
    axis = 100 * graded_axis(-1, 1, [(0, 1e-5), (-1, 0.05), (1, 0.05)], 1.25, 0.1)
    square = box_mesh("quad", axis, axis).cells
    centre = square.p[:, square.t].mean(axis=1)
    cells = square.remove_elements(np.flatnonzero((centre > 0).all(axis=0)))
    cells = type(cells)(cells.p, cells.t)
    mesh = fc.Mesh(cells, {"rim": cells.boundary_facets()}, {"base": np.arange(cells.t.shape[1])})
    light = fc.Light.uniform(1e18)
    problem = fc.Problem(mesh, {"base": constant_base(D)}, {"rim": BARE_METAL}, light=light, cell_area_cm2=1.0)
    state = solve_state(ExcessSystem(problem))
    bulk = problem.space.bulk
    total = (bulk.values(state.dn) * bulk.dx).sum() * D / 1e18 / 1e-2**4
    assert total == pytest.approx(0.2140758, rel=3e-6)


# Reciprocity: with φ = 1 on a terminal and 0 on other sinks, the collected current is Σ load φ for every generation.
# C. Donolato, Appl. Phys. Lett. 46, 270 (1985).


def random_field(rng, low, high):
    """A smooth random function of position between two values."""
    k, phase = rng.uniform(-0.1, 0.1, (6, 3)), rng.uniform(0, 6, 6)

    def function(x, y, z):
        waves = sum(np.sin(a * x + b * y + c * z + p) for (a, b, c), p in zip(k, phase, strict=True))
        return low + (high - low) * (waves + 6) / 12

    return function


def random_problem(kind, seed):
    """Random cells, τ(x), S(x), two contacts on junctions and a strip of bare metal."""
    rng = np.random.default_rng(seed)
    dimension = 2 if kind in ("triangle", "quad") else 3
    axes = [np.linspace(0, size, n + 1) for size, n in ((100, 8), (80, 6), (60, 5))[:dimension]]
    mesh = box_mesh(kind, *axes, move=lambda p: shaken(p, rng))
    cells = mesh.cells
    top = mesh.surfaces["z_max"]
    x = cells.p[0, cells.facets[:, top]].mean(axis=0) * 1e4
    named = dict(mesh.surfaces) | {"left": top[x < 29], "right": top[x > 71]}
    del named["z_max"]
    S = {name: fc.Surface(srv_cm_per_s=random_field(rng, 0, 1e4)) for name in ("x_min", "z_min")}
    surfaces = S | {"left": junction("first"), "right": junction("second"), "x_max": BARE_METAL}
    surfaces["right"] = dataclasses.replace(surfaces["right"], J0_fA_per_cm2=100.0)
    base = constant_base(D, random_field(rng, 0.3, 10))
    mesh = fc.Mesh(cells, named, mesh.volumes)
    light = fc.Light.function(random_field(rng, 0, 1e19))
    return fc.Problem(mesh, {"base": base}, surfaces, light=light, lit_surface="left", cell_area_cm2=1e-2)


def shaken(p, rng):
    """Inner points moved at random by up to a tenth of a step."""
    inner = ((p > p.min(axis=1, keepdims=True)) & (p < p.max(axis=1, keepdims=True))).all(axis=0)
    return p + inner * rng.uniform(-1e-4, 1e-4, p.shape)


@pytest.mark.parametrize("drift", [{}, {"field_V_per_cm": 3.0}, {"field_V_per_cm": -300.0}])
@pytest.mark.parametrize("kind", ["triangle", "quad", "tetra", "hexahedron"])
def test_reciprocity(kind, drift):
    """Also with drift, and with so much of it that upwinding sets in. J0 on a junction leaves through its terminal."""
    rng = np.random.default_rng(5)
    problem = random_problem(kind, 3)
    vector = [drift["field_V_per_cm"], *[1.0] * (problem.mesh.dimension - 1)] if drift else None
    system = ExcessSystem(problem, make_drift(problem, vector, None))
    assert (system.drift is not None and system.drift.needs_upwinding) == (vector is not None and vector[0] < -100)
    fields = {t: collection_field(solve_state(system), t) for t in ("first", "second", "x_max")}
    for _ in range(3):
        lit = problem.changed(light=fc.Light.function(random_field(rng, 0, 1e19)))
        state = solve_state(ExcessSystem(lit, system.drift))
        leaving = {name: rate for (_, name), rate in state.leaving().items()}
        for terminal, values in fields.items():
            assert state.system.load @ values == pytest.approx(leaving[terminal], rel=1e-10)


@pytest.mark.parametrize("kind", ["quad", "tetra"])
def test_differential_response_under_bias_light(kind):
    """Where lifetime and D depend on injection, φ = ∂I/∂G: against a small change of the generation."""
    problem = random_problem(kind, 4)
    base = fc.Base("p", doping_per_cm3=1e15, tau_n0_us=2.0, tau_p0_us=20.0)
    bright = lambda extra: problem.changed(
        volumes={"base": base},
        light=fc.Light.function(lambda x, y, z: 1e21 * (1 + x / 100) * (1 + extra * (z > 30))),
    )
    dim, states = bright(0.0), {s: solve_state(ExcessSystem(bright(s))) for s in (-1e-4, 0.0, 1e-4)}
    field = fc.collection_probability(dim, "first")
    change = (states[1e-4].system.load - states[-1e-4].system.load) @ field.values
    currents = {s: state.leaving()["terminal", "first"] for s, state in states.items()}
    assert change == pytest.approx(currents[1e-4] - currents[-1e-4], rel=1e-6)
    assert abs(change / (2e-4 * currents[0.0]) - 1) > 1e-3  # the response is not the yield


# Changes that must not change the answer


def patterned(front_center, rear_center, **changes):
    """A periodic section with a shifted finger, a shifted rear opening and half of it lit."""
    base = fc.Base("p", doping_per_cm3=1e16, thickness_um=150, tau_n0_us=50, tau_p0_us=200)
    front = fc.Face(fc.Surface(J0_fA_per_cm2=20), [fc.Strip("finger", 30, front_center, J0_fA_per_cm2=300, **METAL)])
    rear = fc.Face(fc.Surface(srv_cm_per_s=10), [fc.Strip("opening", 40, rear_center, srv_cm_per_s=1e5)])
    light = fc.Light.monochromatic(flux_per_cm2_s=1e15, absorption_per_cm=500)
    return fc.UnitCell(base, 800, front=front, rear=rear, light=light, **{"symmetry": "periodic"} | changes)


def ledger_rows(solution):
    return {name: value for (_, name), value in solution.ledger.rows.items()}


def same(first, second, renamed=lambda name: name):
    a, b = ledger_rows(first), ledger_rows(second)
    assert {renamed(name) for name in a} == set(b)
    scale = max(map(abs, a.values()))
    for name, value in a.items():
        assert value == pytest.approx(b[renamed(name)], abs=1e-10 * scale)


def solve(cell, **fineness):
    return fc.solve_excess(fc.problem(cell, **fineness))


def test_mirror_image():
    same(solve(patterned(130, -210)), solve(patterned(-130, 210)))


def doubled(mesh, axis):
    """The mesh and its mirror image across the lower end of an axis, names and all."""
    cells, i = mesh.cells, "xyz".index(axis)
    plane = cells.p[i].min()
    on = np.abs(cells.p[i] - plane) < 1e-9 * np.ptp(cells.p[i])
    image = np.where(on, np.arange(on.size), on.size + np.cumsum(~on) - 1)
    mirrored = cells.p[:, ~on].copy()
    mirrored[i] = 2 * plane - mirrored[i]
    both = type(cells)(np.hstack([cells.p, mirrored]), np.hstack([cells.t, image[cells.t]]))
    index = {tuple(c): k for k, c in enumerate(np.sort(both.facets, axis=0).T)}
    outside = set(both.boundary_facets())
    surfaces = {}
    for name, facets in mesh.surfaces.items():
        corners = cells.facets[:, facets]
        found = [index[tuple(c)] for c in np.sort(np.hstack([corners, image[corners]]), axis=0).T]
        surfaces[name] = np.unique([f for f in found if f in outside]).astype(int)
    return fc.Mesh(both, surfaces, {"base": np.arange(both.t.shape[1])})


def test_half_cell_and_whole_period():
    """Mirror planes in the half cell, periodic sides in the whole period."""
    half = fc.problem(patterned(0, 400, symmetry="half"))
    period = patterned(0, 400)
    whole = doubled(half.mesh, "x")
    named = {name: whole.surfaces[name] for name in half.surfaces}
    whole = fc.Mesh(whole.cells, named, whole.volumes)
    problem = half.changed(mesh=whole, cell=period, cell_area_cm2=period.area_cm2)
    assert problem.periodic_axes == ("x",)
    same(fc.solve_excess(half), fc.solve_excess(problem))
    assert solve(period).ledger.share("metal") == pytest.approx(fc.solve_excess(half).ledger.share("metal"), rel=1e-4)


@pytest.mark.parametrize("kind", ["triangle", "quad", "tetra", "hexahedron"])
def test_two_cells_side_by_side(kind):
    """A piece and its mirror image: the same share to every sink."""
    problem = random_problem(kind, 9)
    surfaces = {name: s for name, s in problem.surfaces.items() if name != "x_min"}  # the mirror plane
    left = problem.mesh.cells.p[0].min() * 1e4
    light = fc.Light.function(lambda x, y, z: 1e19 * (1.5 + np.sin(np.abs(x - left) / 30 + z / 50)))
    base = constant_base(D, lambda x, y, z: 1 + np.abs(x - left) / 50)
    one = problem.changed(volumes={"base": base}, light=light, surfaces=surfaces)
    z_min = dataclasses.replace(surfaces["z_min"], srv_cm_per_s=lambda x, y, z: 10 * (1 + np.abs(x - left)))
    one = one.changed(surfaces=surfaces | {"z_min": z_min})
    two = one.changed(mesh=doubled(one.mesh, "x"), cell_area_cm2=2 * one.cell_area_cm2)
    same(fc.solve_excess(one), fc.solve_excess(two))


def crossed(turned):
    """A corner contact and a line below it, lit on a rectangle; turned by 90° in plan if asked."""
    pair = lambda a, b: (b, a) if turned else (a, b)
    base = constant_base(D, 20)
    patch = fc.Rectangle("corner", *pair(40, 150), **METAL)
    line = fc.Strip("line", 60, along="x" if turned else "y", srv_cm_per_s=1e4)
    x_um, y_um = pair((0, 200), (50, 300))
    light = fc.Light.uniform(1e18, mask=fc.LitRectangle(x_um, y_um))
    faces = {"front": fc.Face(fc.Surface(), [patch]), "rear": fc.Face(fc.Surface(srv_cm_per_s=20), [line])}
    edge = {"y_max" if turned else "x_max": fc.Surface(srv_cm_per_s=500)}
    return fc.UnitCell(base, *pair(800, 600), sides=edge, light=light, **faces)


def test_rotation_in_plan():
    fineness = {"first_step_um": 1.0, "growth": 3.0}
    turned = lambda name: "y_max" if name == "x_max" else name
    same(solve(crossed(False), **fineness), solve(crossed(True), **fineness), turned)


def renumbered(mesh, rng):
    """The same mesh with points and cells in another order."""
    cells = mesh.cells
    order = rng.permutation(cells.p.shape[1])
    rank = np.argsort(order)
    cell_order = rng.permutation(cells.t.shape[1])
    new = type(cells)(cells.p[:, order], rank[cells.t][:, cell_order])
    index = {tuple(c): k for k, c in enumerate(np.sort(new.facets, axis=0).T)}
    of = lambda facets: np.array([index[tuple(c)] for c in np.sort(rank[cells.facets[:, facets]], axis=0).T])
    surfaces = {name: of(facets) for name, facets in mesh.surfaces.items()}
    return fc.Mesh(new, surfaces, {"base": np.arange(new.t.shape[1])})


@pytest.mark.parametrize("kind", ["triangle", "quad", "tetra", "hexahedron"])
def test_renumbered_nodes(kind):
    problem = random_problem(kind, 7)
    other = problem.changed(mesh=renumbered(problem.mesh, np.random.default_rng(1)))
    same(fc.solve_excess(problem), fc.solve_excess(other))


@pytest.mark.parametrize("kind", ["triangle", "quad", "tetra", "hexahedron"])
def test_length_unit_of_an_imported_mesh(kind, tmp_path):
    """The same box written in µm, mm and m."""
    problem = random_problem(kind, 8)
    solutions = []
    for unit, per_cm in {"um": 1e4, "mm": 10.0, "m": 0.01}.items():
        path = tmp_path / f"{unit}.msh"
        write(path, problem.mesh, per_cm)
        solutions.append(fc.solve_excess(problem.changed(mesh=fc.read_mesh(path, length_unit=unit))))
    for solution in solutions:
        same(fc.solve_excess(problem), solution)


def write(path, mesh, per_cm):
    """The mesh with its names in the format of Gmsh, by meshio."""
    import meshio

    d, facet_kind = mesh.dimension, {"triangle": "line", "quad": "line", "tetra": "triangle", "hexahedron": "quad"}
    p = mesh.cells.p.T * per_cm
    points = p if d == 3 else np.insert(p, 1, 0.0, axis=1)
    cell_nodes = mesh.cells.t[[7, 4, 1, 5, 6, 2, 0, 3] if mesh.kind == "hexahedron" else slice(None)].T
    names = [*mesh.surfaces, "base"]
    parts = [around(mesh.cells.facets[:, f], mesh.cells.p).T for f in mesh.surfaces.values()] + [cell_nodes]
    blocks = [(facet_kind[mesh.kind], part) for part in parts[:-1]] + [(mesh.kind, parts[-1])]
    tags = [np.full(len(part), i + 1) for i, part in enumerate(parts)]
    fields = {name: np.array([i + 1, d - (name != "base")]) for i, name in enumerate(names)}
    data = {"gmsh:physical": tags, "gmsh:geometrical": tags}
    meshio.gmsh.write(path, meshio.Mesh(points, blocks, cell_data=data, field_data=fields), "2.2", binary=False)


def around(facets, p):
    """Corners of quadrilateral facets in order around them."""
    if len(facets) < 4:
        return facets
    middle = p[:, facets].mean(axis=1, keepdims=True)
    a, b, c, e = (p[:, f] - middle[:, 0] for f in facets)
    opposite = [np.linalg.norm(a + v, axis=0) for v in (b, c, e)]
    turned = facets.copy()
    for k in range(3):
        which = np.argmin(opposite, axis=0) == k
        others = [1 + j for j in range(3) if j != k]
        turned[:, which] = facets[[0, others[0], 1 + k, others[1]]][:, which]
    return turned


def test_dark_voltage_of_the_tests_is_low_injection():
    """The voltages above pin Δn = n0 (exp(V/V_T) − 1) to better than the tolerances used."""
    eq = constant_base(D).equilibrium()
    assert eq.n0 * math.expm1(0.2 / VT) < 1e-6 * eq.p0
