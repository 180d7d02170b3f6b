"""Manufactured solutions: every term of the excess-carrier equation alone and together converges at the full order.

P. J. Roache, J. Fluids Eng. 124, 4 (2002); W. L. Oberkampf and C. J. Roy, Verification and Validation in Scientific
Computing (2010), ch. 6 (method, from memory). For elements of order p the error falls as h^(p+1) in L2 and as h^p in
the gradient.

Δn is a product of cosines; the generation and the recombination velocity (or J0) of the faces that make it a solution
follow by hand from the equation, written here with n, p and their textbook laws and not with the package's formulas.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
import pytest
from simple_cells import BARE_METAL, box_mesh

import fem_carriers as fc
from fem_carriers.constants import ELEMENTARY_CHARGE_C as Q
from fem_carriers.constants import thermal_voltage_V

VT = thermal_voltage_V(298.15)
SIZE_UM = np.array([100.0, 80.0, 60.0])
NI, DOPING, AMPLITUDE = 1e10, 1e15, 1e15  # cm⁻³; medium injection, so that every nonlinearity matters


@dataclass(frozen=True)
class Case:
    """One equation. `base` holds recombination, `drift` the argument of `solve_excess`, `faces` "srv" or "J0"."""

    base: dict = field(default_factory=lambda: {"lifetime_us": math.inf})
    doping_type: str = "p"
    mobilities: tuple[float, float] = (1400.0, 450.0)
    field_V_per_cm: float = 0.0
    current_mA_per_cm2: float = 0.0
    faces: str = "srv"


TAU = lambda x, y, z: 3 + 1.5 * x / 100 + 0.5 * np.sin(z / 20)
TAU_N, TAU_P = (lambda x, y, z: 2 + x / 100), (lambda x, y, z: 5 - 3 * z / 80)
SRH = {"tau_n0_us": 2.0, "tau_p0_us": 5.0}
FAST_HOLES = (450.0, 1400.0)  # so that the generation stays positive in n-type bases too
EVERYTHING = {
    "base": {"tau_n0_us": TAU_N, "tau_p0_us": TAU_P, "auger": (1e-25, 2e-25), "radiative_cm3_per_s": 1e-10},
}
CASES = {
    "diffusion": Case(mobilities=(30 / VT, 30 / VT)),
    "ambipolar diffusion": Case(),
    "lifetime": Case({"lifetime_us": 3.0}),
    "lifetime of position": Case({"lifetime_us": TAU}),
    "SRH": Case(SRH),
    "Auger": Case({"lifetime_us": math.inf, "auger": (1e-25, 2e-25)}),
    "radiative": Case({"lifetime_us": math.inf, "radiative_cm3_per_s": 3e-10}),
    "J0": Case(faces="J0"),
    "field": Case(field_V_per_cm=1.5),
    "field, n-type": Case(field_V_per_cm=-1.5, doping_type="n", mobilities=FAST_HOLES),
    "current": Case(current_mA_per_cm2=400.0),
    "current, n-type": Case(current_mA_per_cm2=-400.0, doping_type="n", mobilities=FAST_HOLES),
    "everything": Case(**EVERYTHING, current_mA_per_cm2=300.0, faces="J0"),
    "everything, n-type": Case(**EVERYTHING, current_mA_per_cm2=-300.0, doping_type="n", mobilities=FAST_HOLES),
}


@dataclass(frozen=True)
class Exact:
    """Δn = A Π cos(k_i x_i − δ_i), zero on x_max; everything as functions of positions x (dimension, ...) in cm."""

    case: Case
    dimension: int

    @property
    def waves(self):
        size = SIZE_UM[[0, 1]] if self.dimension == 2 else SIZE_UM
        phase = np.array([0.5, 0.4, 0.6])[: self.dimension]
        length = np.array([np.pi / 2 + 0.5, 1.2, 1.5])[: self.dimension]
        return length / (size * 1e-4), phase

    def factors(self, x):
        k, phase = self.waves
        angle = np.einsum("d,d...->d...", k, x) - phase.reshape(-1, *[1] * (x.ndim - 1))
        return np.cos(angle), -np.einsum("d,d...->d...", k, np.sin(angle))

    def value(self, x):
        return AMPLITUDE * self.factors(x)[0].prod(axis=0)

    def gradient(self, x):
        f, slope = self.factors(x)
        others = [np.delete(f, i, axis=0).prod(axis=0) for i in range(len(f))]
        return AMPLITUDE * slope * np.array(others)

    def laplacian(self, x):
        return -(self.waves[0] ** 2).sum() * self.value(x)

    # physics, from the densities

    def densities(self, u):
        majority = DOPING / 2 + math.hypot(DOPING / 2, NI)
        n0, p0 = (majority, NI**2 / majority) if self.case.doping_type == "n" else (NI**2 / majority, majority)
        return n0 + u, p0 + u

    def diffusivity(self, u):
        """(n + p)/(n/Dp + p/Dn) and its derivative by the quotient rule."""
        n, p = self.densities(u)
        Dn, Dp = (m * VT for m in self.case.mobilities)
        below = n / Dp + p / Dn
        return (n + p) / below, (2 * below - (n + p) * (1 / Dp + 1 / Dn)) / below**2

    def electron_share(self, u):
        """μn n/(μn n + μp p) and its derivative."""
        n, p = self.densities(u)
        mu_n, mu_p = self.case.mobilities
        sigma = mu_n * n + mu_p * p
        return mu_n * n / sigma, (mu_n * sigma - mu_n * n * (mu_n + mu_p)) / sigma**2

    def recombination(self, u, x):
        n, p = self.densities(u)
        given, excess = self.case.base, n * p - NI**2
        um = (x[0] * 1e4, x[0] * 0 if self.dimension == 2 else x[1] * 1e4, x[-1] * 1e4)
        number = lambda value: value(*um) * 1e-6 if callable(value) else value * 1e-6
        rate = 0 * u
        if given.get("lifetime_us"):
            rate = rate + u / number(given["lifetime_us"])
        if "tau_n0_us" in given:
            rate = rate + excess / (number(given["tau_p0_us"]) * (n + NI) + number(given["tau_n0_us"]) * (p + NI))
        Cn, Cp = given.get("auger", (0, 0))
        return rate + (Cn * n + Cp * p + given.get("radiative_cm3_per_s", 0.0)) * excess

    def vector(self, x):
        """Field (V/cm) or current (mA/cm²) per unit strength: linear in the position and free of sources."""
        a, b = x[0] / 100e-4, x[-1] / 80e-4
        middle = [] if self.dimension == 2 else [0.3 + 0.4 * a]
        return np.array([1 + 0.5 * b, *middle, 0.7 - 0.6 * a])

    def drift_flux(self, u, x):
        """μ Δn E with μ = +μn in a p-type, −μp in an n-type base; or (J/q)(t(Δn) − t(0)). And its u-derivative."""
        mu = self.case.mobilities[0] if self.case.doping_type == "p" else -self.case.mobilities[1]
        t, dt = self.electron_share(u)
        J = self.case.current_mA_per_cm2 * 1e-3 / Q
        field = mu * self.case.field_V_per_cm * self.vector(x)
        current = J * self.vector(x)
        return field * u + current * (t - self.electron_share(0.0)[0]), field + current * dt

    def flux(self, x):
        u = self.value(x)
        return self.diffusivity(u)[0] * self.gradient(x) + self.drift_flux(u, x)[0]

    def generation(self, x):
        """G = R − ∇·Γ; the drift vector has no sources."""
        u, slope = self.value(x), self.gradient(x)
        D, dD = self.diffusivity(u)
        spread = D * self.laplacian(x) + dD * (slope**2).sum(axis=0)
        return self.recombination(u, x) - spread - (self.drift_flux(u, x)[1] * slope).sum(axis=0)

    def surface(self, axis, outward):
        """A surface that recombines just what flows into it, −Γ·ν = S Δn or (J0/q)(np/ni² − 1)."""

        def position(x, y, z):
            return np.array([x, z] if self.dimension == 2 else [x, y, z]) * 1e-4

        def srv(*um):
            x = position(*um)
            return -outward * self.flux(x)[axis] / self.value(x)

        def J0(*um):
            x = position(*um)
            n, p = self.densities(self.value(x))
            return -outward * self.flux(x)[axis] * Q * NI**2 / (n * p - NI**2) * 1e15

        return fc.Surface(J0_fA_per_cm2=J0) if self.case.faces == "J0" else fc.Surface(srv_cm_per_s=srv)

    def problem(self, mesh, order):
        case = self.case
        base = fc.Base(
            case.doping_type, doping_per_cm3=DOPING, ni_per_cm3=NI, mobility_n_cm2_per_Vs=case.mobilities[0],
            mobility_p_cm2_per_Vs=case.mobilities[1],
            **{"material": "generic", "auger": None, "radiative_cm3_per_s": 0.0} | case.base,
        )  # fmt: skip
        axes = "xz" if self.dimension == 2 else "xyz"
        surfaces = {
            f"{a}_{end}": self.surface(i, s) for i, a in enumerate(axes) for end, s in (("min", -1), ("max", 1))
        }
        surfaces["x_max"] = BARE_METAL
        rate = lambda x, y, z: self.generation(np.array([x, z] if self.dimension == 2 else [x, y, z]) * 1e-4)
        return fc.Problem(
            mesh, {"base": base}, surfaces, light=fc.Light.function(rate), lit_surface="z_max", cell_area_cm2=1e-2,
            order=order,
        )  # fmt: skip

    def solve(self, problem):
        strength = {"field_V_per_cm": self.case.field_V_per_cm, "current_mA_per_cm2": self.case.current_mA_per_cm2}
        components = lambda s: (
            lambda x, y, z: s * self.vector(np.array([x, z] if self.dimension == 2 else [x, y, z]) * 1e-4)
        )
        return fc.solve_excess(problem, **{name: components(s) for name, s in strength.items() if s})


def errors(exact, mesh, order):
    """Relative errors in L2 and of the gradient, by a quadrature finer than the solver's."""
    from skfem import Basis

    solution = exact.solve(exact.problem(mesh, order))
    basis = Basis(mesh.cells, solution.problem.space.element, intorder=2 * order + 4)
    x = np.asarray(basis.global_coordinates())
    found = basis.interpolate(solution.state.dn)
    norm = lambda f: math.sqrt((np.asarray(f) ** 2 * basis.dx).sum())
    u, slope = exact.value(x), exact.gradient(x)
    return norm(np.asarray(found) - u) / norm(u), norm(found.grad - slope) / norm(slope)


