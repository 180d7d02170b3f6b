"""Guaranteed bounds of the collected current enclose every known answer, and their width is of the error's size.

Answers come from conformal mapping, from closed forms on a line and from the Motz problem; where there is none, from
the bounds themselves on a mesh with a fraction of their width.
"""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
import skfem
from simple_cells import BARE_METAL, box_mesh, constant_base, junction

import fem_carriers as fc
from fem_carriers.analysis.bounds import Bounds, collected_bounds
from fem_carriers.constants import ELEMENTARY_CHARGE_C as Q
from fem_carriers.errors import InputError
from fem_carriers.meshing.grading import graded_axis
from fem_carriers.meshing.triangles import triangulated

D = 30.0  # cm²/s
METAL = {"layer": fc.DopedLayer("n", 100), "contact": fc.Contact("metal")}
DARK_V = 0.2  # low injection to better than 1e-6


def encloses(bounds, truth):
    return bounds.lower_mA_per_cm2 <= truth <= bounds.upper_mA_per_cm2


def useful(bounds, problem, truth, voltage_V=0.0, factor=4.0):
    """The half width is at most a few times the error of the solution on the same cells, or of their round-off."""
    error = abs(fc.solve_excess(problem, voltage_V).collected_mA_per_cm2[bounds.terminal] - truth)
    return bounds.error_bar_collected_mA_per_cm2 <= factor * error + 1e-9 * abs(truth)


# Strip contact on a slab, full back plane, period 2L, thickness h, half width a, by conformal mapping (classical): k1
# from K(k1)/K′(k1) = L/h, κ = k1 sn(K(k1) a/L, k1); resistance × conductivity × depth of the half cell K′(κ)/K(κ).


def strip_resistance(L, h, a):
    from scipy.optimize import brentq
    from scipy.special import ellipj, ellipk, ellipkm1

    log_m1 = brentq(lambda s: ellipkm1(math.exp(s)) / ellipk(math.exp(s)) - L / h, -60, -1e-9)
    m1 = math.exp(log_m1)
    kappa = math.sqrt(1 - m1) * ellipj(ellipkm1(m1) * a / L, 1 - m1)[0]
    return ellipk(1 - kappa**2) / ellipk(kappa**2)


def random_strip(seed):
    """L, h, a in µm."""
    rng = np.random.default_rng(seed)
    h = rng.uniform(50, 250)
    L = h * 10 ** rng.uniform(-0.3, 0.6)
    return L, h, L * rng.uniform(0.05, 0.7)


def strip_cell(L, h, a, lifetime_us=math.inf, rear=BARE_METAL, **changes):
    front = fc.Face(fc.Surface(), [fc.Strip("strip", 2 * a, **METAL)])
    return fc.UnitCell(constant_base(D, lifetime_us, thickness_um=h), 2 * L, front=front, rear=rear, **changes)


def dark_current_mA_per_cm2(problem, conductance):
    """Injected at `DARK_V` through a conductance over D (per cm of depth); negative, since it is not collected."""
    base = problem.equilibrium
    density = base.n0 * math.expm1(DARK_V / base.VT)
    density *= 1 / (1 + density / (base.n0 + base.p0))  # np/ni² = exp(V/VT) with the majority carriers raised too
    return -Q * D * density * conductance / problem.cell_area_cm2 * 1e3


@pytest.mark.parametrize("seed", range(12))
@pytest.mark.parametrize("level", [-4.0, -1.0])
def test_random_strip_contacts(seed, level):
    sizes = random_strip(seed)
    problem = fc.problem(strip_cell(*sizes), level=level)
    truth = dark_current_mA_per_cm2(problem, 1 / strip_resistance(*sizes))
    bounds = collected_bounds(problem, "metal", DARK_V)
    assert encloses(bounds, truth)
    assert useful(bounds, problem, truth, DARK_V)


