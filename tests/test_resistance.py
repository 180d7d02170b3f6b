"""Series resistance and contact current against what a one-dimensional cell must give."""

import numpy as np
import pytest

import fem_carriers as fc


def planar_cell(resistivity_mohm_cm2, kind="p", light=None):
    """Layers and metal over both faces: no current flows sideways; metal does not shade."""
    opposite = {"p": "n", "n": "p"}[kind]
    base = fc.Base(kind, doping_per_cm3=2e17, thickness_um=20, lifetime_us=10)
    contacts = {name: fc.Contact(name, resistivity_mohm_cm2) for name in ("front", "rear")}
    return fc.UnitCell(
        base,
        100,
        front=fc.Face(
            fc.Surface(layer=fc.DopedLayer(opposite, 100)),
            [fc.Strip("metal", 100, J0_fA_per_cm2=200, opaque_width_um=0, contact=contacts["front"])],
        ),
        rear=fc.Surface(J0_fA_per_cm2=200, layer=fc.DopedLayer(kind, 100), contact=contacts["rear"]),
        light=fc.Light.monochromatic(flux_per_cm2_s=2e17, wavelength_nm=700) if light is None else light,
    )


@pytest.mark.parametrize("kind", ["p", "n"])
def test_both_ways_find_the_contact_resistance(kind):
    """Rs = 2 ρc and the base's q⁻¹ W / (μ M), some mΩ·cm²; Wolf and Rauschenbach (1963) for two light levels."""
    problem = fc.problem(planar_cell(500, kind))
    eq = problem.equilibrium
    base_ohm_cm2 = 20e-4 / (1.602176634e-19 * 2e17 * (eq.mu_p if kind == "p" else eq.mu_n))
    losses = fc.current_voltage(problem).maximum_power.solution.losses
    parts = losses.series_resistance_ohm_cm2
    assert parts["contact front.metal"] == pytest.approx(0.5, rel=1e-9)
    assert parts["contact rear"] == pytest.approx(0.5, rel=1e-9)
    found = fc.series_resistance_two_lights_ohm_cm2(problem, 0.9)
    assert found == pytest.approx(1.0 + base_ohm_cm2, rel=0.01)
    assert base_ohm_cm2 < 0.005


def test_contact_current_adds_up_to_the_terminal():
    layer = fc.DopedLayer("n", 100)
    cell = fc.UnitCell(
        fc.Base("p", doping_per_cm3=1e16, thickness_um=160, lifetime_us=100),
        1000,
        front=fc.Face(
            fc.Surface(J0_fA_per_cm2=30, layer=layer),
            [fc.Strip("finger", 40, J0_fA_per_cm2=300, contact=fc.Contact("front", 1))],
        ),
        rear=fc.Surface(J0_fA_per_cm2=100, contact=fc.Contact("rear", 1)),
        light=fc.Light.sunlight(),
    )
    solution = fc.solve_bipolar(fc.problem(cell), 0.5)
    table = fc.contact_current(solution, "front.finger")
    x, density = table["x_um"].to_numpy(), table["contact_current_mA_per_cm2"].to_numpy()
    corners, middle = density[::2], density[1::2]
    simpson = np.sum(np.diff(x[::2]) * (corners[:-1] + 4 * middle + corners[1:]) / 6) / 500
    assert simpson == pytest.approx(solution.current_mA_per_cm2["front"], rel=1e-9)
    assert abs(density[-1]) > abs(density[0])  # crowded at the edge
    with pytest.raises(fc.InputError, match=r"a contact: front\.finger, rear"):
        fc.contact_current(solution, "front")


def test_ideal_contacts_have_no_finite_density():
    solution = fc.solve_bipolar(fc.problem(planar_cell(0)), 0.4)
    with pytest.raises(fc.InputError, match="infinite at the edge"):
        fc.contact_current(solution, "rear")


def test_lights_scale():
    light = fc.Light.sunlight() + fc.Light.uniform(1e18) + fc.Light.function(lambda x, y, z: 1e18 + 0 * x)
    light = light + fc.Light.depth_profile([0, 100], [1e19, 0])
    problem = fc.problem(planar_cell(1, light=light))
    half = problem.changed(light=light.scaled(0.5))
    full, dimmed = (fc.solve_bipolar(p, 0.0).ledger.generated_mA_per_cm2 for p in (problem, half))
    assert dimmed == pytest.approx(full / 2, rel=1e-12)