def observed_orders(exact, meshes, order):
    """Orders in L2 and H1 between the two finest of (cells per side, mesh), all errors falling."""
    sizes, found = zip(*((n, errors(exact, mesh, order)) for n, mesh in meshes), strict=True)
    L2, H1 = np.log(np.array(found)).T
    steps = np.diff(np.log(sizes))
    assert (np.diff(L2) < 0).all()
    assert (np.diff(H1) < 0).all()
    return (-np.diff(L2) / steps)[-1], (-np.diff(H1) / steps)[-1]


def uniform_meshes(kind, order, move=None):
    dimension = 2 if kind in ("triangle", "quad") else 3
    cells = (4, 8, 16, 32) if dimension == 2 else (4, 8, 12, 16) if order == 1 else (3, 4, 6, 8)
    for n in cells:
        axes = [np.linspace(0, size, n + 1) for size in SIZE_UM[:dimension]]
        yield n, box_mesh(kind, *axes, move=None if move is None else lambda p, n=n: move(p, n))


def check(name, kind, order, move=None):
    exact = Exact(CASES[name], 2 if kind in ("triangle", "quad") else 3)
    in_value, in_gradient = observed_orders(exact, uniform_meshes(kind, order, move), order)
    assert in_value == pytest.approx(order + 1, abs=0.1)
    assert in_gradient == pytest.approx(order, abs=0.1)