def test_bounds_on_unstructured_triangles_and_on_bent_quads():
    """The strip (L, h, a) = (100, 100, 50) µm: K′/K = 1.2200415913."""
    rng = np.random.default_rng(2)
    axis = graded_axis(0, 100, [(50, 0.5), (0, 10), (100, 10)], 1.6, 20)
    z = graded_axis(0, 100, [(100, 0.5), (0, 10)], 1.6, 20)
    for kind in ("triangle", "quad"):
        plain = box_mesh(kind, axis, z)
        step = 0.15 * 0.5e-4
        inner = ((plain.cells.p > 1e-9) & (plain.cells.p < 100e-4 - 1e-9)).all(axis=0)
        cells = type(plain.cells)(plain.cells.p + inner * rng.uniform(-step, step, plain.cells.p.shape), plain.cells.t)
        top = plain.surfaces["z_max"]
        x = cells.p[0, cells.facets[:, top]].mean(axis=0) * 1e4
        mesh = fc.Mesh(cells, {"strip": top[x < 50], "rear": plain.surfaces["z_min"]}, plain.volumes)
        surfaces = {"strip": junction("metal"), "rear": BARE_METAL}
        problem = fc.Problem(mesh, {"base": constant_base(D)}, surfaces, cell_area_cm2=1e-2)
        truth = dark_current_mA_per_cm2(problem, 1 / 1.2200415913)
        bounds = collected_bounds(problem, "metal", DARK_V)
        assert encloses(bounds, truth)
        assert useful(bounds, problem, truth, DARK_V)


@pytest.mark.parametrize("seed", range(12, 20))
def test_strips_with_recombination_under_light(seed):
    """Random lifetime, recombination velocities and beam; the answer from a mesh with a twentieth of the width."""
    rng = np.random.default_rng(seed)
    L, h, a = random_strip(seed)
    tau, S_front, S_rear = 10 ** rng.uniform(-0.5, 3), 10 ** rng.uniform(0, 5), 10 ** rng.uniform(0, 5)
    light = fc.Light.monochromatic(flux_per_cm2_s=1e15, absorption_per_cm=10 ** rng.uniform(1, 3))
    front = fc.Face(fc.Surface(srv_cm_per_s=S_front), [fc.Strip("strip", 2 * a, J0_fA_per_cm2=0, **METAL)])
    cell = fc.UnitCell(
        constant_base(D, tau, thickness_um=h), 2 * L, front=front, rear=fc.Surface(srv_cm_per_s=S_rear), light=light
    )
    fine = collected_bounds(fc.problem(cell, level=1.0), "metal")
    for level in (-4.0, -2.0):
        problem = fc.problem(cell, level=level)
        bounds = collected_bounds(problem, "metal")
        assert bounds.error_bar_collected_mA_per_cm2 > 20 * fine.error_bar_collected_mA_per_cm2
        assert encloses(bounds, fine.lower_mA_per_cm2)
        assert encloses(bounds, fine.upper_mA_per_cm2)
        assert useful(bounds, problem, fine.collected_mA_per_cm2)


# Half-lit slab between two sinks, G uniform on 0 < x < W/2: without recombination 3/4 and 1/4; W = 200 µm, D = 30,
# τ = 10 µs: 0.6942508542 and 0.2076918859 (parabola and straight line; sinh and cosh, matched at the shadow line).


@pytest.mark.parametrize(("lifetime_us", "near", "far"), [(math.inf, 3 / 4, 1 / 4), (10, 0.6942508542, 0.2076918859)])
def test_half_lit_slab(lifetime_us, near, far):
    sides = {"x_min": BARE_METAL, "x_max": BARE_METAL}
    light = fc.Light.uniform(1e18, mask=fc.HalfPlane(100))
    cell = fc.UnitCell(constant_base(D, lifetime_us, thickness_um=10), 400, sides=sides, light=light)
    generated = Q * 1e18 * 10e-4 * 0.5 * 1e3
    for level in (-4.0, 0.0):
        for name, share in (("x_min", near), ("x_max", far)):
            bounds = collected_bounds(fc.problem(cell, level=level), name)
            assert encloses(bounds, share * generated) or bounds.collected_mA_per_cm2 == pytest.approx(
                share * generated,
                rel=1e-10,  # the answer above has ten digits
            )
            assert bounds.error_bar_collected_mA_per_cm2 < (1e-3 if level < 0 else 1e-6) * generated


# Base with a junction at the lit face, S at the other: φ = cosh(x/L) − [(SL/D) cosh(W/L) + sinh(W/L)]/[(SL/D) sinh(W/L)
# + cosh(W/L)] sinh(x/L), quantum efficiency ∫ α exp(−αx) φ dx. W = 180, L = 200 µm, D = 30, S = 1000: α = 1000/cm
# 0.9555891464, α = 100/cm 0.6399439374.


