"""Resistances that are known in closed form: sheets, contacts with crowding, spreading from strips and discs."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.special import ellipj, ellipk, ellipkm1
from simple_cells import constant_base

import fem_carriers as fc
from fem_carriers.analysis.bipolar import solve_bipolar
from fem_carriers.constants import ELEMENTARY_CHARGE_C

SMALL_V = 1e-4


# Emitter lateral loss: current J collected evenly and carried to fingers a distance S apart loses J² R_sh S²/12 per
# area; with fingers of width w that take what is collected below them, J² R_sh (S − w)³/(12 S).


@pytest.mark.parametrize("kind", ["p", "n"])
def test_emitter_lateral_loss(kind):
    pitch, width, sheet = 2000.0, 20.0, 100.0
    layer = fc.DopedLayer("n" if kind == "p" else "p", sheet)
    cell = fc.UnitCell(
        constant_base(doping_type=kind, thickness_um=50, lifetime_us=100.0),
        pitch,
        front=fc.Face(fc.Surface(layer=layer), [fc.Strip("finger", width, contact=fc.Contact("front"))]),
        rear=fc.Surface(contact=fc.Contact("rear"), layer=fc.DopedLayer(kind, 100)),
        light=fc.Light.uniform(1e17),
    )
    solution = solve_bipolar(fc.problem(cell))
    J = solution.cell_current_mA_per_cm2
    expected = J**2 * 1e-3 * sheet * ((pitch - width) * 1e-4) ** 3 / (12 * pitch * 1e-4)
    assert solution.losses.sum_of("sheet") == pytest.approx(expected, rel=1e-3)
    of_sheet = {k: v for k, v in solution.losses.series_resistance_ohm_cm2.items() if k.startswith("layer on front")}
    limit = sheet * (pitch * 1e-4) ** 2 / 12  # for w ≪ S
    assert sum(of_sheet.values()) == pytest.approx(limit * (1 - width / pitch) ** 3, rel=1e-3)


# Contact on a sheet, metal at one potential (H. H. Berger, J. Electrochem. Soc. 119, 507 (1972)): √(ρc Rs)/w coth(d/LT)
# fed from one side, √(ρc Rs)/(2w) coth(d/2LT) from both, LT = √(ρc/Rs). ρc = 2 mΩ·cm², Rs = 100 Ω/sq, d = 50 µm, w = 1
# cm: 0.5542477 and 0.4408237 Ω.
RHO, SHEET, LENGTH_UM, GAP_UM = 2.0, 100.0, 50.0, 100.0


def sheet_with_contacts(opposite, *, both_sides):
    """Contact "probe" of 50 µm amid a layer on a nearly insulating base; ideal contacts at one end of it or both."""
    width = 2 * GAP_UM + LENGTH_UM + 40.0
    base = constant_base(
        doping_per_cm3=0.0, ni_per_cm3=1e4, thickness_um=5, material="generic", doping_type="p", lifetime_us=1.0
    )
    layer = fc.DopedLayer("n" if opposite else "p", SHEET)
    probe = fc.Strip("probe", LENGTH_UM, center_um=width / 2, contact=fc.Contact("probe", RHO))
    ends = [fc.Strip("feed", 40, center_um=0.0, contact=fc.Contact("feed"))]
    if both_sides:
        ends.append(fc.Strip("far_feed", 40, center_um=width, contact=fc.Contact("feed")))
    rear = fc.Surface(contact=fc.Contact("rear"), layer=fc.DopedLayer("p", 1.0)) if opposite else fc.Surface()
    front = fc.Face(fc.Surface(layer=layer), [probe, *ends])
    return fc.problem(fc.UnitCell(base, 2 * width, front=front, rear=rear))


@pytest.mark.parametrize("opposite", [False, True])
@pytest.mark.parametrize("both_sides", [False, True])
def test_contact_with_crowding(opposite, both_sides):
    problem = sheet_with_contacts(opposite, both_sides=both_sides)
    voltages = {"probe": SMALL_V, "feed": 0.0} | ({"rear": 0.0} if opposite else {})
    solution = solve_bipolar(problem, voltages)
    current_A = -solution.current_mA_per_cm2["probe"] * 1e-3 * problem.cell_area_cm2
    transfer_cm = math.sqrt(RHO * 1e-3 / SHEET)
    share, d = (0.5, LENGTH_UM * 0.5e-4) if both_sides else (1.0, LENGTH_UM * 1e-4)
    contact = share * math.sqrt(RHO * 1e-3 * SHEET) / math.tanh(d / transfer_cm)
    assert contact == pytest.approx(0.4408237 if both_sides else 0.5542477, rel=1e-6)
    between = share * SHEET * GAP_UM * 1e-4
    assert SMALL_V / current_A - between == pytest.approx(contact, rel=1e-5)
    if not opposite:  # all of V I is dissipated in contact and sheet
        parts = solution.losses.sum_of("sheet") + solution.losses.sum_of("contact")
        assert parts == pytest.approx(SMALL_V * current_A * 1e3 / problem.cell_area_cm2, rel=1e-6)


# Strip on a slab with an ideal back plane, by conformal mapping. Half cell 0 < x < L, height h, contact 0 < x < a: with
# K(k1)/K(√(1 − k1²)) = L/h and κ = k1 sn(K(k1) a/L, k1), resistance × conductivity × depth = K(√(1 − κ²))/K(κ).


def strip_resistance(L, h, a):
    """k1 from its nome exp(−πh/L) by Jacobi's theta series."""
    nome, n = math.exp(-math.pi * h / L), np.arange(1, 60)
    theta2 = 2 * nome**0.25 * (1 + (nome ** (n * (n + 1))).sum())
    parameter = (theta2 / (1 + 2 * (nome ** (n * n)).sum())) ** 4
    kappa2 = parameter * ellipj(ellipk(parameter) * a / L, parameter)[0] ** 2
    return ellipkm1(kappa2) / ellipk(kappa2)


