"""Inputs that once slipped through: refused, or handled as they must be."""

import math

import numpy as np
import pytest

import fem_carriers as fc

EMITTER = fc.DopedLayer("n", 120)
BASE = fc.Base("p", doping_per_cm3=1e16, thickness_um=100, lifetime_us=50)
SUN = fc.Light.monochromatic(flux_per_cm2_s=2e17, wavelength_nm=800)


def cell(**changes):
    given = {
        "front": fc.Face(
            fc.Surface(J0_fA_per_cm2=30, layer=EMITTER),
            [fc.Strip("finger", 30, J0_fA_per_cm2=300, contact=fc.Contact("front", 1))],
        ),
        "rear": fc.Surface(J0_fA_per_cm2=50, contact=fc.Contact("rear", 1)),
        "light": SUN,
    }
    return fc.UnitCell(BASE, 600, **(given | changes))


@pytest.fixture(scope="module")
def problem():
    return fc.problem(cell(), first_step_um=2, growth=3)


@pytest.mark.parametrize("voltage", [math.nan, math.inf, 25.0, "0.3", None, {}, {"front": 0.1, "back": 0}])
@pytest.mark.parametrize("call", [fc.solve_excess, lambda p, v: fc.collection_probability(p, "front", v)])
def test_voltages_that_are_none(problem, call, voltage):
    with pytest.raises(fc.InputError, match="voltage"):
        call(problem, voltage)


def test_a_voltage_far_above_the_implied_one_is_refused_at_once(problem):
    with pytest.raises(fc.SolverError, match="far above"):
        fc.solve_bipolar(problem, 5.0)


def test_a_bias_without_contacts_is_refused():
    bare = fc.problem(cell(front=fc.Surface(J0_fA_per_cm2=5), rear=fc.Surface(J0_fA_per_cm2=5)))
    for solve in (fc.solve_bipolar, fc.solve_excess):
        with pytest.raises(fc.InputError, match="without"):
            solve(bare, 0.5)


@pytest.mark.parametrize("sheet", [1, 10, 200])
def test_floating_layers_of_any_sheet_resistance_start(sheet):
    strips = [
        fc.Strip("floating", 230, 160, J0_fA_per_cm2=200, layer=fc.DopedLayer("n", sheet)),
        fc.Strip("line", 60, srv_cm_per_s=1e5, contact=fc.Contact("rear", 1)),
    ]
    made = cell(rear=fc.Face(fc.Surface(J0_fA_per_cm2=8), strips))
    solution = fc.solve_bipolar(fc.problem(made, first_step_um=1, growth=3), 0.0)
    assert solution.current_mA_per_cm2["front"] < 0


def test_collection_efficiency_counts_minority_carriers_once(problem):
    solution = fc.solve_bipolar(problem, 0.0)
    assert 50 < solution.collection_efficiency_percent < 100
    dark = fc.solve_bipolar(problem.changed(light=None), 0.3)
    assert math.isnan(dark.collection_efficiency_percent)


@pytest.mark.filterwarnings("ignore::fem_carriers.ModelWarning")
def test_power_on_an_imported_mesh_refers_to_the_cell_area(problem):
    surfaces = {name: s for name, s in problem.surfaces.items() if name in problem.mesh.surfaces}
    imported = fc.Problem(
        problem.mesh, problem.volumes, surfaces, light=SUN, lit_surface="front", cell_area_cm2=problem.cell_area_cm2
    )
    described, found = (fc.solve_excess(p).optics for p in (problem, imported))
    assert found.incident_power_mW_per_cm2 == pytest.approx(described.incident_power_mW_per_cm2, rel=1e-9)
    assert found.shaded == pytest.approx(described.shaded, rel=1e-9)


def test_layers_absorb_within_the_base_only():
    thick = fc.DopedLayer("n", 120, absorbing_depth_um=1000, collection=0)
    with pytest.raises(fc.InputError, match="at most the thickness"):
        cell(front=fc.Surface(layer=thick))


