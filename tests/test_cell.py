"""Cell description: what is accepted, what is refused, and how."""

import math
import pickle

import numpy as np
import pytest

import fem_carriers as fc
from fem_carriers.constants import ELEMENTARY_CHARGE_C

WAFER = fc.Base("p", doping_per_cm3=1e16, thickness_um=180, lifetime_us=100)
EMITTER = fc.DopedLayer("n", 100)
PLAIN = fc.Surface(J0_fA_per_cm2=10)


def refused(make, *phrases):
    """The refusal's text; every phrase must be in it."""
    with pytest.raises(fc.InputError) as caught:
        make()
    text = str(caught.value)
    for phrase in phrases:
        assert phrase in text, text
    return text


def cell(*patches, pitch=1400.0, pitch_y=None, **more):
    return fc.UnitCell(WAFER, pitch, pitch_y, front=fc.Face(PLAIN, patches), **more)


@pytest.mark.parametrize(
    ("change", "phrases"),
    [
        ({"lifetime_us": -5}, ["lifetime_us = -5", "above 0"]),
        ({"doping_per_cm3": None}, ["none of resistivity_ohm_cm, doping_per_cm3"]),
        ({"resistivity_ohm_cm": 1}, ["resistivity_ohm_cm = 1 and doping_per_cm3"]),
        ({"lifetime_us": None}, ["none of lifetime_us", "math.inf"]),
        ({"tau_n0_us": 1, "tau_p0_us": 1}, ["exactly one of lifetime_us"]),
        ({"lifetime_us": None, "tau_n0_us": 1}, ["tau_p0_us not given"]),
        ({"temperature_K": 600}, ["600", "for the silicon model"]),
        ({"material": "generic"}, ["mobility_n_cm2_per_Vs not given", "ni_per_cm3 not given", "auger = 'silicon'"]),
        ({"doping_type": "x"}, ["'p' or 'n'"]),
        ({"thickness_um": math.nan}, ["thickness_um = nan"]),
        ({"auger": (1e-31,)}, ["pair (Cn, Cp)"]),
    ],
)
def test_base_refuses(change, phrases):
    given = {"doping_type": "p", "doping_per_cm3": 1e16, "thickness_um": 180, "lifetime_us": 100}
    refused(lambda: fc.Base(**(given | change)), *phrases)


def test_all_problems_of_one_input_are_reported_at_once():
    text = refused(lambda: fc.Base("q", lifetime_us=-5, thickness_um=0), "4 problems")
    assert text.count("allowed is") == 4


def test_typed_resistivity_results_exactly():
    base = fc.Base("p", resistivity_ohm_cm=1.0, lifetime_us=100, temperature_K=300)
    eq = base.equilibrium()
    assert 1 / (ELEMENTARY_CHARGE_C * eq.mu_p * eq.p0) == pytest.approx(1.0, rel=1e-9)


@pytest.mark.parametrize("kind", ["p", "n"])
def test_equilibrium_obeys_mass_action_and_neutrality(kind):
    for doping in (0.0, 1e10, 1e16):
        eq = fc.Base(kind, doping_per_cm3=doping, lifetime_us=1).equilibrium()
        assert eq.n0 * eq.p0 == pytest.approx(eq.ni**2, rel=1e-12)
        assert abs(eq.n0 - eq.p0) == pytest.approx(doping, rel=1e-9, abs=1e-3)