def quantum_efficiency(W, L, S, alpha):
    """In cm, cm/s and 1/cm; the integral of two exponentials."""
    s = S * L / D
    c = (s * math.cosh(W / L) + math.sinh(W / L)) / (s * math.sinh(W / L) + math.cosh(W / L))
    part = lambda k: alpha / (alpha - k) * -math.expm1((k - alpha) * W)
    return 0.5 * ((1 - c) * part(1 / L) + (1 + c) * part(-1 / L))


def lit_base(W_um, L_um, S, alpha, level):
    base = constant_base(D, (L_um * 1e-4) ** 2 / D * 1e6, thickness_um=W_um)
    front = fc.Surface(layer=fc.DopedLayer("n", 100), contact=fc.Contact("junction"))
    light = fc.Light.monochromatic(flux_per_cm2_s=1e17, absorption_per_cm=alpha)
    light = fc.Light(tuple(dataclasses.replace(s, shaded=False) for s in light.sources))
    cell = fc.UnitCell(base, 40, front=front, rear=fc.Surface(srv_cm_per_s=S), light=light)
    return fc.problem(cell, level=level)


@pytest.mark.parametrize(("alpha", "printed"), [(1000.0, 0.9555891464), (100.0, 0.6399439374)])
def test_quantum_efficiency_of_a_base(alpha, printed):
    assert quantum_efficiency(180e-4, 200e-4, 1000, alpha) == pytest.approx(printed, rel=1e-9)
    for level in (-4.0, -2.0, 0.0):
        bounds = collected_bounds(lit_base(180, 200, 1000, alpha, level), "junction")
        assert encloses(bounds, printed * Q * 1e17 * 1e3)


@pytest.mark.parametrize("seed", range(20))
def test_quantum_efficiency_with_random_surfaces(seed):
    """Absorption from 1/cm to 1e5/cm, far below one cell too."""
    rng = np.random.default_rng(seed)
    W, L = rng.uniform(50, 300), 10 ** rng.uniform(1.5, 3)
    S, alpha = 10 ** rng.uniform(-1, 7), 10 ** rng.uniform(0, 5)
    truth = quantum_efficiency(W * 1e-4, L * 1e-4, S, alpha) * Q * 1e17 * 1e3
    for level in (-4.0, -1.0):
        problem = lit_base(W, L, S, alpha, level)
        bounds = collected_bounds(problem, "junction")
        assert encloses(bounds, truth)
        assert bounds.error_bar_collected_mA_per_cm2 < 0.02 * Q * 1e17 * 1e3


# Motz problem: Δu = 0 on (−1, 1) × (0, 1); u = 0 on y = 0, x < 0; u = 500 on x = 1; insulated elsewhere. H. Motz, Q.
# Appl. Math. 4, 371 (1947) (definition); ∫ |∇u|² = 500 × flux through x = 1 = 170158.543265.


@pytest.mark.parametrize("first_step", [0.2, 0.03, 1e-3, 1e-5])
@pytest.mark.parametrize("split", [False, True])
def test_motz_problem(first_step, split):
    x = 100 * graded_axis(-1, 1, [(0, first_step)], 2.0, 0.25)
    z = 100 * graded_axis(0, 1, [(0, first_step)], 2.0, 0.25)
    mesh = box_mesh("quad", x, z)
    bottom = mesh.surfaces["z_min"]
    left = bottom[mesh.cells.p[0, mesh.cells.facets[:, bottom]].mean(axis=0) < 0]
    mesh = fc.Mesh(mesh.cells, {"cold": left, "hot": mesh.surfaces["x_max"]}, mesh.volumes)
    surfaces = {"cold": BARE_METAL, "hot": junction("metal")}
    mesh = triangulated(mesh) if split else mesh
    problem = fc.Problem(mesh, {"base": constant_base(D)}, surfaces, cell_area_cm2=2e-2)
    truth = dark_current_mA_per_cm2(problem, 170158.543265 / 500**2)
    bounds = collected_bounds(problem, "metal", DARK_V)
    assert encloses(bounds, truth)
    assert useful(bounds, problem, truth, DARK_V)