@pytest.mark.filterwarnings("ignore:the excess density reaches:fem_carriers.ModelWarning")
class TestManufactured:
    @pytest.mark.parametrize("order", [1, 2])
    @pytest.mark.parametrize("kind", ["triangle", "quad"])
    @pytest.mark.parametrize("name", list(CASES))
    def test_every_term_in_two_dimensions(self, name, kind, order):
        check(name, kind, order)

    @pytest.mark.parametrize("order", [1, 2])
    @pytest.mark.parametrize("kind", ["tetra", "hexahedron"])
    def test_everything_in_three_dimensions(self, kind, order):
        check("everything", kind, order)

    @pytest.mark.slow
    @pytest.mark.parametrize("order", [1, 2])
    @pytest.mark.parametrize("kind", ["tetra", "hexahedron"])
    @pytest.mark.parametrize("name", [name for name in CASES if name != "everything"])
    def test_every_term_in_three_dimensions(self, name, kind, order):
        check(name, kind, order)

    @pytest.mark.parametrize(
        ("kind", "order"),
        [("quad", 1), ("quad", 2), ("hexahedron", 1), pytest.param("hexahedron", 2, marks=pytest.mark.slow)],
    )
    def test_everything_on_cells_that_are_not_parallel(self, kind, order):
        """Trapezoids of one shape on every mesh: D. N. Arnold, D. Boffi and R. S. Falk, Math. Comp. 71, 909 (2002)."""
        check("everything", kind, order, move=zigzag)


def zigzag(p, n):
    """Every second inner point moved up and the others down, by 0.15 of a step in z."""
    index = np.rint(p / p.max(axis=1, keepdims=True) * n)
    inner = (index[-1] > 0) & (index[-1] < n)
    moved = p.copy()
    moved[-1] += np.where(inner, 0.15 * (-1.0) ** index.sum(axis=0), 0) * p[-1].max() / n
    return moved