def test_lateral_losses_include_bare_metal():
    strips = [fc.Strip("line", 60, J0_fA_per_cm2=None, srv_cm_per_s=math.inf, contact=fc.Contact("rear"))]
    front = fc.Face(fc.Surface(J0_fA_per_cm2=5), [fc.Strip("strip", 60, layer=EMITTER, contact=fc.Contact("front"))])
    made = cell(front=front, rear=fc.Face(fc.Surface(J0_fA_per_cm2=5), strips))
    with pytest.warns(fc.ModelWarning):
        solution = fc.solve_excess(fc.problem(made))
    sums = fc.lateral_losses(solution).sum()
    generated = sums["generated_mA_per_cm2"]
    assert generated == pytest.approx(solution.ledger.generated_mA_per_cm2, rel=1e-9)
    lost = sums["lost_in_bulk_mA_per_cm2"] + sums["lost_at_surfaces_mA_per_cm2"]
    assert sums["collected_mA_per_cm2"] + lost == pytest.approx(generated, rel=1e-6)


def test_nothing_repeats_beyond_a_real_edge():
    edges = {"x_min": fc.Surface(srv_cm_per_s=1e5), "x_max": fc.Surface(srv_cm_per_s=1e5)}
    finger = fc.Strip("finger", 40, center_um=290, contact=fc.Contact("front"))
    made = cell(front=fc.Face(fc.Surface(layer=EMITTER), [finger]), sides=edges, symmetry="periodic")
    shape = {r.name: r.shape for r in made.layout("front").regions}["front.finger"]
    assert shape.bounds[0] == pytest.approx(270)


@pytest.mark.parametrize(
    ("mask", "phrase"),
    [
        (fc.LitRectangle((0, 200), (0, 100)), "limit in y"),
        (fc.HalfPlane(100, axis="y"), "limit in y"),
        (fc.LitRectangle((700, 800)), "outside of the modelled piece"),
    ],
)
def test_masks_that_let_no_light_in(mask, phrase):
    with pytest.raises(fc.InputError, match=phrase):
        cell(light=fc.Light.uniform(1e18, mask=mask))


def test_a_mask_between_mesh_points_is_refused(problem):
    narrow = fc.Light.monochromatic(flux_per_cm2_s=1e17, wavelength_nm=800, mask=fc.LitRectangle((101.0, 101.01)))
    with pytest.raises(fc.MeshError, match="too coarse for its mask"):
        fc.solve_bipolar(problem.changed(light=narrow), 0.0)


def test_surfaces_of_imported_meshes_obey_the_same_rules(problem):
    surfaces = dict(problem.surfaces) | {"front": fc.Surface(srv_cm_per_s=10, layer=EMITTER)}
    with pytest.raises(fc.InputError, match="type opposite to the base"):
        problem.changed(surfaces=surfaces)
    with pytest.raises(fc.InputError, match="where there is no junction"):
        cell(rear=fc.Surface(shunt_ohm_cm2=100))


def test_layers_that_do_not_conduct_sideways_are_no_equipotentials():
    made = cell(
        front=fc.Face(fc.Surface(layer=fc.DopedLayer("n", math.inf)), [fc.Strip("f", 30, contact=fc.Contact("a"))])
    )
    with pytest.raises(fc.InputError, match="infinite sheet resistance"):
        fc.solve_excess(fc.problem(made))


def test_only_stated_contacts_shade():
    window = fc.Strip("window", 300, J0_fA_per_cm2=10)
    made = cell(front=fc.Face(fc.Surface(layer=EMITTER, contact=fc.Contact("front", 100)), [window]))
    assert made.layout("front").opaque.area == 0


@pytest.mark.parametrize(
    "call",
    [
        lambda p: fc.problem(BASE),
        lambda p: fc.solve_excess(BASE),
        lambda p: fc.current_voltage(p, 0.5),
        lambda p: fc.current_voltage(p, ["a"]),
        lambda p: fc.problem(cell(), first_step_um="1"),
        lambda p: fc.problem(cell(), growth="2"),
        lambda p: cell(sides=fc.Surface()),
        lambda p: fc.Light.sunlight([0.1, 0.2]),
        lambda p: fc.Light.depth_profile(3.0, 1e20),
        lambda p: fc.Light.monochromatic(flux_per_cm2_s=1, wavelength_nm=800, reflectance=((300, 1200), (0.1, 0.2))),
        lambda p: fc.solve_excess(p.changed(light=fc.Light.function(lambda x, y, z: np.inf + 0 * x))),
    ],
)
def test_wrong_kinds_are_refused_in_words(problem, call):
    with pytest.raises(fc.InputError, match="allowed"):
        call(problem)


def test_short_texts(problem):
    curve = fc.current_voltage(problem)
    assert len(repr(curve)) < 1000
    assert len(repr(curve.points)) < 2000
    assert "no light enters" in str(fc.current_voltage(problem.changed(light=None), [0.0, 0.3]))
