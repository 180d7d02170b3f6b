"""Generation as a photon flux: totals are exact on any mesh, shading and masks take what they cover."""

import numpy as np
import pytest
from scipy.special import expit

import fem_carriers as fc
from fem_carriers.constants import ELEMENTARY_CHARGE_C
from fem_carriers.materials.optics import generation_mA_per_cm2
from fem_carriers.materials.spectrum import am15g
from fem_carriers.transport.excess import ExcessSystem
from fem_carriers.transport.photons import photon_flux

WAFER = fc.Base("p", doping_per_cm3=1e16, thickness_um=180, lifetime_us=100)
FLUX = 2.5e17


def generated(light, *patches, pitch=1000.0, pitch_y=None, rear=None, **fineness):
    """Assembled system and generated current, mA/cm²."""
    rear = fc.Surface(srv_cm_per_s=10) if rear is None else rear
    cell = fc.UnitCell(WAFER, pitch, pitch_y, front=fc.Face(fc.Surface(), patches), rear=rear, light=light)
    system = ExcessSystem(fc.problem(cell, **fineness))
    assert system.load.sum() > 0
    assert system.optics.generated == pytest.approx(
        1e3 * ELEMENTARY_CHARGE_C * system.load.sum() / cell.area_cm2, rel=1e-12
    )
    o = system.optics
    assert o.incident == pytest.approx(o.shaded + o.reflected + o.escaped + o.parasitic + o.generated, rel=1e-12)
    return system, o.generated


def current(flux):
    return 1e3 * ELEMENTARY_CHARGE_C * flux


@pytest.mark.parametrize("absorption", [10.0, 1e3, 1e6])
@pytest.mark.parametrize("enters", ["front", "rear"])
def test_single_pass_obeys_beer_and_lambert_on_a_coarse_mesh(absorption, enters):
    light = fc.Light.monochromatic(flux_per_cm2_s=FLUX, absorption_per_cm=absorption, enters=enters)
    _, found = generated(light, first_step_um=40)
    assert found == pytest.approx(current(FLUX) * -np.expm1(-absorption * 0.018), rel=1e-12)


def test_rear_mirror_doubles_the_path():
    light = fc.Light.monochromatic(flux_per_cm2_s=FLUX, absorption_per_cm=20, path="rear_mirror", reflectance=0.1)
    _, found = generated(light)
    assert found == pytest.approx(0.9 * current(FLUX) * -np.expm1(-2 * 20 * 0.018), rel=1e-12)


@pytest.mark.parametrize("path", ["single_pass", "rear_mirror", "lambertian"])
def test_sunlight_generates_what_the_absorptance_says(path):
    # the same integral over wavelength without any mesh, checked against published tables elsewhere
    _, found = generated(fc.Light.sunlight(path=path))
    assert found == pytest.approx(generation_mA_per_cm2(am15g(), 180, path), rel=1e-7)


def test_reflectance_table_takes_its_share():
    table = ([300, 600, 1200], [0.5, 0.0, 0.5])
    flat, _ = generated(fc.Light.sunlight(0.0))
    tabulated, _ = generated(fc.Light.sunlight(table))
    spectrum = am15g().between(280, 1450)
    share = np.interp(spectrum.wavelength_nm, *table)
    wanted = current(np.trapezoid(share * spectrum.photon_flux_per_cm2_s_nm, spectrum.wavelength_nm))
    assert tabulated.optics.reflected == pytest.approx(wanted, rel=1e-9)
    assert tabulated.optics.incident == pytest.approx(flat.optics.incident, rel=1e-12)


@pytest.mark.parametrize("collection", [0.0, 0.4, 1.0])
def test_an_absorbing_layer_loses_what_it_does_not_collect(collection):
    """(1 − collection)(1 − exp(−αd)) of the light that enters beside a finger, after reflection."""
    light = fc.Light.monochromatic(flux_per_cm2_s=FLUX, absorption_per_cm=1e4, reflectance=0.1)
    layer = fc.DopedLayer("n", 100, absorbing_depth_um=0.3, collection=collection)
    finger = fc.Strip("f", 100, contact=fc.Contact("front"))
    cell = fc.UnitCell(WAFER, 1000, front=fc.Face(fc.Surface(layer=layer), [finger]), light=light)
    o = ExcessSystem(fc.problem(cell)).optics
    entered = 0.9 * 0.9 * current(FLUX)
    assert o.parasitic == pytest.approx(entered * (1 - collection) * -np.expm1(-0.3), rel=1e-12)
    assert o.generated == pytest.approx(entered * -np.expm1(-180.0) - o.parasitic, rel=1e-12)
    assert o.incident == pytest.approx(o.shaded + o.reflected + o.escaped + o.parasitic + o.generated, rel=1e-12)


