"""The discrete equations of the excess-carrier form: derivatives, assembly, balance, ties, refusals, upwinding."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from simple_cells import BARE_METAL, box_mesh, constant_base, junction

import fem_carriers as fc
from fem_carriers.analysis.ledger import make_ledger
from fem_carriers.errors import InputError, ModelWarning, SolverError
from fem_carriers.transport.bulk import AffineBulk, MappedBulk, StockBulk
from fem_carriers.transport.drift import make_drift
from fem_carriers.transport.excess import ExcessSystem
from fem_carriers.transport.spaces import Space
from fem_carriers.transport.steady import constrain, solve_state

KINDS = ["triangle", "quad", "tetra", "hexahedron"]
AXES = [np.array([0, 10, 25, 45.0]), np.array([0, 12, 30.0]), np.array([0, 4, 12, 20.0])]


def mesh_of(kind, move=None):
    return box_mesh(kind, *(AXES if kind in ("tetra", "hexahedron") else AXES[::2]), move=move)


def problem_on(mesh, base=None, surfaces=None, order=2, **more):
    light = fc.Light.function(lambda x, y, z: 1e20 * (1 + 0.5 * np.sin(x / 7 + z / 5)))
    surfaces = {"z_min": fc.Surface(srv_cm_per_s=500)} if surfaces is None else surfaces
    given = {"light": light, "cell_area_cm2": 1e-3, "order": order} | more
    return fc.Problem(mesh, {"base": constant_base(lifetime_us=5) if base is None else base}, surfaces, **given)


def sheared(seed):
    """A random invertible affine map of the points."""
    rng = np.random.default_rng(seed)
    return lambda p: (np.eye(len(p)) + rng.uniform(-0.3, 0.3, (len(p), len(p)))) @ p + 0.02


def bent(p):
    """No cell stays a parallelogram."""
    x = p / p.max(axis=1, keepdims=True)
    return p + 5e-5 * np.array([np.sin(3 * x[-1] + x[0]), *[0 * x[0]] * (len(p) - 2), np.sin(4 * x[0] * x[-1])])


# The Jacobian is the derivative of the residual


SILICON = fc.Base("p", doping_per_cm3=1e15, tau_n0_us=3, tau_p0_us=30)
LAWS = {
    "diffusion": {"base": constant_base()},
    "ambipolar diffusion": {
        "base": dataclasses.replace(SILICON, auger=None, radiative_cm3_per_s=0, tau_n0_us=math.inf)
    },
    "lifetime": {"base": constant_base(lifetime_us=lambda x, y, z: 1 + x / 50)},
    "SRH": {"base": dataclasses.replace(SILICON, auger=None, radiative_cm3_per_s=0)},
    "Auger": {"base": constant_base(auger="silicon")},
    "Auger of constants": {"base": constant_base(auger=(1e-25, 3e-25))},
    "radiative": {"base": constant_base(radiative_cm3_per_s=1e-10)},
    "srv": {"surfaces": {"z_min": fc.Surface(srv_cm_per_s=lambda x, y, z: 10 * (1 + x))}},
    "J0": {"surfaces": {"z_min": fc.Surface(J0_fA_per_cm2=1e4), "x_max": fc.Surface(J02_nA_per_cm2=1e3)}},
    "all": {
        "base": SILICON,
        "surfaces": {"z_min": fc.Surface(J0_fA_per_cm2=1e4, J02_nA_per_cm2=1e3), "x_min": fc.Surface(srv_cm_per_s=1e3)},
    },
}  # fmt: skip
DRIFTS = {
    "none": {},
    "field": {"field_V_per_cm": 5.0},
    "upwinded field": {"field_V_per_cm": 500.0},
    "current": {"current_mA_per_cm2": 1e3},
    "upwinded current": {"current_mA_per_cm2": 3e6},
}


def drift_on(problem, drift):
    vector = lambda strength: [strength, *[-0.3 * strength] * (problem.mesh.dimension - 1)]
    given = {"field_V_per_cm": None, "current_mA_per_cm2": None} | {name: vector(v) for name, v in drift.items()}
    return make_drift(problem, **given)


def check_jacobian(system, spread=None, offset=0.0, seed=1):
    """Along a random direction, against the complex step."""
    rng = np.random.default_rng(seed)
    spread = np.eye(system.space.size) if spread is None else spread.toarray()
    y, direction = 1e15 * rng.uniform(0.1, 2, spread.shape[1]), 1e15 * rng.normal(size=spread.shape[1])
    step = 1e-30
    complex_step = spread.T @ system.residual(spread @ (y + 1j * step * direction) + offset).imag / step
    exact = spread.T @ (system.jacobian(spread @ y + offset) @ (spread @ direction))
    assert np.abs(exact - complex_step).max() <= 1e-12 * np.abs(exact).max()


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("law", LAWS)
def test_jacobian_of_every_law(law, kind):
    check_jacobian(ExcessSystem(problem_on(mesh_of(kind), **LAWS[law])))


@pytest.mark.parametrize("order", [1, 2])
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("drift", DRIFTS)
def test_jacobian_with_drift(drift, kind, order):
    problem = problem_on(mesh_of(kind, sheared(3)), SILICON, order=order)
    system = ExcessSystem(problem, drift_on(problem, DRIFTS[drift]))
    assert (system.drift is not None and system.drift.needs_upwinding) == ("upwinded" in drift)
    check_jacobian(system)


@pytest.mark.parametrize("kind", ["quad", "hexahedron"])
def test_jacobian_on_bent_cells(kind):
    problem = problem_on(mesh_of(kind, bent), **LAWS["all"])
    assert isinstance(problem.space.bulk, MappedBulk)
    check_jacobian(ExcessSystem(problem, drift_on(problem, DRIFTS["upwinded current"])))


@pytest.mark.parametrize("pitch_y_um", [None, 60.0])
def test_jacobian_with_floating_layers_and_periodic_sides(pitch_y_um):
    front = fc.Face(
        fc.Surface(), [fc.Strip("contacted", 20, 30, layer=fc.DopedLayer("n", 80), contact=fc.Contact("t"))]
    )
    rear = fc.Face(fc.Surface(J0_fA_per_cm2=100), [fc.Strip("floating", 30, -20, layer=fc.DopedLayer("n", 80))])
    base = dataclasses.replace(SILICON, thickness_um=40)
    cell = fc.UnitCell(base, 120, pitch_y_um, front=front, rear=rear, symmetry="periodic", light=fc.Light.uniform(1e19))
    problem = fc.problem(cell, first_step_um=5, growth=3)
    constraints = constrain(problem, 0.3)
    assert constraints.spread.shape[1] < problem.space.size - constraints.fixed.sum()
    check_jacobian(ExcessSystem(problem), constraints.spread, constraints.values)


# The fast assembly equals the stock one


@pytest.mark.parametrize("order", [1, 2])
@pytest.mark.parametrize("move", [None, sheared(7)], ids=["parallel to the axes", "sheared"])
@pytest.mark.parametrize("kind", KINDS)
def test_fast_assembly_equals_stock_assembly(kind, move, order):
    space = Space(mesh_of(kind, move), order)
    fast, stock = (make(space.numbering, 2 * order + 2) for make in (AffineBulk, StockBulk))
    assert isinstance(space.bulk, AffineBulk)
    rng = np.random.default_rng(2)
    scalar = lambda: rng.uniform(0.5, 2, fast.dx.shape)
    vector = lambda: rng.normal(size=fast.x_cm.shape)
    u, parts = rng.normal(size=space.size), {"carried": vector(), "slope": scalar(), "along": vector()}

    def same(a, b):
        assert np.abs(a - b).max() <= 1e-13 * np.abs(b).max()

    same(fast.x_cm, stock.x_cm)
    same(fast.dx, stock.dx)
    same(fast.values(u), stock.values(u))
    same(fast.gradients(u), stock.gradients(u))
    flux, rate = vector(), scalar()
    same(fast.load(flux, rate), stock.load(flux, rate))
    same(fast.load(flux * 1j, rate), stock.load(flux * 1j, rate))
    for names in ((), ("carried",), ("slope",), ("along",), ("carried", "slope", "along")):
        given = {name: parts[name] for name in names}
        D = scalar()
        same(fast.matrix(D, **given).toarray(), stock.matrix(D, **given).toarray())


# The balance closes


def random_cell(seed):
    """Any type, doping, lifetime, layers, metal and light, in two or three dimensions."""
    rng = np.random.default_rng(seed)
    log = lambda low, high: float(10 ** rng.uniform(low, high))
    kind = rng.choice(["p", "n"])
    base = fc.Base(
        kind, doping_per_cm3=log(14, 17), thickness_um=log(1.5, 2.5), tau_n0_us=log(-1, 4), tau_p0_us=log(-1, 4)
    )
    opposite = fc.DopedLayer("n" if kind == "p" else "p", 100)
    pitch = log(2, 3)
    width = pitch * rng.uniform(0.05, 0.4)
    finger = fc.Strip("finger", width, J0_fA_per_cm2=log(0, 3), layer=opposite, contact=fc.Contact("front"))
    rear = [
        fc.Strip("local", pitch * rng.uniform(0.1, 0.3), pitch / 2, srv_cm_per_s=log(1, 7)),
        fc.Strip("floating", pitch * rng.uniform(0.1, 0.3), J0_fA_per_cm2=log(0, 2), layer=opposite),
    ]
    light = fc.Light.monochromatic(flux_per_cm2_s=log(14, 18), absorption_per_cm=log(0, 5))
    return fc.UnitCell(
        base, pitch, None if seed % 3 else pitch / 2, front=fc.Face(fc.Surface(J0_fA_per_cm2=log(-1, 3)), [finger]),
        rear=fc.Face(fc.Surface(srv_cm_per_s=log(-1, 4)), rear), light=light,
        symmetry=str(rng.choice(["half", "periodic"])),
    )  # fmt: skip


@pytest.mark.filterwarnings("ignore::fem_carriers.ModelWarning")
@pytest.mark.parametrize("seed", range(8))
def test_ledger_closes_in_random_cells(seed):
    cell = random_cell(seed)
    problem = fc.problem(cell, **({"growth": 3.0} if cell.dimension == 3 else {}))
    for voltage in (0.0, 0.5):
        solution = fc.solve_excess(problem, voltage)
        assert abs(solution.ledger.relative_residual) <= 1e-10
    assert "front.finger" in solution.ledger.table.loc["surface"].index


@pytest.mark.filterwarnings("ignore::fem_carriers.ModelWarning")
@pytest.mark.parametrize("voltage_V", [0.6, 0.65, 0.7])
def test_high_injection_beside_a_depleted_region(voltage_V):
    """Δn falls from 1e16 within a few µm on a coarse mesh and undershoots zero, where SRH recombination has a pole."""
    base = fc.Base("p", doping_per_cm3=1.6e14, thickness_um=265, tau_n0_us=0.15, tau_p0_us=0.27)
    front = fc.Face(fc.Surface(), [fc.Strip("f", 30, layer=fc.DopedLayer("n", 100), contact=fc.Contact("t"))])
    solution = fc.solve_excess(fc.problem(fc.UnitCell(base, 134, front=front)), voltage_V)
    assert solution.outcome.steps <= 15
    assert abs(solution.ledger.relative_residual) <= 1e-10


@pytest.mark.parametrize("lifetime_us", [1e2, 1e4, 1e6, 1e8, math.inf])
@pytest.mark.parametrize("voltage_V", [0.05, 0.5])
def test_dark_current_of_a_nearly_uniform_density(lifetime_us, voltage_V):
    """With W ≪ L the junction injects q W Δn/τ, tiny against the fluxes between neighbouring nodes."""
    front = fc.Face(fc.Surface(), [fc.Strip("f", 30, layer=fc.DopedLayer("n", 100), contact=fc.Contact("t"))])
    problem = fc.problem(fc.UnitCell(constant_base(30, lifetime_us), 800, front=front))
    solution = fc.solve_excess(problem, voltage_V)
    assert abs(solution.ledger.relative_residual) <= 1e-10
    dn = solution.excess_density_per_cm3.max()
    expected = 1.602176634e-19 * dn * 180e-4 / (lifetime_us * 1e-6) * 1e3
    tolerance = (900e-4) ** 2 / (30 * lifetime_us * 1e-6)  # (distance/L)²
    assert -solution.collected_mA_per_cm2["t"] == pytest.approx(expected, rel=tolerance, abs=0)


@pytest.mark.parametrize("lifetime_us", [1e3, 1e5, 1e7])
def test_uniform_light_without_a_collector(lifetime_us):
    """Δn = G τ everywhere."""
    cell = fc.UnitCell(
        constant_base(30, lifetime_us),
        800,
        light=fc.Light.uniform(1e12),
        rear=fc.Face(fc.Surface(), [fc.Strip("x", 5, J0_fA_per_cm2=0.0)]),
    )
    solution = fc.solve_excess(fc.problem(cell))
    np.testing.assert_allclose(solution.excess_density_per_cm3, 1e12 * lifetime_us * 1e-6, rtol=1e-10)


# Floating layers


@pytest.mark.parametrize("kind", KINDS)
def test_floating_layer_conserves_carriers(kind):
    """One density all over the layer; what flows into it flows out elsewhere."""
    problem = problem_on(mesh_of(kind), surfaces={"z_max": junction(None), "z_min": fc.Surface(srv_cm_per_s=1e4)})
    state = solve_state(ExcessSystem(problem))
    on = problem.space.facet_dofs(problem.mesh.surfaces["z_max"])
    assert np.ptp(state.dn[on]) == 0
    assert state.dn[on][0] > 0
    through = state.residual[on]
    assert np.abs(through).max() > 1e-3 * state.system.load.sum() / on.size
    assert abs(through.sum()) < 1e-10 * state.system.load.sum()
    assert abs(make_ledger(state).relative_residual) < 1e-10
    assert not any(kind == "terminal" for kind, _ in make_ledger(state).rows)


def test_floating_layer_that_touches_bare_metal():
    """The metal shorts it: Δn = 0 on all of it, and what arrives there is in the ledger."""
    problem = problem_on(mesh_of("quad"), surfaces={"z_max": junction(None), "x_min": BARE_METAL})
    state = solve_state(ExcessSystem(problem))
    assert (state.dn[problem.space.facet_dofs(problem.mesh.surfaces["z_max"])] == 0).all()
    ledger = make_ledger(state)
    assert ledger.share("z_max") > 0.3
    assert abs(ledger.relative_residual) < 1e-10


def test_floating_layer_moves_carriers_to_where_they_recombine():
    """Light on one half only; a layer that floats carries the carriers to the other half, where the sink is."""
    sink = fc.Strip("sink", 100, 400, srv_cm_per_s=1e6)
    light = fc.Light.uniform(1e18, mask=fc.LitRectangle((0, 100)))
    base = constant_base(30, 5, thickness_um=50)
    make = lambda front: fc.UnitCell(base, 800, front=front, rear=fc.Face(fc.Surface(), [sink]), light=light)
    share = {name: fc.solve_excess(fc.problem(make(s))).ledger.share("rear.sink") for name, s in
             {"none": fc.Surface(), "layer": junction(None)}.items()}  # fmt: skip
    assert share["layer"] > 3 * share["none"]


# Refusals


def refused(match, error=InputError):
    return pytest.raises(error, match=match)


def test_no_sink():
    base = constant_base(thickness_um=20)
    with refused("Nothing recombines", SolverError) as caught:
        fc.solve_excess(fc.problem(fc.UnitCell(base, 100, light=fc.Light.uniform(1e18))))
    assert caught.value.outcome == "no sink for carriers"


def test_unknown_names():
    mesh = mesh_of("quad")
    with refused("surface 'z_mim'.*Try: 'z_min'"):
        problem_on(mesh, surfaces={"z_mim": BARE_METAL})
    with refused("no Base for the volume 'base'.*|volume 'bulk'"):
        fc.Problem(mesh, {"bulk": constant_base()}, {}, cell_area_cm2=1)
    problem = problem_on(mesh, surfaces={"z_max": junction("t")})
    with refused("voltage_V of 'u'.*collecting terminals: t"):
        fc.solve_excess(problem, {"u": 0.1})
    with refused("terminal 'u'"):
        fc.collection_probability(problem, "u")
    with refused("volume 'film'"):
        fc.solve_excess(problem, field_V_per_cm={"film": (1, 0)})


def test_biased_junction_beside_bare_metal():
    problem = problem_on(mesh_of("quad"), surfaces={"z_max": junction("t"), "x_min": BARE_METAL})
    fc.solve_excess(problem.changed(light=None), 0.0)  # both impose Δn = 0
    with refused(r"infinite srv touches a biased junction at \(0, 20\) µm.*a gap, or a finite srv"):
        fc.solve_excess(problem, 0.3)


def test_two_terminals_on_one_layer():
    layer = fc.DopedLayer("n", 100)
    strips = [fc.Strip(n, 20, x, contact=fc.Contact(n)) for n, x in (("a", 50), ("b", 150))]
    front = fc.Face(fc.Surface(layer=layer), strips)
    with refused("contacts of the terminals a, b.*one terminal per connected layer"):
        fc.solve_excess(fc.problem(fc.UnitCell(constant_base(30, 10), 400, front=front)))


def test_volumes_of_different_doping():
    mesh = mesh_of("quad")
    cells = np.arange(mesh.cells.t.shape[1])
    mesh = fc.Mesh(mesh.cells, mesh.surfaces, {"base": cells[::2], "film": cells[1::2]})
    with refused("volumes that differ in doping"):
        fc.Problem(mesh, {"base": constant_base(), "film": constant_base(doping_per_cm3=2e16)}, {}, cell_area_cm2=1)
    bases = {"base": constant_base(lifetime_us=1), "film": constant_base(lifetime_us=2)}
    light = fc.Light.uniform(1e18)
    ledger = fc.solve_excess(fc.Problem(mesh, bases, {}, light=light, cell_area_cm2=1)).ledger
    assert {"base: lifetime", "film: lifetime"} <= {name for _, name in ledger.rows}


@pytest.mark.parametrize("value", [math.nan, -1.0, 0.0])
def test_functions_that_return_what_is_not_allowed(value):
    bad = lambda x, y, z: np.where(x > 20, value, 1.0)
    with refused(f"lifetime_us: the function gives {value:g} at"):
        fc.solve_excess(problem_on(mesh_of("quad"), constant_base(lifetime_us=bad)))
    if value != 0:
        for name in ("srv_cm_per_s", "J0_fA_per_cm2"):
            with refused(f"z_min: {name}: the function gives {value:g} at"):
                fc.solve_excess(problem_on(mesh_of("quad"), surfaces={"z_min": fc.Surface(**{name: bad})}))
        with refused(f"the function gives {value:g} at"):
            fc.solve_excess(problem_on(mesh_of("quad"), light=fc.Light.function(bad)))


def test_functions_that_fail():
    with refused("a function that failed"):
        fc.solve_excess(problem_on(mesh_of("quad"), constant_base(lifetime_us=lambda x: x)))
    with refused("a function that failed"):
        fc.solve_excess(problem_on(mesh_of("quad"), light=fc.Light.function(lambda x, y, z: [1.0, 2.0])))


def test_light_of_an_imported_mesh():
    """A rate needs no plane; a beam or a mask does."""
    problem = problem_on(mesh_of("quad"))
    assert fc.solve_excess(problem).optics.generated > 0
    for light in (fc.Light.sunlight(), fc.Light.uniform(1e18, mask=fc.HalfPlane(10))):
        with refused("lit_surface"):
            problem.changed(light=light)
        lit = problem.changed(light=light, lit_surface="z_max")
        assert fc.solve_excess(lit).optics.generated > 0


def test_drift_that_makes_no_sense():
    problem = problem_on(mesh_of("quad"))
    with refused("one of them"):
        fc.solve_excess(problem, field_V_per_cm=(1, 0), current_mA_per_cm2=(1, 0))
    for wrong in ((1, 0, 0), 5.0, (math.nan, 0), lambda x, y, z: x):
        with refused(r"finite components \(x, z\)"):
            fc.solve_excess(problem, field_V_per_cm=wrong)
    with refused("divergence-free"):
        fc.solve_excess(problem, current_mA_per_cm2=lambda x, y, z: (x, z))


# Upwinding


def boundary_layer(cells, order, kind="quad"):
    """−u″ + Pe u′ = 0 on (0, 1), Pe = 400: u = expm1(Pe x)/expm1(Pe), on equal cells; Δn = u Δn(1)."""
    axes = [np.linspace(0, 100, cells + 1), np.linspace(0, 20, 4)] + ([] if kind == "quad" else [np.linspace(0, 20, 3)])
    base = constant_base(30, 1e6)
    surfaces = {"x_min": BARE_METAL, "x_max": junction("t")}
    problem = problem_on(box_mesh(kind, *axes), base, surfaces, order, light=None)
    field = [-400 * 30 / 100e-4 / base.mobility_n_cm2_per_Vs] + [0.0] * (len(axes) - 1)
    system = ExcessSystem(problem, make_drift(problem, field, None))
    return solve_state(system, 0.3)


@pytest.mark.parametrize("order", [1, 2])
@pytest.mark.parametrize("kind", ["quad", "hexahedron"])
def test_upwinding_keeps_a_boundary_layer_free_of_oscillation(kind, order):
    state = boundary_layer(12, order, kind)
    assert state.system.drift.peclet > 5
    u = state.dn[np.argsort(state.system.space.points_cm[0])] / state.dn.max()
    assert u.min() >= -1e-9
    assert np.diff(u).min() >= -1e-9


@pytest.mark.parametrize("order", [1, 2])
def test_upwinding_fades_as_the_mesh_gets_finer(order):
    errors = []
    for cells in (25, 50, 100, 200, 400):
        state = boundary_layer(cells, order)
        bulk = state.system.space.bulk
        exact = np.exp(400 * (bulk.x_cm[0] / 100e-4 - 1))
        errors.append(np.sqrt(((bulk.values(state.dn) / state.dn.max() - exact) ** 2 * bulk.dx).sum()))
    assert (np.diff(errors) < 0).all()
    assert not state.system.drift.needs_upwinding
    assert errors[-1] < 0.1 * errors[0]
    assert np.log2(errors[-2] / errors[-1]) > 1


def test_upwinding_is_reported():
    problem = problem_on(mesh_of("quad"), light=fc.Light.uniform(1e15))
    with pytest.warns(ModelWarning, match=r"cell Péclet number .*Use a finer mesh"):
        fc.solve_excess(problem, field_V_per_cm=(500, 0))
