"""Linear equations: every way of solving gives the same, checks its residual, and refuses what cannot be solved."""

from __future__ import annotations

import numpy as np
import pytest
from simple_cells import BARE_METAL, box_mesh, constant_base, junction

import fem_carriers as fc
from fem_carriers.errors import SolverError
from fem_carriers.transport import linear, memory, pardiso, solver
from fem_carriers.transport.bipolar import BipolarSystem
from fem_carriers.transport.excess import ExcessSystem
from fem_carriers.transport.krylov import conjugate_gradients, gmres, solve_krylov
from fem_carriers.transport.linear import Factorization, Scaled
from fem_carriers.transport.memory import check_memory, factor_bytes
from fem_carriers.transport.solver import LinearSolver, is_symmetric, one_carrier_solver
from fem_carriers.transport.spaces import Space
from fem_carriers.transport.steady import solve_state
from fem_carriers.transport.two_level import TwoLevel, are_compact, corner_interpolation, linear_part
from fem_carriers.transport.walk import Walker


def cube(kind="tetra", steps=6, height_um=60.0, order=2):
    axes = [np.linspace(0, 60, steps + 1)] * 2 + [np.linspace(0, height_um, steps + 1)]
    return Space(box_mesh(kind, *axes), order)


def diffusion(space, carried=0.0, reaction=1e4):
    """∫ ∇u·∇v + u carried·∇v + reaction u v, free everywhere."""
    shape = space.bulk.dx.shape
    vector = None if carried == 0 else np.full((space.mesh.dimension, *shape), float(carried))
    return space.bulk.matrix(np.ones(shape), vector, np.full(shape, reaction))


def identity(space):
    from scipy.sparse import identity

    return identity(space.size, format="csr")


def two_level_solver(space):
    return LinearSolver(lambda: [(np.arange(space.size), linear_part(space, identity(space)))], compact=True)


@pytest.fixture
def two_level_always(monkeypatch):
    monkeypatch.setattr(solver, "TWO_LEVEL_ABOVE", 0)


def dense_solution(matrix, right):
    """The independent answer: LAPACK."""
    return np.linalg.solve(matrix.toarray(), right)


# Krylov methods


@pytest.mark.parametrize("symmetric", [True, False])
def test_krylov_methods_against_lapack(symmetric):
    rng = np.random.default_rng(1)
    A = rng.normal(size=(60, 60))
    A = A @ A.T + 60 * np.eye(60) if symmetric else A + 20 * np.eye(60)
    b = rng.normal(size=60)
    x, steps = (conjugate_gradients if symmetric else gmres)(A, b, lambda v: v / 60, 1e-12, 60)
    assert 0 < steps < 60
    assert np.abs(x - np.linalg.solve(A, b)).max() <= 1e-10 * np.abs(x).max()


def test_krylov_tells_when_it_has_not_converged():
    A = np.diag(np.logspace(0, 8, 200))
    x, steps = solve_krylov(A, np.ones(200), lambda v: v, symmetric=True, tolerance=1e-12, limit=20)
    assert x is None
    assert steps == 20


def test_rough_preconditioner_is_refined_to_the_true_residual():
    """A preconditioner rounded to single precision does not limit the accuracy of the solution."""
    space = cube(steps=3)
    A = Scaled(diffusion(space)).matrix
    inverse = np.linalg.inv(A.toarray()).astype(np.float32)
    b = np.random.default_rng(2).normal(size=space.size)
    for symmetric in (True, False):
        rough = lambda v: (inverse @ v.astype(np.float32)).astype(float)
        x, steps = solve_krylov(A, b, rough, symmetric=symmetric, tolerance=1e-13, limit=20)
        assert steps <= 5
        assert np.linalg.norm(b - A @ x) <= 1e-13 * np.linalg.norm(b)


# The two-level method