@pytest.mark.parametrize(
    ("patches", "more", "phrases"),
    [
        ([fc.Strip("f", 2000)], {}, ["width_um = 2000", "at most the repeat length 1400"]),
        ([fc.Strip("a", 40, 300), fc.Strip("b", 40, 320)], {}, ["front.b crosses front.a partly"]),
        ([fc.Dot("d", 30)], {}, ["a Dot in two dimensions", "pitch_y_um"]),
        ([fc.Strip("f", 40, along="x")], {}, ["along x in two dimensions"]),
        ([fc.Strip("f", 40, 10)], {}, ["crosses the mirror plane x = 0", 'symmetry="periodic"']),
        ([fc.Strip("f", 40, -300)], {}, ["outside of the modelled piece"]),
        ([fc.Strip("f", 40, spacing_um=300)], {}, ["a divisor of the period", "280 or 350"]),
        ([fc.Polygon("t", [(0, 0), (30, 0), (-10, 50)])], {"pitch_y": 900.0}, ["crosses the mirror plane x = 0"]),
        ([fc.Dot("d", 30, spacing_x_um=280, spacing_y_um=300, staggered=True)], {"pitch_y": 900.0}, ["staggered rows"]),
        ([fc.Strip("e", 90, layer=EMITTER, srv_cm_per_s=10)], {}, ["srv_cm_per_s = 10", "type opposite to the base"]),
        ([], {"sides": {"x_mid": PLAIN}}, ["'x_mid'", "x_min"]),
        ([], {"sides": {"x_max": PLAIN}, "symmetry": "periodic"}, ["both sides of an axis"]),
        ([], {"light": 3}, ["light = 3", "fc.Light.sunlight()"]),
        ([], {"symmetry": "quarter"}, ["'half' or 'periodic'"]),
    ],
)
def test_unit_cell_refuses(patches, more, phrases):
    refused(lambda: cell(*patches, **more), *phrases)


def test_polygon_refuses_an_outline_that_crosses_itself():
    refused(lambda: fc.Polygon("p", [(0, 0), (9, 9), (9, 0), (0, 9)]), "crosses or touches itself", "4.5")


def test_surface_and_light_refuse():
    refused(lambda: fc.Surface(J0_fA_per_cm2=1, srv_cm_per_s=1), "one recombination law")
    refused(lambda: fc.Contact("front", -1), "contact_resistivity_mohm_cm2 = -1")
    refused(lambda: fc.DopedLayer("n", 0), "sheet_resistance_ohm_per_sq = 0")
    refused(lambda: fc.Light.sunlight(1.5), "reflectance = 1.5")
    refused(lambda: fc.Light.sunlight(path="twice"), "'single_pass' or 'rear_mirror' or 'lambertian'")
    refused(lambda: fc.Light.monochromatic(flux_per_cm2_s=1e17), "none of wavelength_nm, absorption_per_cm")
    refused(lambda: fc.Light.depth_profile([0, 1, 1], [1, 1, 1]), "no repeats")
    refused(lambda: fc.Light.function(3), "f(x_um, y_um, z_um)")
    refused(lambda: fc.Spot(-1), "diameter_um = -1")
    refused(lambda: fc.Face(PLAIN, [fc.Strip("a", 1), fc.Strip("a", 2)]), "2 patches named 'a'")


def test_bare_contact_beside_a_junction_is_warned_of():
    metal = fc.Strip("metal", 40, layer=None, contact=fc.Contact("front"))
    with pytest.warns(fc.ModelWarning, match="contact on the bare base beside the junction"):
        cell(fc.Strip("emitter", 100, layer=EMITTER), metal)


def test_a_patch_inherits_what_it_does_not_state():
    made = cell(
        fc.Strip("emitter", 200, layer=EMITTER, J0_fA_per_cm2=40),
        fc.Strip("metal", 40, J0_fA_per_cm2=500, contact=fc.Contact("front", 2)),
    )
    regions = {r.name: r for r in made.layout("front").regions}
    assert regions["front.metal"].surface.layer == EMITTER
    assert regions["front.metal"].surface.J0_fA_per_cm2 == 500
    assert regions["front.emitter"].surface == fc.Surface(J0_fA_per_cm2=40, layer=EMITTER)
    areas = {name: r.shape.area * 1e-8 for name, r in regions.items()}  # 2-D: cm² per cm of depth
    assert areas == pytest.approx({"front": 0.06, "front.emitter": 0.008, "front.metal": 0.002})


