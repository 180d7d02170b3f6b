"""Curves, terminals, symmetries and refusals of the bipolar form."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from scipy.optimize import brentq, minimize_scalar
from simple_cells import BARE_METAL, VT, cell_of, constant_base

import fem_carriers as fc
from fem_carriers.analysis.bipolar import Through, solve_bipolar
from fem_carriers.analysis.curve import current_voltage
from fem_carriers.cell.light import Monochromatic
from fem_carriers.constants import ELEMENTARY_CHARGE_C, thermal_voltage_V
from fem_carriers.transport.bipolar import BipolarSystem, Unknowns
from fem_carriers.transport.bipolar_equations import Equations
from fem_carriers.transport.roles import roles_of
from fem_carriers.transport.walk import Walker

OTHER = {"p": "n", "n": "p"}
SUN = fc.Light.sunlight(0.02, path="lambertian")


def layer(kind, sheet=100.0):
    return fc.DopedLayer(kind, sheet)


def finger_cell(kind="p", light=SUN, base=None, rear_patches=None, **front):
    """Finger and full emitter on the front, a local contact on the rear; a coarse mesh."""
    emitter = fc.Surface(J0_fA_per_cm2=50, layer=layer(OTHER[kind]), **front)
    finger = fc.Strip("finger", 40, J0_fA_per_cm2=500, contact=fc.Contact("front", 2))
    opening = fc.Strip("opening", 100, J0_fA_per_cm2=500, contact=fc.Contact("back", 1))
    base = base or fc.Base(kind, doping_per_cm3=1e16, thickness_um=160, lifetime_us=500)
    rear = fc.Face(fc.Surface(J0_fA_per_cm2=10), [opening] if rear_patches is None else rear_patches)
    return fc.UnitCell(base, 1200, front=fc.Face(emitter, [finger]), rear=rear, light=light)


def coarse(cell):
    return fc.problem(cell, first_step_um=1.0, growth=3)


@pytest.fixture(scope="module", params=["p", "n"])
def problem(request):
    return coarse(finger_cell(request.param))


@pytest.fixture(scope="module")
def curve(problem):
    return current_voltage(problem)


# Curve


def test_short_and_open_circuit_are_solved_for(problem, curve):
    current = lambda v: solve_bipolar(problem, v).cell_current_mA_per_cm2
    assert curve.jsc_mA_per_cm2 == pytest.approx(current(0.0), rel=1e-9)
    assert curve.voc_V == pytest.approx(brentq(current, 0.6, 0.75, xtol=1e-10), abs=1e-8)


def test_maximum_power_is_solved_for(problem, curve):
    best = minimize_scalar(
        lambda v: -v * solve_bipolar(problem, float(v)).cell_current_mA_per_cm2, (0.5, 0.6, 0.65), tol=1e-6
    )
    assert curve.maximum_power.power_mW_per_cm2 == pytest.approx(-best.fun, rel=1e-9)
    assert curve.efficiency_percent == pytest.approx(-best.fun / 100.03706555734423 * 100, rel=1e-8)
    assert curve.fill_factor_percent == pytest.approx(-100 * best.fun / (curve.jsc_mA_per_cm2 * curve.voc_V), rel=1e-9)


def test_slope_is_the_derivative_of_the_curve(problem, curve):
    spot, step = curve.maximum_power, 1e-4
    up, down = (solve_bipolar(problem, spot.voltage_V + s).cell_current_mA_per_cm2 for s in (step, -step))
    assert spot.slope_mA_per_cm2_V == pytest.approx((up - down) / (2 * step), rel=1e-5)


def test_curve_falls_and_its_table_is_in_order(curve):
    table = curve.table
    assert table["voltage_V"].is_monotonic_increasing
    assert table["current_mA_per_cm2"].is_monotonic_decreasing
    assert curve.newton_steps < 5
    assert curve.points[0].voltage_V == 0
    assert "efficiency_percent" in str(curve)


def test_voltages_asked_for_are_in_the_curve(problem):
    asked = [0.1, 0.5, 0.62]
    found = current_voltage(problem, asked).table["voltage_V"].tolist()
    assert set(asked) <= set(found)


def test_dark_curve(problem):
    dark = current_voltage(problem.changed(light=None), [0.0, 1e-6, 0.3, 0.6])
    assert dark.short_circuit is None
    currents = dark.table["current_mA_per_cm2"].tolist()
    assert currents[0] == 0
    assert currents[3] < currents[2] < currents[1] < 0
    with pytest.raises(fc.InputError, match="dark curve"):
        _ = dark.jsc_mA_per_cm2


def test_exchanging_electrons_and_holes_changes_nothing():
    """Charge conjugation: p for n, with mobilities, SRH lifetimes and Auger constants exchanged."""
    both = []
    for kind, (mu_n, mu_p), (tau_n, tau_p), auger in (
        ("p", (1200.0, 400.0), (100.0, 300.0), (3e-31, 1e-31)),
        ("n", (400.0, 1200.0), (300.0, 100.0), (1e-31, 3e-31)),
    ):
        base = constant_base(
            doping_type=kind, mobility_n_cm2_per_Vs=mu_n, mobility_p_cm2_per_Vs=mu_p, lifetime_us=None,
            tau_n0_us=tau_n, tau_p0_us=tau_p, auger=auger, radiative_cm3_per_s=4e-15,
        )  # fmt: skip
        both.append(current_voltage(coarse(finger_cell(kind, base=base))))
    p, n = both
    np.testing.assert_allclose(p.table["voltage_V"], n.table["voltage_V"], rtol=1e-9)
    np.testing.assert_allclose(p.table["current_mA_per_cm2"], n.table["current_mA_per_cm2"], rtol=1e-8, atol=1e-8)
    at_best = [c.maximum_power.solution for c in both]
    assert at_best[0].current_mA_per_cm2["back"] == pytest.approx(-at_best[1].current_mA_per_cm2["back"], rel=1e-8)
    names = ("holes in the base", "electrons in the base")
    majority = [s.losses.rows["transport", name] for s, name in zip(at_best, names, strict=True)]
    assert majority[0] == pytest.approx(majority[1], rel=1e-7)


# Terminals


def test_signs_of_voltage_and_current(problem):
    solution = solve_bipolar(problem, 0.5)
    hole = "back" if problem.base.doping_type == "p" else "front"
    electron = {"back": "front", "front": "back"}[hole]
    assert solution.voltage_V == {hole: 0.5, electron: 0.0}
    assert solution.cell_voltage_V == pytest.approx(0.5)
    assert solution.current_mA_per_cm2[hole] > 30  # conventional current leaves at the hole contact
    assert solution.current_mA_per_cm2[electron] < -30
    assert min(solution.collected_mA_per_cm2.values()) > 30
    assert solution.power_mW_per_cm2 == pytest.approx(0.5 * solution.cell_current_mA_per_cm2, rel=1e-9)


def test_a_floating_terminal_finds_open_circuit(problem, curve):
    for floating, held in (("front", "back"), ("back", "front")):
        solution = solve_bipolar(problem, {floating: "floating", held: 0.2})
        assert solution.cell_voltage_V == pytest.approx(curve.voc_V, abs=1e-8)
        assert abs(solution.current_mA_per_cm2[floating]) < 1e-8
        assert type(solution.voltage_V[floating]) is float


@pytest.mark.parametrize("resistance_ohm_cm2", [1.0, 15.0, 1e4])
def test_a_load_resistance_lies_on_the_curve(problem, resistance_ohm_cm2):
    solution = solve_bipolar(problem, {"front": Through(resistance_ohm_cm2), "back": 0.0})
    voltage, current = solution.cell_voltage_V, solution.cell_current_mA_per_cm2
    assert voltage == pytest.approx(resistance_ohm_cm2 * current * 1e-3, rel=1e-8)
    assert current == pytest.approx(solve_bipolar(problem, voltage).cell_current_mA_per_cm2, rel=1e-8)


def test_only_differences_of_voltage_matter(problem):
    at = [solve_bipolar(problem, {"front": v, "back": v}).current_mA_per_cm2["front"] for v in (0.0, 3.0)]
    assert at[0] == pytest.approx(at[1], rel=1e-10)


@pytest.mark.parametrize("kind", ["p", "n"])
def test_a_lifetime_sample_has_its_implied_voltage(kind):
    """G = Δn/τ everywhere; VT ln((n0 + Δn)(p0 + Δn)/ni²)."""
    base = constant_base(lifetime_us=100.0, doping_type=kind)
    solution = solve_bipolar(fc.problem(fc.UnitCell(base, 200, light=fc.Light.uniform(1e20))))
    eq, dn = base.equilibrium(), 1e20 * 100e-6
    expected = VT * math.log((eq.n0 + dn) * (eq.p0 + dn) / eq.ni**2)
    assert solution.implied_voltage_V == pytest.approx(expected, abs=1e-9)
    assert solution.cell_voltage_V == pytest.approx(expected, abs=1e-9)
    assert solution.current_mA_per_cm2 == {}
    assert solution.losses.rows["bulk", "base: lifetime"] == pytest.approx(solution.losses.delivered_mW_per_cm2)


def three_terminals(second="second"):
    """An emitter on the front and, beside the base contact, on the rear."""
    strip = fc.Strip("rear_emitter", 300, center_um=600, layer=layer("n"), contact=fc.Contact(second, 1))
    opening = fc.Strip("opening", 100, J0_fA_per_cm2=500, contact=fc.Contact("back", 1))
    return coarse(finger_cell(rear_patches=[opening, strip]))


def test_two_emitters_at_one_voltage_are_one_terminal():
    apart = solve_bipolar(three_terminals(), {"front": 0.0, "second": 0.0, "back": 0.5})
    joined = solve_bipolar(three_terminals("front"), {"front": 0.0, "back": 0.5})
    currents = apart.current_mA_per_cm2
    assert currents["front"] + currents["second"] == pytest.approx(joined.current_mA_per_cm2["front"], rel=1e-9)
    assert sum(currents.values()) == pytest.approx(0, abs=1e-9)
    assert min(apart.collected_mA_per_cm2.values()) > 1


def test_a_floating_second_emitter_carries_no_current_and_sits_at_forward_bias():
    solution = solve_bipolar(three_terminals(), {"front": 0.0, "second": "floating", "back": 0.0})
    assert abs(solution.current_mA_per_cm2["second"]) < 1e-8
    assert -0.7 < solution.voltage_V["second"] < -0.1


def test_conductances_of_three_terminals_are_reciprocal():
    """At equilibrium dIa/dVb = dIb/dVa (L. Onsager, Phys. Rev. 37, 405 (1931))."""
    dark, step = three_terminals().changed(light=None), 1e-4
    zero = {"front": 0.0, "second": 0.0, "back": 0.0}
    names = list(zero)
    columns = []
    for name in names:
        ends = [solve_bipolar(dark, zero | {name: s * step}).current_mA_per_cm2 for s in (1, -1)]
        columns.append([(ends[0][t] - ends[1][t]) / (2 * step) for t in names])
    conductance = np.array(columns)
    scale = np.abs(conductance).max()
    assert np.abs(conductance - conductance.T).max() < 1e-5 * scale
    assert np.abs(conductance.sum(axis=0)).max() < 1e-9 * scale
    assert abs(conductance[0, 1]) > 1e-3 * scale


@pytest.mark.parametrize("gap_um", [0.0, 20.0])
def test_interdigitated_rear_contacts(gap_um):
    wafer = fc.Base("n", doping_per_cm3=3e15, thickness_um=160, lifetime_us=3000)
    pitch = 1200.0
    patches = [
        fc.Strip("emitter", 800, J0_fA_per_cm2=20, layer=layer("p", 80)),
        fc.Strip("emitter_metal", 60, J0_fA_per_cm2=400, contact=fc.Contact("plus", 1)),
        fc.Strip(
            "base_layer", 400 - 2 * gap_um, center_um=pitch / 2, J0_fA_per_cm2=30, layer=layer("n", 50)
        ),
        fc.Strip("base_metal", 40, center_um=pitch / 2, J0_fA_per_cm2=300, contact=fc.Contact("minus", 1)),
    ]  # fmt: skip
    rear = fc.Face(fc.Surface(J0_fA_per_cm2=8), patches)
    cell = fc.UnitCell(wafer, pitch, front=fc.Face(fc.Surface(J0_fA_per_cm2=5)), rear=rear, light=SUN)
    curve = current_voltage(coarse(cell))
    best = curve.maximum_power.solution
    generated = best.ledger.generated_mA_per_cm2
    assert 0.97 * generated < curve.jsc_mA_per_cm2 < generated
    implied = solve_bipolar(coarse(cell), {"plus": "floating", "minus": 0.0}).implied_voltage_V
    assert curve.voc_V < implied < curve.voc_V + 2e-3  # the mean density lies above that at the junction
    assert abs(best.losses.misclosure_mW_per_cm2) < 1e-6 * best.losses.delivered_mW_per_cm2
    assert best.losses.rows["sheet", "layer on rear.base_layer"] > 0


# A junction in a thin base: everything recombines at the junction, so that the lumped diode equation is exact but for a
# voltage of microvolts along the base.


def diode_cell(J0=100.0, J02=0.0, shunt=None, **base):
    given = {"doping_per_cm3": 1e16, "thickness_um": 10, "lifetime_us": math.inf, "auger": None}
    wafer = fc.Base("p", **given | {"radiative_cm3_per_s": 0.0} | base)
    junction = {"layer": layer("n"), "contact": fc.Contact("front")}
    front = fc.Surface(J0_fA_per_cm2=J0, J02_nA_per_cm2=J02, shunt_ohm_cm2=shunt, **junction)
    rear = fc.Surface(layer=layer("p"), contact=fc.Contact("rear"))
    return fc.problem(cell_of(wafer, 10, 2, front=front, rear=rear, light=fc.Light.uniform(1e19)))


PHOTOCURRENT = 1e3 * ELEMENTARY_CHARGE_C * 1e19 * 10e-4  # mA/cm²


def lumped(voltage_V, J0, J02, shunt):
    """J = JL − J0 (exp(V/VT) − 1) − J02 (exp(V/2VT) − 1) − V/R, mA/cm²."""
    leak = 0.0 if shunt is None else 1e3 * voltage_V / shunt
    diodes = J0 * 1e-12 * np.expm1(voltage_V / VT) + J02 * 1e-6 * np.expm1(voltage_V / (2 * VT))
    return PHOTOCURRENT - diodes - leak


@pytest.mark.parametrize(("J02", "shunt"), [(0.0, None), (10.0, None), (0.0, 2000.0), (5.0, 5000.0)])
def test_second_diode_and_shunt_lower_the_fill_factor_as_the_diode_equation_says(J02, shunt):
    curve = current_voltage(diode_cell(J02=J02, shunt=shunt))
    J = lambda v: lumped(v, 100.0, J02, shunt)
    voc = brentq(J, 0.1, 0.8, xtol=1e-12)
    best = minimize_scalar(lambda v: -v * J(v), (0.3, 0.5, voc), tol=1e-9)
    assert curve.jsc_mA_per_cm2 == pytest.approx(PHOTOCURRENT, rel=1e-6)
    assert curve.voc_V == pytest.approx(voc, abs=3e-6)  # q G W²/2σ along the base is 1.2 µV
    assert curve.fill_factor_percent == pytest.approx(-100 * best.fun / (PHOTOCURRENT * voc), rel=1e-4)
    rows = curve.maximum_power.solution.ledger.rows
    if shunt is not None:
        leak = 1e3 * curve.maximum_power.voltage_V / shunt
        assert rows["surface", "front: shunt"] == pytest.approx(leak, rel=1e-4)


def test_open_circuit_voltage_falls_with_temperature():
    """J0 ∝ ni², ni = 5.29e19 (T/300)^2.54 exp(−6726/T) (Misiakos and Tsamakis 1993), the same photocurrent:
    Voc = VT ln(1 + JL/J0), dVoc/dT = [Voc − VT (5.08 + 13452/T)]/T.
    """
    temperatures = (298.15, 322.15, 323.15, 324.15, 348.15)
    voc = {T: current_voltage(diode_cell(temperature_K=T), [0.0]).voc_V for T in temperatures}
    for T, found in voc.items():
        growth = (T / 298.15) ** 5.08 * math.exp(13452 * (1 / 298.15 - 1 / T))
        expected = thermal_voltage_V(T) * math.log1p(PHOTOCURRENT / (100e-12 * growth))
        assert found == pytest.approx(expected, abs=2e-6)
    T = 323.15
    slope = (voc[T] - thermal_voltage_V(T) * (5.08 + 13452 / T)) / T
    assert (voc[324.15] - voc[322.15]) / 2 == pytest.approx(slope, rel=1e-3)
    assert -0.0025 < slope < -0.0015  # some −2 mV/K


def test_a_piece_without_any_recombination_delivers_its_photocurrent():
    solution = solve_bipolar(diode_cell(J0=None), 0.3)
    assert solution.cell_current_mA_per_cm2 == pytest.approx(PHOTOCURRENT, rel=1e-9)


def test_bare_metal_is_a_sink():
    cell = cell_of(constant_base(), 20, 2, front=BARE_METAL, light=fc.Light.uniform(1e19))
    solution = solve_bipolar(fc.problem(cell))
    assert solution.ledger.share("front") == pytest.approx(1, rel=1e-10)


@pytest.mark.parametrize("collection", [0.0, 0.4, 1.0])
def test_an_absorbing_layer_takes_its_share_of_the_current(collection):
    """(1 − collection) (1 − exp(−αd)) of the photons that enter."""
    source = Monochromatic(flux_per_cm2_s=1e17, absorption_per_cm=1e4, shaded=False)
    absorbing = fc.DopedLayer("n", 100, absorbing_depth_um=0.3, collection=collection)
    front = fc.Surface(layer=absorbing, contact=fc.Contact("front"))
    rear = fc.Surface(layer=layer("p"), contact=fc.Contact("rear"))
    base = constant_base(thickness_um=20)
    problem = fc.problem(cell_of(base, 20, 2, front=front, rear=rear, light=fc.Light((source,))))
    photons = 1e3 * ELEMENTARY_CHARGE_C * 1e17
    expected = photons * (-math.expm1(-20.0) - (1 - collection) * -math.expm1(-0.3))
    solution = solve_bipolar(problem)
    assert solution.ledger.generated_mA_per_cm2 == pytest.approx(expected, rel=1e-12)
    assert solution.cell_current_mA_per_cm2 == pytest.approx(expected, rel=1e-9)  # nothing recombines
    assert solution.optics.parasitic == pytest.approx(photons * (1 - collection) * -math.expm1(-0.3), rel=1e-12)


def test_a_bar_between_two_contacts_of_the_base_is_a_resistor():
    """R = L/(σ W) per depth."""
    base = constant_base(thickness_um=10)
    sides = {s: fc.Surface(contact=fc.Contact(s)) for s in ("x_min", "x_max")}
    problem = fc.problem(cell_of(base, 200, 2, sides=sides))
    solution = solve_bipolar(problem, {"x_min": 0.0, "x_max": 1e-3})
    eq = base.equilibrium()
    expected = 1e-3 * ELEMENTARY_CHARGE_C * eq.p0 * eq.mu_p * 10e-4 / 200e-4
    assert -solution.current_mA_per_cm2["x_max"] * 1e-3 * problem.cell_area_cm2 == pytest.approx(expected, rel=1e-6)
    assert solve_bipolar(problem).current_mA_per_cm2 == pytest.approx({"x_min": 0.0, "x_max": 0.0}, abs=1e-12)
    with pytest.raises(fc.InputError, match="a voltage for every terminal"):
        solve_bipolar(problem, 0.1)


# Refusals


def faces(front, rear):
    return fc.problem(cell_of(constant_base(lifetime_us=10.0, thickness_um=20), 100, 2, front=front, rear=rear))


EMITTER = fc.Surface(layer=layer("n"), contact=fc.Contact("front"))
BACK = fc.Surface(contact=fc.Contact("back"))
BARE_STRIP = fc.Strip("bare", 50, srv_cm_per_s=math.inf, layer=None, contact=None)


def side_by_side(rho_mohm_cm2):
    """Contacts of two terminals that touch on one layer."""
    a = fc.Strip("a", 50, contact=fc.Contact("a", rho_mohm_cm2))
    b = fc.Strip("b", 150, center_um=100, contact=fc.Contact("b", rho_mohm_cm2))
    return fc.Face(fc.Surface(layer=layer("n")), [a, b])


@pytest.mark.parametrize(
    ("front", "rear", "message"),
    [
        (EMITTER, fc.Surface(contact=fc.Contact("front")), "layers of both polarities"),
        (EMITTER, fc.Surface(), "no path for majority carriers"),
        (fc.Surface(), BACK, "no path for minority carriers"),
        (fc.Face(EMITTER, [BARE_STRIP]), BACK, "impose different potentials"),
        (side_by_side(0), BACK, "different terminals that touch"),
    ],
)  # fmt: skip
def test_layouts_without_a_finite_answer_are_refused(front, rear, message):
    with pytest.raises(fc.InputError, match=message):
        solve_bipolar(faces(front, rear))


def test_contacts_of_different_terminals_may_touch_over_a_contact_resistance():
    solution = solve_bipolar(faces(side_by_side(1), BACK), {"a": 1e-3, "b": 0.0, "back": 0.0})
    assert solution.current_mA_per_cm2["b"] == pytest.approx(-solution.current_mA_per_cm2["a"], rel=1e-3)
    assert solution.current_mA_per_cm2["b"] > 0


@pytest.mark.parametrize(
    ("voltage", "message"),
    [
        (math.nan, "a finite number"),
        ("floating", "a finite number"),
        ({"front": 0.0}, "no voltage for the terminal 'back'"),
        ({"front": 0.0, "bakc": 0.0, "back": 0.0}, "Try: 'back'"),
        ({"front": "floating", "back": "floating"}, "all terminals floating"),
        ({"front": "open", "back": 0.0}, '"floating", a finite voltage, or'),
        ({"front": math.inf, "back": 0.0}, "a finite voltage"),
        ({"front": math.nan, "back": 0.0}, "a finite voltage"),
    ],
)
def test_terminal_conditions_that_make_no_sense_are_refused(voltage, message):
    with pytest.raises(fc.InputError, match=message):
        solve_bipolar(faces(EMITTER, BACK), voltage)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: fc.Contact("front", -1), "contact_resistivity_mohm_cm2 = -1"),
        (lambda: Through(0.0), "resistance_ohm_cm2"),
        (lambda: Through(-1.0), "resistance_ohm_cm2"),
        (lambda: fc.Base("p", 1.0, lifetime_us=10, temperature_K=400), "silicon model of intrinsic density"),
        (lambda: fc.Surface(shunt_ohm_cm2=0), "shunt_ohm_cm2"),
        (lambda: fc.DopedLayer("n", 100, collection=1.1), "collection"),
    ],
)  # fmt: skip
def test_numbers_out_of_range_are_refused(make, message):
    with pytest.raises(fc.InputError, match=message):
        make()


def test_a_curve_needs_contacts_for_both_carriers():
    with pytest.raises(fc.InputError, match="a contact for each carrier"):
        current_voltage(faces(fc.Surface(), fc.Surface()))


def test_efficiency_needs_incident_power():
    curve = current_voltage(diode_cell(), [0.0])
    assert curve.fill_factor_percent > 80
    with pytest.raises(fc.InputError, match="incident power"):
        _ = curve.efficiency_percent
    assert "efficiency_percent" not in curve.summary


def test_series_resistance_needs_a_current():
    with pytest.raises(fc.InputError, match="an operating point with current"):
        _ = current_voltage(diode_cell(), [0.0]).open_circuit.solution.losses.series_resistance_ohm_cm2


def test_light_without_any_sink_is_refused():
    cell = cell_of(constant_base(), 20, 2, light=fc.Light.uniform(1e19))
    with pytest.raises(fc.SolverError, match="no sink for carriers"):
        solve_bipolar(fc.problem(cell))
    with pytest.raises(fc.SolverError, match="no sink for carriers"):
        current_voltage(diode_cell(J0=None))


# The equations


@pytest.mark.parametrize("kind", ["p", "n"])
def test_jacobian_is_the_derivative_of_the_residual(kind):
    """Central differences along random directions, extrapolated once (L. F. Richardson, 1911)."""
    base = fc.Base(kind, doping_per_cm3=2e15, thickness_um=160, tau_n0_us=100, tau_p0_us=50)
    cell = finger_cell(kind, base=base, shunt_ohm_cm2=1000.0, J02_nA_per_cm2=5.0)
    system = BipolarSystem(fc.problem(cell, first_step_um=5, growth=4))
    equations, rng = Equations(system), np.random.default_rng(1)
    n, layer_nodes = system.space.size, system.conductors.layer
    voltages = {"front": -0.55, "back": 0.0}  # forward bias in the frame of a p-type base
    start = Unknowns(
        1e14 * (1 + 0.3 * rng.random(n)), 0.02 * rng.random(n), np.where(layer_nodes, 0.02 * rng.random(n), 0.0)
    )
    x, slope = system.completed(start, voltages)
    A, _ = equations.matrix(x, slope)
    size = np.concatenate([np.where(layer_nodes, VT, 1e14), np.full(n, VT)])

    def moved(v, h):
        step = h * v * size
        y, f = step[:n], step[n:]
        shifted = Unknowns(x.d + np.where(layer_nodes, 0.0, y), x.f + f, x.s + np.where(layer_nodes, y, 0.0))
        return np.concatenate(system.residuals(system.completed(shifted, voltages)[0], voltages))

    def difference(v, h):
        return (moved(v, h) - moved(v, -h)) / (2 * h)

    for _ in range(3):
        v = rng.standard_normal(2 * n)
        found = (4 * difference(v, 5e-4) - difference(v, 1e-3)) / 3
        exact = A @ (v * size)
        assert np.abs(found - exact).max() < 1e-7 * np.abs(exact).max()
        for half in (slice(0, n), slice(n, 2 * n)):
            assert np.linalg.norm((found - exact)[half]) < 1e-7 * np.linalg.norm(exact[half])


def test_density_inverts_the_splitting():
    roles = roles_of(constant_base().equilibrium())
    u = np.array([-0.3, -1e-3, 0.0, 1e-3, 0.3, 0.6, 0.8])
    d, slope = roles.density(u)
    np.testing.assert_allclose(roles.splitting(d)[1:], u[1:], rtol=1e-9, atol=1e-15)
    step = 1e-5
    np.testing.assert_allclose((roles.density(u + step)[0] - roles.density(u - step)[0]) / (2 * step), slope, rtol=1e-7)


def test_few_newton_steps_from_one_voltage_to_the_next():
    walker = Walker(BipolarSystem(coarse(finger_cell())))
    voltages = np.linspace(0.7, 0.0, 15)
    for v in voltages:
        walker.at({"front": 0.0, "back": float(v)})
    steps = [s.outcome.steps for s in walker.states]
    assert len(steps) <= 17
    assert np.mean(steps) < 5
    assert all(b.voltages["back"] <= a.voltages["back"] for a, b in pairwise(walker.states[1:]))