@pytest.mark.parametrize("kind", ["tetra", "hexahedron", "triangle", "quad"])
def test_linear_functions_are_prolonged_exactly(kind):
    axes = [np.array([0, 3, 10.0]), np.array([0, 4, 6, 9.0]), np.array([0, 2, 7.0])]
    for order in (1, 2):
        space = Space(box_mesh(kind, *(axes if kind in ("tetra", "hexahedron") else axes[:2])), order)
        coefficients = np.arange(1, space.mesh.dimension + 1)
        at_corners = 3 + coefficients @ space.mesh.cells.p
        found = corner_interpolation(space) @ at_corners[: corner_interpolation(space).shape[1]]
        assert np.abs(found - (3 + coefficients @ space.points_cm)).max() <= 1e-14


@pytest.mark.parametrize("kind", ["tetra", "hexahedron"])
def test_iterations_hardly_grow_with_refinement(kind):
    counts = []
    for steps in (4, 8, 12):
        space = cube(kind, steps)
        scaled = Scaled(diffusion(space))
        coarse = linear_part(space, identity(space)).multiply(1 / scaled.columns[:, None]).tocsr()
        b = np.random.default_rng(3).normal(size=space.size)
        cycle = TwoLevel(scaled.matrix, coarse)
        counts.append(solve_krylov(scaled.matrix, b, cycle, symmetric=True, tolerance=1e-10, limit=100)[1])
    assert counts[-1] <= 1.5 * counts[0]
    assert counts[-1] <= 30


def test_cycle_is_symmetric():
    """vᵀB w = wᵀB v, which conjugate gradients rely on."""
    space = cube(steps=6)
    scaled = Scaled(diffusion(space))
    cycle = TwoLevel(scaled.matrix, linear_part(space, identity(space)))
    v, w = np.random.default_rng(4).normal(size=(2, space.size))
    assert v @ cycle(w) == pytest.approx(w @ cycle(v), rel=1e-11)


@pytest.mark.parametrize("kind", ["tetra", "hexahedron"])
def test_stretched_cells_are_recognised(kind):
    assert are_compact(cube(kind, 3))
    assert are_compact(cube(kind, 3, height_um=30.0))
    assert not are_compact(cube(kind, 3, height_um=5.0))


# Every way gives the same


@pytest.mark.parametrize("carried", [0.0, 50.0])
@pytest.mark.parametrize("kind", ["tetra", "hexahedron"])
def test_two_levels(kind, carried, two_level_always):
    space = cube(kind, 4)
    A, b = diffusion(space, carried), np.random.default_rng(5).normal(size=space.size)
    assert is_symmetric(A) == (carried == 0)
    ways = two_level_solver(space)
    x = ways.prepare(A).solve(b, 1e-12)
    assert ways.factorisations == 0
    assert ways.iterations > 0
    expected = dense_solution(A, b)
    assert np.abs(x - expected).max() <= 1e-9 * np.abs(expected).max()


@pytest.mark.parametrize("carried", [0.0, 50.0])
def test_factors_in_single_precision(carried, monkeypatch):
    monkeypatch.setattr(solver, "SINGLE_ABOVE", 0)
    space = cube(steps=4)
    A, b = diffusion(space, carried), np.random.default_rng(6).normal(size=space.size)
    ways = LinearSolver()
    x = ways.prepare(A).solve(b, 1e-12)
    assert ways.factorisations == 1
    assert not ways.kept.exact
    expected = dense_solution(A, b)
    assert np.abs(x - expected).max() <= 1e-9 * np.abs(expected).max()


def test_indefinite_equations_fall_back_to_lu(monkeypatch):
    """A negative reaction makes the matrix symmetric but indefinite: no Cholesky factors, yet a solution."""
    space = cube(steps=3)
    A, b = diffusion(space, reaction=-3e5), np.random.default_rng(7).normal(size=space.size)
    assert np.linalg.eigvalsh(A.toarray())[0] < 0
    expected = dense_solution(A, b)
    for above in (0, 10**6):
        monkeypatch.setattr(solver, "SINGLE_ABOVE", above)
        x = LinearSolver().prepare(A).solve(b, 1e-12)
        assert np.abs(x - expected).max() <= 1e-8 * np.abs(expected).max()


