"""The bipolar form against textbook and published results: balance, one dimension, ambipolar diffusion, free energy.

Closed forms are evaluated here; printed digits come from closed forms evaluated independently of this package.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad
from simple_cells import BARE_METAL, VT, cell_of, constant_base, point

import fem_carriers as fc
from fem_carriers.analysis.bipolar import bias_voltages, solve_bipolar, wrap
from fem_carriers.analysis.curve import current_voltage
from fem_carriers.cell.light import Monochromatic
from fem_carriers.constants import BOLTZMANN_J_PER_K, ELEMENTARY_CHARGE_C
from fem_carriers.transport.bipolar import BipolarSystem
from fem_carriers.transport.walk import Walker

OTHER = {"p": "n", "n": "p"}
Q = ELEMENTARY_CHARGE_C


# Balance: test functions sum to one, so that what enters as holes leaves as electrons.


def finger_cell(kind, doping_per_cm3=1e16, rho_mohm_cm2=1.0, *, lit=True, pitch_y_um=None):
    """A finger on a full emitter, a local rear contact."""
    rear = {"J0_fA_per_cm2": 600, "contact": fc.Contact("back", rho_mohm_cm2)}
    layer = fc.DopedLayer(OTHER[kind], 100)
    opening = fc.Strip("opening", 100, **rear) if pitch_y_um is None else fc.Rectangle("opening", 100, 100, **rear)
    finger = fc.Strip("finger", 30, J0_fA_per_cm2=600, contact=fc.Contact("front", rho_mohm_cm2))
    return fc.UnitCell(
        fc.Base(kind, doping_per_cm3=doping_per_cm3, thickness_um=160, lifetime_us=1000),
        1200,
        pitch_y_um,
        front=fc.Face(fc.Surface(J0_fA_per_cm2=30, layer=layer), [finger]),
        rear=fc.Face(fc.Surface(J0_fA_per_cm2=5), [opening]),
        light=fc.Light.sunlight(0.02, path="lambertian") if lit else None,
    )


def solutions(problem, voltages_V):
    walker = Walker(BipolarSystem(problem))
    return [wrap(walker.at(bias_voltages(walker.system, v))) for v in voltages_V]


def imbalance(solution):
    """Sum of the terminal currents over the larger of the terminal current and the total recombination."""
    currents = solution.current_mA_per_cm2.values()
    lost = sum(abs(v) for (kind, _), v in solution.ledger.rows.items() if kind != "terminal")
    return abs(sum(currents)) / max(*map(abs, currents), lost)


@pytest.mark.parametrize("kind", ["p", "n"])
@pytest.mark.parametrize("doping_per_cm3", [1e15, 1e16, 1e18])
@pytest.mark.parametrize("rho_mohm_cm2", [0, 0.01, 1])
def test_electron_and_hole_terminal_currents_agree(kind, doping_per_cm3, rho_mohm_cm2):
    lit = fc.problem(finger_cell(kind, doping_per_cm3, rho_mohm_cm2), growth=3)
    for solution in solutions(lit, [0.6, 0.0]) + solutions(lit.changed(light=None), [0.6, 0.3, 0.01]):
        assert imbalance(solution) < 1e-10


@pytest.mark.parametrize("rho_mohm_cm2", [pytest.param(0, marks=pytest.mark.slow), 0.01])
def test_terminal_currents_agree_in_three_dimensions(rho_mohm_cm2):
    lit = fc.problem(finger_cell("p", 1e16, rho_mohm_cm2, pitch_y_um=600), first_step_um=15, growth=4)
    for solution in solutions(lit, [0.6, 0.0]) + solutions(lit.changed(light=None), [0.6, 0.1]):
        assert imbalance(solution) < 1e-10


# Loss budget: the weak form tested with the interpolated potentials. R. Brendel et al., Appl. Phys. Lett. 93, 173503
# (2008).


@pytest.mark.parametrize("kind", ["p", "n"])
def test_loss_budget_closes(kind):
    curve = current_voltage(fc.problem(finger_cell(kind)))
    for spot in (curve.short_circuit, curve.maximum_power, curve.open_circuit):
        losses = spot.solution.losses
        assert losses.delivered_mW_per_cm2 > 1
        assert abs(losses.misclosure_mW_per_cm2) < 1e-8 * losses.delivered_mW_per_cm2
        assert losses.output_mW_per_cm2 == pytest.approx(spot.power_mW_per_cm2, abs=1e-9)


def test_every_loss_converges_with_refinement():
    problem = fc.problem(finger_cell("p"))
    coarse, fine = (solutions(p, [0.6])[0].losses for p in (problem, problem.refined()))
    for key, value in fine.rows.items():
        assert coarse.rows[key] == pytest.approx(value, rel=1e-4, abs=1e-12), key


# One dimension: J = q Φ QE − J0 (exp(V/VT) − 1) in low injection, QE and J0 of a base with collection probability
# φ(x) = cosh(x/L) − [(SL/D)cosh(W/L) + sinh(W/L)]/[(SL/D)sinh(W/L) + cosh(W/L)] sinh(x/L). W = 180, L = 200 µm, D = 30,
# S = 1000 cm/s; at α = 1000/cm QE = 0.9555891464, J0 = 1396.4944 fA/cm².


def textbook_cell(kind, suns, doping_per_cm3=1.5e16):
    base = constant_base(30.0, 200e-4**2 / 30 * 1e6, doping_type=kind, doping_per_cm3=doping_per_cm3)
    source = Monochromatic(flux_per_cm2_s=suns * 2.5e17, absorption_per_cm=1000, shaded=False)
    front = fc.Surface(layer=fc.DopedLayer(OTHER[kind], 100), contact=fc.Contact("front"))
    rear = fc.Surface(srv_cm_per_s=1000, contact=fc.Contact("back"))
    return fc.problem(cell_of(base, 20, 2, front=front, rear=rear, light=fc.Light((source,))))


@pytest.mark.parametrize("kind", ["p", "n"])
@pytest.mark.parametrize("suns", [0.03, 0.003])
def test_one_dimensional_cell_is_the_textbook_superposition(kind, suns):
    photocurrent, J0 = 1e3 * Q * suns * 2.5e17 * 0.9555891464, 1396.4944e-12
    curve = current_voltage(textbook_cell(kind, suns))
    assert curve.jsc_mA_per_cm2 == pytest.approx(photocurrent, rel=1e-4)
    for spot in curve.points:
        dark = J0 * math.expm1(spot.voltage_V / VT)
        # injection and the resistance of the base show in the dark current; both grow with the light
        if dark < 0.5 * photocurrent or (suns < 0.01 and spot.voltage_V <= curve.voc_V):
            assert spot.current_mA_per_cm2 == pytest.approx(photocurrent - dark, abs=1e-4 * photocurrent)
    assert curve.voc_V == pytest.approx(VT * math.log1p(photocurrent / J0), abs=6e-3 * suns * VT)


def test_dark_saturation_current():
    problem = textbook_cell("p", 1.0).changed(light=None)
    for voltage in (0.05, 0.3):
        current = solve_bipolar(problem, voltage).cell_current_mA_per_cm2
        assert current == pytest.approx(-1396.4944e-12 * math.expm1(voltage / VT), rel=1e-5)


# Free energy in one dimension, strict low injection (n = n0 + Δn, p = N, no majority loss): N = 1.5e16, ni = 9.65e9,
# W = 180 µm, D = 30, τ = 1 ms, S = 100 at the rear, G = 1e19 uniform, V = 0.60 V, VT = 0.025852 V. Delivered
# q∫Gη = bulk q∫(Δn/τ)η + surface + minority transport q D VT ∫Δn′²/n + output, η = VT ln(nN/ni²). Closed form evaluated
# independently; budget of Brendel et al. 2008.
FREE_ENERGY = {"bulk": 0.1872481, "surface": 1.1844110, "transport": 0.2321672, "output": 15.9588356}


@pytest.mark.parametrize("kind", ["p", "n"])
def test_free_energy_of_a_base(kind):
    """N and ni² are both a thousand times larger than stated: the same problem in low injection, now strictly so."""
    temperature = 0.025852 * Q / BOLTZMANN_J_PER_K
    base = constant_base(
        30.0, 1000.0, doping_type=kind, doping_per_cm3=1.5e19, ni_per_cm3=9.65e9 * math.sqrt(1e3),
        mobility_n_cm2_per_Vs=30 / 0.025852, mobility_p_cm2_per_Vs=30 / 0.025852, material="generic",
        temperature_K=temperature,
    )  # fmt: skip
    front = fc.Surface(layer=fc.DopedLayer(OTHER[kind], 100), contact=fc.Contact("front"))
    rear = fc.Surface(srv_cm_per_s=100, contact=fc.Contact("back"))
    cell = cell_of(base, 20, 2, front=front, rear=rear, light=fc.Light.uniform(1e19))
    solution = solve_bipolar(fc.problem(cell), 0.6)
    losses = solution.losses
    assert solution.cell_current_mA_per_cm2 == pytest.approx(26.5980593, rel=2e-5)
    assert losses.delivered_mW_per_cm2 == pytest.approx(17.5626618, rel=2e-5)
    for kind_of_loss, expected in FREE_ENERGY.items():
        assert losses.sum_of(kind_of_loss) == pytest.approx(expected, rel=2e-4), kind_of_loss
    assert abs(losses.misclosure_mW_per_cm2) < 1e-10 * losses.delivered_mW_per_cm2


# Elimination: at zero total current everywhere the two equations are one with D = (n + p)/(n/Dp + p/Dn).


def unequal_base(kind, **changes):
    mobilities = {"mobility_n_cm2_per_Vs": 1200.0, "mobility_p_cm2_per_Vs": 400.0}
    return constant_base(doping_type=kind, doping_per_cm3=1e15, **mobilities | changes)


@pytest.mark.parametrize("kind", ["p", "n"])
@pytest.mark.parametrize("rate", [1e16, 1e19, 1e21, 1e23])
def test_half_lit_slab_with_ambipolar_diffusion(kind, rate):
    """∫ D dΔn obeys Poisson's equation: 9GW²/128 at 3W/8 with G on 0 < x < W/2 and Δn = 0 at both ends."""
    base = unequal_base(kind, thickness_um=10)
    light = fc.Light.uniform(rate, mask=fc.HalfPlane(100))
    cell = cell_of(base, 200, 2, sides={"x_min": BARE_METAL, "x_max": BARE_METAL}, light=light)
    solution = solve_bipolar(fc.problem(cell, first_step_um=0.1, growth=1.6).refined())
    eq = base.equilibrium()
    ambipolar = lambda d: (eq.n0 + eq.p0 + 2 * d) / ((eq.n0 + d) / eq.Dp + (eq.p0 + d) / eq.Dn)
    top = solution.at(point(2, 75, 5))[0]
    found = quad(ambipolar, 0, top, epsrel=1e-10, limit=200)[0]
    assert found == pytest.approx(9 * rate * 200e-4**2 / 128, rel=3e-6)
    assert solution.ledger.share("x_min") == pytest.approx(3 / 4, rel=3e-7)