def test_opaque_width_may_differ_from_the_contact_width():
    made = cell(fc.Strip("f", 40, opaque_width_um=60, contact=fc.Contact("front")))
    assert made.layout("front").opaque.area == pytest.approx(30 * 1e4)
    assert cell(fc.Strip("f", 40)).layout("front").opaque.area == 0
    assert cell(fc.Strip("f", 40, opaque_width_um=60)).layout("front").opaque.area == pytest.approx(30 * 1e4)


def test_repeats_within_the_period_and_their_areas():
    made = fc.UnitCell(
        WAFER, 1200, 800, rear=fc.Face(PLAIN, [fc.Dot("d", 60, spacing_x_um=300, spacing_y_um=200, staggered=True)])
    )
    dots = {r.name: r.shape.area for r in made.layout("rear").regions}["rear.d"]
    assert dots == pytest.approx(4 * 4 / 4 * math.pi * 30**2, rel=1e-12)  # 4 × 4 dots per period, a quarter modelled
    whole = fc.UnitCell(WAFER, 1200, 800, rear=made.rear, symmetry="periodic")
    area = {r.name: r.shape.area for r in whole.layout("rear").regions}["rear.d"]
    assert area == pytest.approx(4 * dots, rel=1e-12)


def test_misaligned_finger_needs_the_whole_period():
    finger = fc.Strip("f", 40, 10, contact=fc.Contact("front"))
    made = cell(finger, symmetry="periodic")
    assert made.frame.x == (-700, 700)
    assert made.periodic_axes == ("x",)


def test_descriptions_travel_to_other_processes():
    made = cell(fc.Strip("f", 40, layer=EMITTER, contact=fc.Contact("front")), light=fc.Light.sunlight(0.03))
    assert pickle.loads(pickle.dumps(made)) == made


def test_depth_profile_from_csv(tmp_path):
    path = tmp_path / "profile.csv"
    path.write_text("depth_um,rate_per_cm3_s\n0,1e19\n10,5e18\n180,0\n")
    source = fc.Light.depth_profile(path).sources[0]
    assert source.rate_per_cm3_s == (1e19, 5e18, 0)
    path.write_text("depth,rate\n0,1\n")
    refused(lambda: fc.Light.depth_profile(path), "columns depth_um,rate_per_cm3_s")
    path.write_text("depth_um,rate_per_cm3_s\n0,x\n1,2\n")
    refused(lambda: fc.Light.depth_profile(path), "numbers only")


def test_lights_add():
    both = fc.Light.uniform(1e18) + fc.Light.function(lambda x, y, z: np.ones_like(x))
    assert len(both.sources) == 2


@pytest.mark.parametrize(
    ("front", "rear", "phrases"),
    [
        ({"layer": EMITTER, "contact": fc.Contact("a")}, {"contact": fc.Contact("a")}, ["layers of both polarities"]),
        ({"layer": EMITTER, "contact": fc.Contact("a")}, {}, ["no path for majority carriers"]),
        ({}, {"contact": fc.Contact("a")}, ["no path for minority carriers"]),
    ],
)
def test_impossible_terminals_are_refused_before_meshing(front, rear, phrases, monkeypatch):
    monkeypatch.setattr("fem_carriers.transport.build.mesh_unit_cell", None)  # any attempt to mesh would fail
    made = fc.UnitCell(WAFER, 1400, front=fc.Surface(**front), rear=fc.Surface(J0_fA_per_cm2=1, **rear))
    refused(lambda: fc.current_voltage(made), *phrases)
    refused(lambda: fc.solve_bipolar(made), *phrases)


def test_bare_metal_beside_a_junction_is_refused_before_meshing(monkeypatch):
    monkeypatch.setattr("fem_carriers.transport.build.mesh_unit_cell", None)
    strips = [
        fc.Strip("emitter", 200, layer=EMITTER, contact=fc.Contact("a", 1)),
        fc.Strip("metal", 100, 150, J0_fA_per_cm2=None, srv_cm_per_s=math.inf, contact=fc.Contact("b", 1)),
    ]
    with pytest.warns(fc.ModelWarning):
        made = cell(*strips)
    refused(lambda: fc.current_voltage(made), "bare metal (infinite srv) that touches", "a gap")