def test_stretched_cells_end_with_factors(two_level_always):
    """Tried on cells where relaxation fails, the method gives way to factors, and is not tried again."""
    space = cube(steps=6, height_um=0.3)
    A, b = diffusion(space), np.random.default_rng(8).normal(size=space.size)
    ways = two_level_solver(space)
    x = ways.prepare(A).solve(b)
    assert ways.factorisations == 1
    assert not ways.compact
    assert np.abs(x - dense_solution(A, b)).max() <= 1e-8 * np.abs(x).max()


# Kept factors


def test_factors_serve_for_nearby_matrices():
    space = cube(steps=8)
    b = np.random.default_rng(9).normal(size=space.size)
    ways = LinearSolver()
    for step, reaction in enumerate([1e4, 1.3e4, 2e4]):
        A = diffusion(space, 10.0 * step, reaction)
        x = ways.prepare(A).solve(b, 1e-11)
        assert np.linalg.norm(b - A @ x) <= 1e-9 * np.linalg.norm(b)
    assert ways.factorisations == 1
    assert 0 < ways.iterations <= 24


def test_factors_are_renewed_when_they_no_longer_serve():
    space = cube(steps=8)
    rng = np.random.default_rng(10)
    b, ways = rng.normal(size=space.size), LinearSolver()
    ways.prepare(diffusion(space)).solve(b)
    rough = space.bulk.matrix(
        np.exp(rng.normal(scale=4, size=space.bulk.dx.shape)), None, 1e6 * np.ones(space.bulk.dx.shape)
    )
    x = ways.prepare(rough).solve(b, 1e-11)
    assert ways.factorisations == 2
    assert np.linalg.norm(b - rough @ x) <= 1e-8 * np.linalg.norm(b)


def test_cheap_factors_are_not_kept():
    space = Space(box_mesh("quad", np.linspace(0, 50, 20), np.linspace(0, 50, 20)), 2)
    b, ways = np.ones(space.size), LinearSolver()
    ways.prepare(diffusion(space)).solve(b)
    ways.prepare(diffusion(space, reaction=2e4)).solve(b)
    assert ways.factorisations == 2
    assert ways.iterations == 0


# Refusals


@pytest.mark.parametrize("way", ["factors", "single precision", "two levels", "two carriers"])
def test_singular_equations_are_refused(way, monkeypatch):
    """Diffusion without a sink, and a source: no solution."""
    space = cube(steps=4)
    A = diffusion(space, reaction=0.0)
    if way == "single precision":
        monkeypatch.setattr(solver, "SINGLE_ABOVE", 0)
    if way == "two levels":
        monkeypatch.setattr(solver, "TWO_LEVEL_ABOVE", 0)
    ways = two_level_solver(space) if way == "two levels" else LinearSolver(two_carriers=way == "two carriers")
    with pytest.raises(SolverError, match="singular"):
        ways.prepare(A).solve(np.ones(space.size))


def test_superlu_stands_in_for_pardiso(monkeypatch):
    def missing():
        raise ImportError("no MKL")

    monkeypatch.setattr(pardiso, "_library", missing)
    space = cube(steps=3)
    A, b = diffusion(space, 50.0), np.ones(space.size)
    for above in (0, 10**6):
        monkeypatch.setattr(solver, "SINGLE_ABOVE", above)
        x = LinearSolver().prepare(A).solve(b, 1e-12)
        assert np.abs(x - dense_solution(A, b)).max() <= 1e-10 * np.abs(x).max()


# Memory


def test_available_memory_is_plausible():
    assert 1e7 < memory.available_bytes() < 1e14


def test_memory_of_a_container(tmp_path, monkeypatch):
    for name, text in {
        "memory.max": "1000000",
        "memory.current": "400000",
        "memory.stat": "anon 5\ninactive_file 7\n",
    }.items():
        (tmp_path / name).write_text(text)
    monkeypatch.setattr(memory, "CONTROL_GROUPS", ((str(tmp_path), "memory.max", "memory.current"),))
    assert memory.available_bytes() == 600_007
    (tmp_path / "memory.max").write_text("max")
    assert memory.available_bytes() > 1e7