def test_a_lifetime_that_varies_within_cells():
    """The oscillation of κ p in coarse cells is part of the width; the answer from a fine mesh."""
    base = constant_base(D, lambda x, y, z: 0.2 + 3 * np.sin(x / 30) ** 2 + z / 100)
    light = fc.Light.function(lambda x, y, z: 1e19 * (1 + np.cos(x / 40) * np.exp(-z / 50)))
    surfaces = {
        "x_min": junction("metal"),
        "x_max": BARE_METAL,
        "z_min": fc.Surface(srv_cm_per_s=lambda x, y, z: 10 + x),
    }

    def bounds(n):
        mesh = box_mesh("triangle", np.linspace(0, 200, 2 * n + 1), np.linspace(0, 100, n + 1))
        return collected_bounds(fc.Problem(mesh, {"base": base}, surfaces, light, cell_area_cm2=2e-2), "metal")

    fine = bounds(24)
    for n in (2, 3, 5, 8):
        assert encloses(bounds(n), fine.lower_mA_per_cm2)
        assert encloses(bounds(n), fine.upper_mA_per_cm2)
    assert fine.error_bar_collected_mA_per_cm2 < 1e-4 * fine.collected_mA_per_cm2


def test_low_injection_limit_of_silicon():
    """The limit encloses what faint light collects, where the rates of silicon are linear."""
    wafer = fc.Base("p", doping_per_cm3=1e16, thickness_um=150, tau_n0_us=20, tau_p0_us=200)
    front = fc.Face(fc.Surface(J0_fA_per_cm2=50), [fc.Strip("finger", 60, J0_fA_per_cm2=500, **METAL)])
    light = fc.Light.monochromatic(flux_per_cm2_s=1e8, absorption_per_cm=500)
    cell = fc.UnitCell(wafer, 600, front=front, rear=fc.Surface(J0_fA_per_cm2=20), light=light)
    problem = fc.problem(cell, level=-2.0)
    with pytest.raises(InputError, match=r"low_injection=True"):
        collected_bounds(problem, "metal")
    fine = fc.solve_excess(fc.problem(cell, level=2.0)).collected_mA_per_cm2["metal"]
    assert encloses(collected_bounds(problem, "metal", low_injection=True), fine)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"front": fc.Face(fc.Surface(J0_fA_per_cm2=10), [fc.Strip("strip", 40, **METAL)])}, "recombination by J0"),
        ({"rear": fc.Surface(layer=fc.DopedLayer("n", 100))}, "without a contact"),
        ({"symmetry": "periodic"}, "mirror planes"),
        ({"sides": {"x_max": fc.Surface(srv_cm_per_s=lambda x, y, z: np.maximum(z - 60, 0))}}, "zero in places"),
    ],
)
def test_what_is_not_linear_or_symmetric_is_refused(changes, words):
    cell = dataclasses.replace(strip_cell(100, 100, 20, light=fc.Light.uniform(1e18)), **changes)
    with pytest.raises(InputError, match=words):
        collected_bounds(fc.problem(cell), "metal")


def test_three_dimensions_and_touching_sinks_are_refused():
    box = box_mesh("tetra", *[np.linspace(0, 100, 3)] * 3)
    problem = fc.Problem(
        box, {"base": constant_base(D)}, {"z_max": junction("metal")}, fc.Light.uniform(1e18), cell_area_cm2=1e-4
    )
    with pytest.raises(InputError, match="two dimensions"):
        collected_bounds(problem, "metal")
    flat = box_mesh("quad", *[np.linspace(0, 100, 3)] * 2)
    surfaces = {"z_max": junction("metal"), "x_min": BARE_METAL}
    problem = fc.Problem(flat, {"base": constant_base(D)}, surfaces, fc.Light.uniform(1e18), cell_area_cm2=1e-2)
    with pytest.raises(InputError, match="gap"):
        collected_bounds(problem, "metal")


def test_quads_split_in_two_keep_names_and_sizes():
    mesh = box_mesh("quad", np.array([0, 10, 40, 90.0]), np.array([0, 5, 30.0]))
    split = triangulated(mesh)
    assert isinstance(split.cells, skfem.MeshTri1)
    for name in mesh.surfaces:
        assert split.surface_area_cm2(name) == pytest.approx(mesh.surface_area_cm2(name), rel=1e-14)
    assert split.volume_cm3("base") == pytest.approx(mesh.volume_cm3("base"), rel=1e-14)


def test_printed_bounds_are_rounded_outwards():
    assert str(Bounds("front", 1.23456, 1.25, 10)) == "front collects 1.234 to 1.250 mA/cm²"