@pytest.mark.parametrize("kind", ["p", "n"])
@pytest.mark.parametrize("suns", [1e-2, 1.0, 100.0])
def test_lit_piece_without_contacts_is_the_excess_carrier_form(kind, suns):
    light = fc.Light.sunlight(suns=suns, mask=fc.HalfPlane(200))
    wafer = fc.Base(kind, doping_per_cm3=1e15, thickness_um=160, tau_n0_us=300, tau_p0_us=100)
    rear = fc.Face(fc.Surface(srv_cm_per_s=10), [fc.Strip("worn", 200, srv_cm_per_s=1e5)])
    cell = fc.UnitCell(wafer, 1000, front=fc.Surface(J0_fA_per_cm2=10), rear=rear, light=light)
    problem = fc.problem(cell, first_step_um=0.1, growth=1.6).refined()
    bipolar, excess = solve_bipolar(problem), fc.solve_excess(problem)
    assert np.abs(bipolar.state.dn - excess.state.dn).max() < 3e-6 * excess.state.dn.max()
    for key, rate in excess.ledger.rows.items():
        assert bipolar.ledger.rows[key] == pytest.approx(rate, rel=3e-6), key


@pytest.mark.parametrize("kind", ["p", "n"])
@pytest.mark.parametrize("suns", [0.01, 1.0, 100.0])
def test_open_circuit_in_one_dimension_is_the_excess_carrier_form(kind, suns):
    """No current anywhere; in the excess-carrier form the layers float."""
    layers = {"front": fc.DopedLayer(OTHER[kind], 100), "rear": fc.DopedLayer(kind, 100)}
    given = {side: fc.Surface(J0_fA_per_cm2=100, layer=layer) for side, layer in layers.items()}
    wired = {side: fc.Surface(100, layer=layer, contact=fc.Contact(side)) for side, layer in layers.items()}
    source = Monochromatic(flux_per_cm2_s=suns * 2.5e17, absorption_per_cm=1000, shaded=False)
    base = unequal_base(kind, lifetime_us=100.0)
    bare, contacted = (fc.problem(cell_of(base, 20, 2, light=fc.Light((source,)), **f)) for f in (given, wired))
    bipolar = solve_bipolar(contacted, {"front": "floating", "rear": 0.0})
    excess = fc.solve_excess(bare)
    assert np.abs(bipolar.state.dn - excess.state.dn).max() < 1e-6 * excess.state.dn.max()
    assert abs(bipolar.cell_current_mA_per_cm2) < 1e-9 * bipolar.ledger.generated_mA_per_cm2