def test_refusal_tells_what_is_needed_and_what_to_try(monkeypatch):
    monkeypatch.setattr(memory, "available_bytes", lambda: 2e9)
    check_memory(1.7e9, "a test")
    with pytest.raises(SolverError, match=r"a test: 3 GB; allowed is 1\.8 GB.*Try a larger first_step_um") as refusal:
        check_memory(3e9, "a test")
    assert refusal.value.outcome == "not enough memory"


def test_factors_that_do_not_fit_are_refused_before_they_are_computed(monkeypatch):
    monkeypatch.setattr(memory, "available_bytes", lambda: 1e6)
    with pytest.raises(SolverError, match="not enough memory"):
        Factorization(diffusion(cube(steps=6)))


def test_iteration_takes_over_where_factors_do_not_fit(monkeypatch, two_level_always):
    monkeypatch.setattr(memory, "available_bytes", lambda: 1e6)
    space = cube(steps=5, height_um=12.0)
    A, b = diffusion(space), np.ones(space.size)
    ways = two_level_solver(space)
    ways.compact = False
    x = ways.prepare(A).solve(b)
    assert ways.iterations > 0
    assert ways.factorisations == 0
    assert np.abs(x - dense_solution(A, b)).max() <= 1e-7 * np.abs(x).max()


@pytest.mark.parametrize("two_carriers", [False, True])
@pytest.mark.parametrize("kind", ["tetra", "hexahedron"])
def test_forecast_against_the_analysis(kind, two_carriers):
    """The fit against what Pardiso reports before it factorises, to a third."""
    from scipy.sparse import bmat

    pytest.importorskip("pypardiso")
    A = diffusion(cube(kind, 10))
    if two_carriers:
        A = bmat([[A, -A], [A, 2 * A]]).tocsr()
    with Factorization(Scaled(A, equilibrate=True)) as factors:
        assert 8 * factors._solver.entries == pytest.approx(
            factor_bytes(A.shape[0], two_carriers=two_carriers), rel=0.33
        )


@pytest.mark.parametrize("form", ["excess", "bipolar"])
def test_forecast_refuses_before_the_start(form, monkeypatch):
    """Nothing is assembled: the mesh and a fit say enough."""
    problem = excess_problem()
    monkeypatch.setattr(memory, "available_bytes", lambda: 1e6)
    with pytest.raises(SolverError, match=r"Needed for .* nodes") as refusal:
        solve_state(ExcessSystem(problem)) if form == "excess" else Walker(BipolarSystem(bipolar_problem()))
    assert refusal.value.outcome == "not enough memory"
    assert "pattern" not in problem.space.bulk.__dict__


# The transport equations


def excess_problem():
    mesh = box_mesh("tetra", *[np.linspace(0, 60, 9)] * 2, np.linspace(0, 40, 6))
    base = fc.Base("p", doping_per_cm3=1e15, tau_n0_us=2, tau_p0_us=5)
    surfaces = {"z_max": junction("plus"), "z_min": fc.Surface(srv_cm_per_s=1e4), "x_min": BARE_METAL}
    return fc.Problem(mesh, {"base": base}, surfaces, light=fc.Light.uniform(1e20), cell_area_cm2=3.6e-5)


def bipolar_problem(kind="hexahedron"):
    mesh = box_mesh(kind, np.linspace(0, 100, 7), np.linspace(0, 60, 6), np.linspace(0, 60, 7))
    emitter = fc.Surface(J0_fA_per_cm2=50, layer=fc.DopedLayer("n", 100))
    metal = fc.Surface(J0_fA_per_cm2=500, layer=fc.DopedLayer("n", 100), contact=fc.Contact("front", 1))
    rear = fc.Surface(J0_fA_per_cm2=100, contact=fc.Contact("rear", 1))
    return fc.Problem(
        mesh, {"base": constant_base(lifetime_us=50)}, {"z_max": emitter, "x_min": metal, "z_min": rear},
        light=fc.Light.uniform(5e18), cell_area_cm2=6e-5,
    )  # fmt: skip


