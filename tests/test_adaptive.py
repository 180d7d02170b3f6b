"""Refinement of imported meshes where it matters: names, shapes and balance survive, and the error bars hold."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from simple_cells import BARE_METAL, VT, box_mesh, constant_base, junction
from verification.test_bounds import DARK_V, dark_current_mA_per_cm2, random_strip, strip_resistance

import fem_carriers as fc
from fem_carriers.analysis import curve
from fem_carriers.analysis.accuracy import Target, refine
from fem_carriers.analysis.climb import CurveClimb, adapted, is_adaptive
from fem_carriers.analysis.tracer import key_points
from fem_carriers.constants import ELEMENTARY_CHARGE_C as Q
from fem_carriers.errors import MeshError
from fem_carriers.meshing.adaptive import largest_share, refined_by, refined_cells
from fem_carriers.meshing.checkup import check_mesh
from fem_carriers.meshing.mesh import cell_sizes
from fem_carriers.transport.indicator import cell_errors, combined

SAMPLES = Path(__file__).parent.parent / "meshes"
D = 30.0  # cm²/s


def quality(mesh):
    """Size over the mean squared edge, 1 for a regular triangle or tet: 4√3 A/Σl² and 12 (3V)^(2/3)/Σl²."""
    p, t = mesh.cells.p, mesh.cells.t
    pairs = [(i, j) for i in range(len(t)) for j in range(i)]
    squares = sum(((p[:, t[i]] - p[:, t[j]]) ** 2).sum(axis=0) for i, j in pairs)
    size = cell_sizes(mesh.cells)
    return 4 * math.sqrt(3) * size / squares if len(t) == 3 else 12 * (3 * size) ** (2 / 3) / squares


def near(mesh, place_um, count):
    """The cells closest to a place."""
    centre = mesh.points_um[:, mesh.cells.t].mean(axis=1)
    return np.argsort(np.linalg.norm(centre - np.array(place_um)[:, None], axis=0))[:count]


@pytest.mark.parametrize(
    ("file", "place_um"),
    [
        ("finger_cell_2d.msh", (25, 180)),
        ("finger_over_dot_3d.msh", (20, 100, 150)),
        ("oblique_edge_3d.msh", (60, 75, 100)),
    ],
)
def test_names_areas_and_shapes_survive_refinement(file, place_um):
    first = mesh = fc.read_mesh(SAMPLES / file, length_unit="um")
    for _ in range(10):
        mesh, parent = refined_cells(mesh, near(mesh, place_um, 12))
        assert parent.max() < parent.size
    check_mesh(mesh)
    assert list(mesh.surfaces) == list(first.surfaces)
    for name in first.surfaces:
        assert mesh.surface_area_cm2(name) == pytest.approx(first.surface_area_cm2(name), rel=1e-13)
        outside = mesh.cells.f2t[1, mesh.surfaces[name]] < 0
        assert outside.all()
    assert mesh.volume_cm3("base") == pytest.approx(first.volume_cm3("base"), rel=1e-13)
    assert cell_sizes(mesh.cells).min() < cell_sizes(first.cells).min() / 8
    assert quality(mesh).min() > 0.6 * quality(first).min()


@pytest.mark.parametrize("kind", ["triangle", "tetra"])
def test_inner_surfaces_and_volumes_survive_refinement(kind):
    """A box of two volumes with the interface between them named."""
    axes = [np.linspace(0, 100, 5)] * (2 if kind == "triangle" else 3)
    plain = box_mesh(kind, *axes)
    centre = plain.cells.p[-1, plain.cells.facets].mean(axis=0) * 1e4
    inner = np.flatnonzero(
        (np.ptp(plain.cells.p[-1, plain.cells.facets], axis=0) < 1e-9) & (np.abs(centre - 50) < 1e-3)
    )
    above = plain.cells.p[-1, plain.cells.t].mean(axis=0) * 1e4 > 50
    mesh = fc.Mesh(
        plain.cells,
        dict(plain.surfaces) | {"interface": inner},
        {"upper": np.flatnonzero(above), "lower": np.flatnonzero(~above)},
    )
    fine = refined_by(mesh, (np.arange(above.size) % 7 == 0).astype(float), 4.0)
    assert fine.cells.t.shape[1] >= 4 * above.size
    assert fine.inner_share("interface") == 1
    for name in mesh.surfaces:
        assert fine.surface_area_cm2(name) == pytest.approx(mesh.surface_area_cm2(name), rel=1e-13)
    for name, cells in fine.volumes.items():
        assert fine.volume_cm3(name) == pytest.approx(mesh.volume_cm3(name), rel=1e-13)
        height = fine.cells.p[-1, fine.cells.t[:, cells]].mean(axis=0) * 1e4
        assert ((height > 50) == (name == "upper")).all()
    check_mesh(fine)


def test_quads_are_refined_as_a_whole_only():
    mesh = box_mesh("quad", *[np.linspace(0, 100, 3)] * 2)
    with pytest.raises(MeshError, match="whole mesh"):
        refined_cells(mesh, np.array([0]))


def test_the_fewest_cells_that_make_up_a_share():
    assert set(largest_share(np.array([1.0, 5.0, 2.0, 2.0]), 0.65)) == {1, 2}


def shaken_strip(L, h, a, surfaces, **changes):
    """Triangles at random over the half cell; "strip" on 0 < x < a at the top."""
    rng = np.random.default_rng(0)
    x = np.unique(np.concatenate([np.linspace(0, a, 2 + int(3 * a / L)), np.linspace(a, L, 5)]))
    step = 0.15e-4 * min(np.diff(x).min(), h / 3)

    def move(p):
        inner = ((p > 1e-9) & (p < p.max(axis=1, keepdims=True) - 1e-9)).all(axis=0)
        return p + inner * rng.uniform(-step, step, p.shape)

    plain = box_mesh("triangle", x, np.linspace(0, h, 4), move=move)
    top = plain.surfaces["z_max"]
    left = plain.cells.p[0, plain.cells.facets[:, top]].mean(axis=0) * 1e4 < a
    mesh = fc.Mesh(plain.cells, {"strip": top[left], "rear": plain.surfaces["z_min"]}, plain.volumes)
    return fc.Problem(mesh, {"base": constant_base(D, 10.0, **changes)}, surfaces, cell_area_cm2=L * 1e-4)


def holds(uncertainty, name, truth):
    """Bars over errors on the meshes from the fourth on; all must be above one, and few far above."""
    ratios = [u.bars[name] / abs(u.values[name] - truth) for u in uncertainty.levels[3:]]
    assert min(ratios) >= 1
    assert np.median(ratios) < 8


@pytest.mark.parametrize("seed", range(50, 56))
def test_bars_of_strip_contacts_on_triangles(seed):
    """By conformal mapping (classical), see `verification/test_bounds.py`."""
    sizes = random_strip(seed)
    problem = shaken_strip(*sizes, {"strip": junction("metal"), "rear": BARE_METAL}).changed(
        volumes={"base": constant_base(D)}
    )
    solution = fc.solve_excess(problem, DARK_V, target_error_percent=0.02, progress=False)
    truth = dark_current_mA_per_cm2(problem, 1 / strip_resistance(*sizes))
    holds(solution.uncertainty, "collected_metal_mA_per_cm2", truth)
    assert solution.uncertainty["collected_metal_mA_per_cm2"] < 2e-4 * abs(truth)
    assert solution.uncertainty.levels[-1].unknowns < 6000
    assert abs(solution.ledger.residual_mA_per_cm2) < 1e-10 * abs(truth)


@pytest.mark.parametrize("seed", [60, 61])
def test_bars_of_majority_resistors_in_the_bipolar_form(seed):
    """A dark piece between two ideal contacts of the base's own type: Ohm's law, resistance by conformal mapping."""
    sizes = random_strip(seed)
    ideal = lambda name: fc.Surface(contact=fc.Contact(name, contact_resistivity_mohm_cm2=0))
    problem = shaken_strip(*sizes, {"strip": ideal("top"), "rear": ideal("bottom")})
    solution = fc.solve_bipolar(problem, {"top": 1e-3, "bottom": 0.0}, target_error_percent=0.05, progress=False)
    conductivity = Q * problem.equilibrium.mu_p * problem.equilibrium.p0
    truth = 1e-3 * conductivity / strip_resistance(*sizes) / problem.cell_area_cm2 * 1e3
    holds(solution.uncertainty, "current_bottom_mA_per_cm2", truth)
    assert solution.current_mA_per_cm2["bottom"] == pytest.approx(truth, rel=5e-4)


def test_bars_of_a_corner_contact_on_tets():
    """20 × 75 µm on 600 × 300 × 180 µm, diffusion length 500 µm: collected share 0.29220, the limit of five independent
    families of meshes (hexahedra, tets, uniform and adaptive)."""
    axes = [np.array(a, dtype=float) for a in ([0, 20, 60, 150, 300, 600], [0, 75, 150, 300], [0, 60, 120, 180])]
    plain = box_mesh("tetra", *axes)
    x, y, z = plain.cells.p[:, plain.cells.facets].mean(axis=1) * 1e4
    pad = np.flatnonzero((z > 180 - 1e-6) & (x < 20) & (y < 75))
    mesh = fc.Mesh(plain.cells, {"pad": pad}, plain.volumes)
    base = constant_base(D, 500e-4**2 / D * 1e6)
    problem = fc.Problem(mesh, {"base": base}, {"pad": junction("metal")}, fc.Light.uniform(1e13), cell_area_cm2=1.8e-3)
    solution = fc.solve_excess(problem, target_error_percent=2.0, progress=False)
    holds(solution.uncertainty, "collected_metal_mA_per_cm2", 0.29220 * solution.ledger.generated_mA_per_cm2)
    assert solution.ledger.relative_residual < 1e-10
    assert solution.problem.mesh.surface_area_cm2("pad") == pytest.approx(20 * 75e-8, rel=1e-12)
    check_mesh(solution.problem.mesh)


def finger_cell():
    """The sample section under sunlight; the shadow of its finger ends within facets of the rear."""
    wafer = fc.Base("p", resistivity_ohm_cm=1.0, thickness_um=180, lifetime_us=300)
    layer = fc.DopedLayer("n", 120)
    finger = fc.Surface(J0_fA_per_cm2=600, layer=layer, contact=fc.Contact("front", contact_resistivity_mohm_cm2=2))
    surfaces = {
        "front_passivated": fc.Surface(J0_fA_per_cm2=30, layer=layer),
        "front_finger": finger,
        "rear": fc.Surface(J0_fA_per_cm2=50, contact=fc.Contact("rear", contact_resistivity_mohm_cm2=5)),
    }
    mesh = fc.read_mesh(SAMPLES / "finger_cell_2d.msh", length_unit="um")
    return fc.Problem(mesh, {"base": wafer}, surfaces, fc.Light.sunlight(0.03), "front_passivated", 600e-4)


def test_generation_does_not_depend_on_the_mesh_where_it_does_not_follow_the_shadow():
    problem = finger_cell()
    first = fc.solve_bipolar(problem)
    finer = adapted(problem, combined([cell_errors(first.state)]), None)
    second = fc.solve_bipolar(finer)
    assert finer.space.size > problem.space.size
    assert second.optics.generated == pytest.approx(first.optics.generated, rel=1e-12)
    assert second.optics.escaped == pytest.approx(first.optics.escaped, rel=1e-11)


def test_a_curve_on_an_adaptive_mesh():
    """Bars of all headline numbers, against the same with a sixth of the error."""
    numbers = {}
    for percent in (0.02, 0.003):
        climb = CurveClimb(None)
        keys, bars = refine(
            finger_cell(),
            lambda meshed, before: key_points(meshed, before),
            curve._numbers,
            climb.finer,
            Target(percent),
            estimates=climb.estimates,
            progress=False,
        )
        numbers[percent] = bars.levels[-1]
    coarse, fine = numbers[0.02], numbers[0.003]
    assert set(coarse.bars) >= {"jsc_mA_per_cm2", "voc_V", "fill_factor_percent", "efficiency_percent"}
    for name, value in coarse.values.items():
        assert abs(value - fine.values[name]) <= coarse.bars[name] + fine.bars[name]
        assert coarse.bars[name] <= 2e-4 * abs(value)
    assert keys.open_circuit.voltage_V > 10 * VT


def test_built_meshes_and_quads_are_not_refined_cell_by_cell():
    cell = fc.UnitCell(constant_base(D), 400, front=junction("metal"), light=fc.Light.uniform(1e16))
    assert not is_adaptive(fc.problem(cell))
    assert is_adaptive(finger_cell())
