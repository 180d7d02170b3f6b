"""Problems with one-dimensional answers, solved on sections (2-D) and on thin strips a few cells wide (3-D).

Most answers are solutions of two-point boundary value problems with constant coefficients that fit on a line; where one
is not evaluated here from its closed form, the printed digits come from that closed form evaluated independently of
this package.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from simple_cells import BARE_METAL, VT, box_mesh, cell_of, constant_base, junction, point

import fem_carriers as fc
from fem_carriers.cell.light import Monochromatic
from fem_carriers.constants import ELEMENTARY_CHARGE_C
from fem_carriers.transport.excess import ExcessSystem

pytestmark = pytest.mark.parametrize("dimension", [2, 3])
D = 30.0  # cm²/s


# Half-lit slab between two sinks: G uniform on 0 < x < W/2. Without recombination a parabola in the lit half and a
# straight line in the dark half, value and slope continuous: end fluxes 3/4 and 1/4, maximum 9GW²/(128D) at 3W/8.


def half_lit(dimension, lifetime_us):
    sides = {"x_min": BARE_METAL, "x_max": BARE_METAL}
    light = fc.Light.uniform(1e18, mask=fc.HalfPlane(100))
    base = constant_base(D, lifetime_us, thickness_um=10)
    return fc.solve_excess(fc.problem(cell_of(base, 200, dimension, sides=sides, light=light), level=0))


def test_half_lit_slab_without_recombination(dimension):
    solution = half_lit(dimension, math.inf)
    assert solution.ledger.share("x_min") == pytest.approx(3 / 4, rel=1e-12)
    assert solution.ledger.share("x_max") == pytest.approx(1 / 4, rel=1e-12)
    top = 9 * 1e18 * 200e-4**2 / (128 * D)
    assert solution.at(point(dimension, 75, 5)) == pytest.approx(top, rel=1e-10)
    assert solution.at(np.transpose([point(dimension, x, 5) for x in (74, 76)])) == pytest.approx(
        top - 1e18 / (2 * D) * 1e-4**2, rel=1e-10
    )


def test_half_lit_slab_with_recombination(dimension):
    """τ = 10 µs; sinh and cosh in each half, matched at the shadow line."""
    ledger = half_lit(dimension, 10).ledger
    assert ledger.share("x_min") == pytest.approx(0.6942508542, rel=1e-6)
    assert ledger.share("x_max") == pytest.approx(0.2076918859, rel=1e-6)
    assert ledger.share("bulk") == pytest.approx(0.0980572600, rel=1e-6)


# Exponential generation G = αΦ exp(−αd) between two recombining faces; effective lifetime ∫Δn/∫G.


def exponential(dimension, front, rear):
    light = fc.Light.monochromatic(flux_per_cm2_s=2.5e17, absorption_per_cm=1000)
    faces = {"front": fc.Surface(srv_cm_per_s=front), "rear": fc.Surface(srv_cm_per_s=rear)}
    return fc.solve_excess(fc.problem(cell_of(constant_base(D, 1000), 20, dimension, light=light, **faces)))


def effective_lifetime_us(solution):
    system = solution.state.system
    bulk = system.space.bulk
    return float((bulk.values(solution.state.dn) * bulk.dx).sum() / system.load.sum() * 1e6)


@pytest.mark.parametrize(("front", "rear", "expected_us"), [(10, 100, 143.741306), (1e4, 10, 2.34445230)])
def test_effective_lifetime(dimension, front, rear, expected_us):
    assert effective_lifetime_us(exponential(dimension, front, rear)) == pytest.approx(expected_us, rel=1e-6)


def test_exponential_generation(dimension):
    solution = exponential(dimension, 10, 100)
    assert solution.at(point(dimension, 10, 180)) == pytest.approx(2.05372596e15, rel=1e-7)
    assert solution.ledger.share("bulk") == pytest.approx(0.14374131, rel=1e-7)
    assert solution.ledger.share("front") == pytest.approx(0.08214904, rel=1e-7)
    assert solution.ledger.share("rear") == pytest.approx(0.77410965, rel=1e-7)


# Surface lifetime 1/(a²D), smallest a > 0 of aW = atan(S1/aD) + atan(S2/aD).
# Luke and Cheng, J. Appl. Phys. 61, 2282 (1987); Sproul, J. Appl. Phys. 76, 2851 (1994) (equation from memory).


def slowest_decay_us(problem):
    """Inverse of the smallest eigenvalue of the assembled diffusion and surface terms."""
    from scipy.sparse.linalg import eigsh

    system, bulk = ExcessSystem(problem), problem.space.bulk
    zero, one = np.zeros(bulk.dx.shape), np.ones(bulk.dx.shape)
    stiffness = system.jacobian(np.zeros(problem.space.size))
    rate = eigsh(stiffness, 1, bulk.matrix(zero, None, one), sigma=0, return_eigenvectors=False)
    return 1e6 / rate[0]


@pytest.mark.parametrize(
    ("front", "rear", "expected_us", "as_meshed", "refined"),
    [
        (100, 100, 90.901787, 1e-7, 1e-7),
        (1e3, 1e3, 9.9167714, 1e-6, 1e-7),
        (1e5, 1e5, 1.1683715, 1e-5, 1e-6),
        (1e4, 0, 5.9298537, 1e-5, 1e-6),
    ],
)
def test_surface_lifetime(dimension, front, rear, expected_us, as_meshed, refined):
    faces = {"front": fc.Surface(srv_cm_per_s=front), "rear": fc.Surface(srv_cm_per_s=rear)}
    growth = None if dimension == 2 else 1.2  # the default of 3-D meshes, 2.2, reaches 5e-5 for S = 1e5
    problem = fc.problem(cell_of(constant_base(D), 20, dimension, **faces), growth=growth)
    assert slowest_decay_us(problem) == pytest.approx(expected_us, rel=as_meshed)
    if dimension == 2:
        assert slowest_decay_us(problem.refined()) == pytest.approx(expected_us, rel=refined)


# Collection probability of a base: φ(0) = 1 at the junction, −Dφ′(W) = Sφ(W).


def base_with_junction(dimension):
    """W = 180 µm, L = 200 µm, D = 30, S = 1000 at the rear; the junction covers the lit face without shading it."""
    base = constant_base(D, 200e-4**2 / D * 1e6, doping_per_cm3=1.5e16)
    return fc.problem(cell_of(base, 20, dimension, front=junction(), rear=fc.Surface(srv_cm_per_s=1000)))


def test_collection_probability_of_a_base(dimension):
    """cosh(x/L) − [(SL/D)cosh(W/L) + sinh(W/L)]/[(SL/D)sinh(W/L) + cosh(W/L)] sinh(x/L)."""
    field = fc.collection_probability(base_with_junction(dimension), "junction")
    assert field.at(point(dimension, 10, 90)) == pytest.approx(0.6674117207, rel=1e-6)
    assert field.at(point(dimension, 10, 0)) == pytest.approx(0.4722704361, rel=1e-6)


@pytest.mark.parametrize(
    ("absorption_per_cm", "printed", "tolerance"),
    # at 1e6/cm the light ends 0.01 µm deep, in the first step of 3 µm: all of it counts as at the surface, where φ = 1
    [(1000.0, 0.9555891464, 3e-6), (100.0, 0.6399439374, 3e-6), (1e-2, None, 3e-6), (1e6, None, 1e-4)],
)
def test_quantum_efficiency_from_one_adjoint(dimension, absorption_per_cm, printed, tolerance):
    """∫ α exp(−αx) φ dx per incident photon."""
    problem = base_with_junction(dimension)
    field = fc.collection_probability(problem, "junction")
    source = Monochromatic(flux_per_cm2_s=1e17, absorption_per_cm=absorption_per_cm, shaded=False)
    lit = problem.changed(light=fc.Light((source,)))
    efficiency = ExcessSystem(lit).load @ field.values / (1e17 * problem.cell_area_cm2)
    assert efficiency == pytest.approx(_quantum_efficiency(absorption_per_cm), rel=tolerance)
    if printed is not None:
        assert efficiency == pytest.approx(printed, rel=tolerance)
    collected = fc.solve_excess(lit).collected_mA_per_cm2["junction"]
    assert efficiency == pytest.approx(collected / (ELEMENTARY_CHARGE_C * 1e17 * 1e3), rel=1e-11)


def _quantum_efficiency(a, W=180e-4, L=200e-4, S=1000.0):
    """The same integral in closed form, with φ = cosh(x/L) − c sinh(x/L)."""
    s, C, Sh = S * L / D, math.cosh(W / L), math.sinh(W / L)
    c = (s * C + Sh) / (s * Sh + C)
    up, down = (1 - c) / 2, (1 + c) / 2  # of exp(+x/L), exp(−x/L)
    return sum(k * a * -math.expm1(-(a - g) * W) / (a - g) for k, g in ((up, 1 / L), (down, -1 / L)))


def test_dark_saturation_current_of_a_base(dimension):
    """J0 = q D ni²/(N L) [(SL/D)cosh + sinh]/[(SL/D)sinh + cosh] at W/L; ni = 9.65e9, N = 1.5e16."""
    voltage = 0.05
    solution = fc.solve_excess(base_with_junction(dimension), voltage)
    J0_fA = -solution.collected_mA_per_cm2["junction"] * 1e12 / math.expm1(voltage / VT)
    assert J0_fA == pytest.approx(1396.4944, rel=1e-6)


# Drift. Γ = D∇Δn + μΔnE in the package's balance, so that minority electrons move with v = −μE.


def drifting(dimension, axis_um, velocity_cm_per_s, sides, lifetime_us=math.inf):
    """Δn along x, given velocity to +x, in a thin strip; Δn = 1 (arbitrary unit) at the junction."""
    kind, rest = ("quad", [(0, 5, 10)]) if dimension == 2 else ("hexahedron", [(0, 5, 10), (0, 5, 10)])
    mesh = box_mesh(kind, axis_um, *rest)
    base = constant_base(D, lifetime_us)
    problem = fc.Problem(mesh, {"base": base}, sides, cell_area_cm2=1e-3)
    field = [-velocity_cm_per_s / base.mobility_n_cm2_per_Vs] + [0.0] * (dimension - 1)
    solution = fc.solve_excess(problem, 0.2, field_V_per_cm=field)
    return lambda x: solution.at(point(dimension, x, 5)[:1] + [5.0] * (dimension - 1))[0] / solution.state.dn.max()


def test_advection_and_diffusion_without_recombination(dimension):
    """−u″ + Pe u′ = 0, u(0) = 0, u(1) = 1: u = expm1(Pe x)/expm1(Pe); Pe = 50."""
    W = 200.0
    u = drifting(dimension, np.linspace(0, W, 401), 50 * D / (W * 1e-4), {"x_min": BARE_METAL, "x_max": junction()})
    assert u(0.9 * W) == pytest.approx(6.7379470e-3, rel=1e-5)
    assert u(0.95 * W) == pytest.approx(8.2084999e-2, rel=1e-5)


@pytest.mark.parametrize(("to", "length_um"), [(1, 1029.15026), (-1, 29.15026)])
def test_decay_lengths_down_and_up_stream(dimension, to, length_um):
    """D n″ − v n′ − n/τ = 0; D = 30, v = 1e4 cm/s, τ = 10 µs. The far end is out of reach of the other solution."""
    axis = np.concatenate([np.geomspace(1, 41, 60) - 1, np.linspace(40, 2000, 393)[1:]])
    sides = {"x_min": junction(), "x_max": BARE_METAL}
    n = drifting(dimension, axis, to * 1e4, sides, lifetime_us=10)
    for x in (20.0, 60.0) if to < 0 else (60.0, 1000.0):
        assert n(x) == pytest.approx(math.exp(-x / length_um), rel=1e-5)


# One recombination law alone in a half-space, without doping: D n″ = B n², n = n0/(1 + x/l)², l² = 6D/(B n0);
# D n″ = C n³, n = n0/(1 + x/l), l² = 2D/(C n0²).


def half_space(dimension, length_cm, ends, **law):
    """Δn against x/l on 0 … `ends` l; ni is so small that n0 and p0 vanish beside Δn(0) = 1e15."""
    x = length_cm * 1e4 * np.sinh(np.linspace(0, np.arcsinh(20 * ends), 240)) / 20
    kind, rest = ("quad", [(0, 5, 10)]) if dimension == 2 else ("hexahedron", [(0, 5, 10), (0, 5, 10)])
    constants = {"material": "generic", "doping_per_cm3": 0.0, "ni_per_cm3": 1.0}
    base = constant_base(D, **constants, **law)
    far = _far_end(length_cm, ends, power=2 if "radiative_cm3_per_s" in law else 1)
    problem = fc.Problem(
        box_mesh(kind, x, *rest), {"base": base}, {"x_min": junction(), "x_max": far}, cell_area_cm2=1e-3
    )
    with pytest.warns(fc.ModelWarning, match="low injection"):  # D is constant here, so that this does not matter
        solution = fc.solve_excess(problem, 2 * VT * math.log(1e15))
    values = lambda s: solution.at([s * length_cm * 1e4] + [5.0] * (dimension - 1))[0]
    return values, solution


def _far_end(length_cm, ends, power):
    """The half-space beyond: −D n′ = S n with n′/n = −power/(l + x) for these solutions."""
    return fc.Surface(srv_cm_per_s=D * power / (length_cm * (1 + ends)))


def test_radiative_recombination_alone(dimension):
    B, n0 = 1e-10, 1e15
    length = math.sqrt(6 * D / (B * n0))
    n, solution = half_space(dimension, length, 50, radiative_cm3_per_s=B)
    for s in (0.0, 0.5, 1.0, 3.0, 10.0, 40.0):
        assert n(s) == pytest.approx(n0 / (1 + s) ** 2, rel=1e-5)
    injected = -solution.state.leaving()["terminal", "junction"] / (1e-3 * (1 if dimension == 2 else 1e-3))
    assert injected == pytest.approx(2 * D * n0 / length, rel=1e-6)


def test_auger_recombination_alone(dimension):
    """C = Cn + Cp."""
    C, n0 = 3e-27, 1e15
    length = math.sqrt(2 * D / (C * n0**2))
    n, solution = half_space(dimension, length, 50, auger=(1e-27, 2e-27))
    for s in (0.0, 0.5, 1.0, 3.0, 10.0, 40.0):
        assert n(s) == pytest.approx(n0 / (1 + s), rel=1e-5)
    injected = -solution.state.leaving()["terminal", "junction"] / (1e-3 * (1 if dimension == 2 else 1e-3))
    assert injected == pytest.approx(D * n0 / length, rel=1e-6)