STRIPS = [
    (100.0, 100.0, 50.0, 1.2200415913), (500.0, 180.0, 20.0, 1.9958805835), (750.0, 150.0, 25.0, 1.7393246179),
    (1000.0, 200.0, 100.0, 1.0663596264),
]  # fmt: skip


def resistor(kind, pitch_um, thickness_um, patch, pitch_y_um=None, **fineness):
    """Conductivity (1/Ω·cm) and conductance (S, in 2-D S per cm) between a patch and the full rear."""
    base = constant_base(doping_type=kind, thickness_um=thickness_um)
    rear = fc.Surface(contact=fc.Contact("rear"))
    cell = fc.UnitCell(base, pitch_um, pitch_y_um, front=fc.Face(fc.Surface(), [patch]), rear=rear)
    problem = fc.problem(cell, **fineness)
    solution = solve_bipolar(problem, {"front": -SMALL_V, "rear": 0.0})
    eq = base.equilibrium()
    conductivity = ELEMENTARY_CHARGE_C * (eq.p0 * eq.mu_p if kind == "p" else eq.n0 * eq.mu_n)
    current = solution.current_mA_per_cm2
    assert current["front"] == pytest.approx(-current["rear"], rel=1e-10)
    return conductivity, current["front"] * 1e-3 * problem.cell_area_cm2 / SMALL_V


@pytest.mark.parametrize(("L", "h", "a", "expected"), STRIPS)
@pytest.mark.parametrize("kind", ["p", "n"])
def test_strip_contact_on_a_slab(kind, L, h, a, expected):
    assert strip_resistance(L, h, a) == pytest.approx(expected, rel=1e-9)
    patch = fc.Strip("contact", 2 * a, contact=fc.Contact("front"))
    conductivity, conductance = resistor(kind, 2 * L, h, patch)
    assert conductivity / conductance == pytest.approx(expected, rel=3e-4)


# Disc on a laterally infinite slab of thickness h, ideal back plane: R a/ρ from the Fredholm equation of the mixed
# boundary value problem, solved independently of this package. The half-space limit is ρ/4a (R. Holm, Electric
# Contacts, 1967; from memory).


@pytest.mark.slow
@pytest.mark.parametrize(("ratio", "expected"), [(0.25, 0.2227843658), (0.5, 0.1975412163), (1.0, 0.1566630921)])
def test_disc_contact_on_a_slab(ratio, expected):
    h = 100.0
    a = ratio * h
    pitch = 2 * (a + 6 * h)  # what spreads sideways decays as exp(−πx/2h)
    patch = fc.Dot("contact", 2 * a, contact=fc.Contact("front"))
    conductivity, conductance = resistor("p", pitch, h, patch, pitch)
    resistance = 1 / (4 * conductance)  # a quarter is modelled
    assert resistance * conductivity * a * 1e-4 == pytest.approx(expected, rel=4e-3)