def test_metal_shades_its_optical_width():
    light = fc.Light.monochromatic(flux_per_cm2_s=FLUX, absorption_per_cm=1e3)
    system, found = generated(light, fc.Strip("f", 40, opaque_width_um=60, contact=fc.Contact("front")))
    assert found == pytest.approx(current(FLUX) * (1 - 60 / 1000) * -np.expm1(-18), rel=1e-12)
    assert system.optics.shaded == pytest.approx(current(FLUX) * 0.06, rel=1e-12)
    x = system.space.points_cm
    under_metal = (x[0] < 29e-4) & (system.load > 1e-6 * system.load.max())
    assert not under_metal.any()  # no light where the metal lies


def test_rear_metal_does_not_shade_the_front():
    rear = fc.Face(fc.Surface(), [fc.Strip("m", 200, contact=fc.Contact("rear"))])
    light = fc.Light.monochromatic(flux_per_cm2_s=FLUX, absorption_per_cm=1e3)
    assert generated(light, rear=rear)[1] == pytest.approx(current(FLUX) * -np.expm1(-18), rel=1e-12)


@pytest.mark.parametrize(
    ("mask", "share"),
    [
        (fc.HalfPlane(100), 0.2),
        (fc.HalfPlane(100, side="above"), 0.8),
        (fc.LitRectangle((50, 150)), 0.2),
        ([fc.LitRectangle((0, 50)), fc.LitRectangle((100, 150))], 0.2),
        (fc.Spot(100, (200, 0)), 0.2),
    ],
)
def test_masks_in_two_dimensions(mask, share):
    light = fc.Light.monochromatic(flux_per_cm2_s=FLUX, absorption_per_cm=1e3, mask=mask)
    assert generated(light)[1] == pytest.approx(share * current(FLUX) * -np.expm1(-18), rel=1e-12)


def test_spot_on_a_mesh_that_does_not_fit_it_keeps_its_exact_total():
    light = fc.Light.monochromatic(flux_per_cm2_s=FLUX, absorption_per_cm=1e3, mask=fc.Spot(200, (0, 0)))
    found = generated(light, pitch=1000, pitch_y=800)[1]
    assert found == pytest.approx(np.pi * 100**2 / (1000 * 800) * current(FLUX) * -np.expm1(-18), rel=1e-12)


def test_depth_profile_gives_its_integral_and_place():
    light = fc.Light.depth_profile([0, 10, 50], [1e19, 1e19, 0])
    system, found = generated(light)
    assert found == pytest.approx(current(1e19 * (10e-4 + 20e-4)), rel=1e-12)
    deep = system.space.points_cm[1] < (180 - 60) * 1e-4
    assert abs(system.load[deep]).sum() < 0.02 * system.load.sum()


def test_uniform_rate_is_not_shaded_unless_asked():
    finger = fc.Strip("f", 100, contact=fc.Contact("front"))
    assert generated(fc.Light.uniform(1e18), finger)[1] == pytest.approx(current(1e18 * 0.018), rel=1e-12)
    assert generated(fc.Light.uniform(1e18, shaded=True), finger)[1] == pytest.approx(
        0.9 * current(1e18 * 0.018), rel=1e-12
    )


def test_function_of_position_and_sum_of_lights():
    light = fc.Light.function(lambda x, y, z: 1e18 * (1 + x / 500) * (z / 180)) + fc.Light.uniform(1e18)
    assert generated(light)[1] == pytest.approx(current(1e18 * 0.018 * (1.5 * 0.5 + 1)), rel=1e-9)


def test_the_first_moment_of_the_load_is_that_of_beer_and_lambert():
    # ∫ G z dV with G = αΦ exp(−αd): W Φ (1 − e^−αW) − Φ [1/α − (W + 1/α) e^−αW], an integral from any table
    alpha, W = 200.0, 0.018
    light = fc.Light.monochromatic(flux_per_cm2_s=FLUX, absorption_per_cm=alpha)
    system, _ = generated(light)
    found = system.load @ system.space.points_cm[1] / (0.05)
    depth = FLUX * (1 / alpha - (W + 1 / alpha) * np.exp(-alpha * W))
    assert found == pytest.approx(W * FLUX * -np.expm1(-alpha * W) - depth, rel=1e-6)


def test_net_flux_is_monotonic_for_all_paths():
    for path in ("single_pass", "rear_mirror", "lambertian"):
        flux = photon_flux(fc.Light.sunlight(path=path).sources[0], WAFER, 0.018)
        values = flux.net(0.018 * expit(np.linspace(-12, 12, 200)))
        assert (np.diff(values) < 0).all()
        assert flux.power_mW_per_cm2 == pytest.approx(100.037, rel=1e-4)  # ASTM G173-03 total