@pytest.mark.parametrize("way", ["TWO_LEVEL_ABOVE", "SINGLE_ABOVE"])
def test_excess_density_does_not_depend_on_the_way(way, monkeypatch):
    system = ExcessSystem(excess_problem())
    expected = solve_state(system).dn
    monkeypatch.setattr(solver, way, 0)
    found = solve_state(system)
    assert np.abs(found.dn - expected).max() <= 1e-9 * np.abs(expected).max()
    assert found.outcome.residual <= 1e-11


def test_bipolar_curve_keeps_its_factors(monkeypatch):
    """Several voltages on a three-dimensional mesh: fewer factorisations than steps, and the same currents."""
    problem = bipolar_problem()
    voltages = [{"front": 0.0, "rear": v} for v in (0.55, 0.5, 0.4, 0.2, 0.0)]

    def currents(many_entries):
        monkeypatch.setattr(linear, "MANY_ENTRIES", many_entries)
        walker = Walker(BipolarSystem(problem))
        found = [walker.at(v).terminal_currents["rear"] for v in voltages]
        return np.array(found), walker.solver.factorisations, sum(s.outcome.steps for s in walker.states)

    fresh, many, _ = currents(1e9)
    kept, few, steps = currents(0)
    assert few < 0.5 * min(many, steps)
    assert np.abs(kept - fresh).max() <= 1e-9 * np.abs(fresh).max()


def test_bipolar_form_by_two_levels(two_level_always):
    """Block by block, at forward bias and at short circuit: the same currents as by factors, none computed."""
    problem = bipolar_problem("tetra")
    voltages = [{"front": 0.0, "rear": v} for v in (0.55, 0.3, 0.0)]
    walker = Walker(BipolarSystem(problem))
    found = [walker.at(v).terminal_currents["rear"] for v in voltages]
    assert walker.solver.compact
    assert walker.solver.factorisations == 0
    assert walker.solver.iterations <= 25 * walker.solver.solutions
    other = Walker(BipolarSystem(problem))
    other.solver.compact = False
    expected = [other.at(v).terminal_currents["rear"] for v in voltages]
    assert other.solver.factorisations > 0
    assert np.abs(np.subtract(found, expected)).max() <= 1e-9 * np.abs(expected).max()


def test_factors_serve_for_a_neighbouring_problem(monkeypatch):
    """A sweep over the lifetime on one mesh: the second problem needs no factors of its own."""
    from dataclasses import replace

    monkeypatch.setattr(linear, "MANY_ENTRIES", 0)
    problem = bipolar_problem()
    changed = replace(problem, volumes={"base": constant_base(lifetime_us=40)})
    voltages = {"front": 0.0, "rear": 0.4}
    first = Walker(BipolarSystem(problem))
    first.at(voltages)
    before = first.solver.factorisations
    second = Walker(BipolarSystem(changed), shared=first.solver)
    found = second.at(voltages).terminal_currents["rear"]
    assert first.solver.factorisations - before <= 1
    expected = Walker(BipolarSystem(changed)).at(voltages).terminal_currents["rear"]
    assert found == pytest.approx(expected, rel=1e-9)


def test_solutions_do_not_keep_factors():
    import weakref

    walker = Walker(BipolarSystem(bipolar_problem()))
    state = walker.at({"front": 0.0, "rear": 0.3})
    kept = weakref.ref(walker.solver)
    del walker
    assert kept() is None
    assert state.slopes["rear"] != 0


def test_solver_of_a_space_follows_its_cells(two_level_always):
    for space, compact in ((cube(steps=3), True), (cube(steps=3, height_um=1.0), False)):
        chosen = one_carrier_solver(space, identity(space))
        assert chosen.compact == compact
        assert chosen.linear_parts is not None
    flat = Space(box_mesh("quad", np.linspace(0, 50, 5), np.linspace(0, 50, 5)), 2)
    assert one_carrier_solver(flat, identity(flat)).linear_parts is None
