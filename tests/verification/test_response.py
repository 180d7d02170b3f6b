"""Collection probability, quantum efficiency and scans against published solutions, reciprocity and direct solves."""

from __future__ import annotations

import math
import time

import numpy as np
import pytest
from scipy.integrate import quad
from simple_cells import VT, box_mesh, cell_of, constant_base, junction, point

import fem_carriers as fc
from fem_carriers.analysis.quantum_efficiency import quantum_efficiency
from fem_carriers.analysis.scan import scan_line
from fem_carriers.analysis.weak_light import channel_columns
from fem_carriers.cell.inner import InnerSurface
from fem_carriers.transport.adjoint import ExcessResponse
from fem_carriers.transport.bipolar_adjoint import BipolarResponse

D = 30.0
AXES = {
    "triangle": (np.linspace(0, 60, 9), np.linspace(0, 40, 7)), "quad": (np.linspace(0, 60, 9), np.linspace(0, 40, 7)),
    "tetra": (np.linspace(0, 60, 6), np.linspace(0, 30, 4), np.linspace(0, 40, 5)),
    "hexahedron": (np.linspace(0, 60, 6), np.linspace(0, 30, 4), np.linspace(0, 40, 5)),
}  # fmt: skip


def random_problem(kind, seed, **changes):
    """A mesh with displaced points; lifetime, S and J0 vary at random; front on a junction, rear on the bare base."""
    rng = np.random.default_rng(seed)
    axes = AXES[kind]
    size = np.array([a[-1] - a[0] for a in axes]) * 1e-4

    def shaken(p):
        inner = ((p > 1e-9 * size[:, None]) & (p < (1 - 1e-9) * size[:, None])).all(axis=0)
        return p + 0.12 * 8e-4 * rng.uniform(-1, 1, p.shape) * inner

    mesh = box_mesh(kind, *axes, move=shaken)
    waves = rng.uniform(0.02, 0.1, 3)

    def varying(low, high):
        phase = rng.uniform(0, 6)
        return lambda x, y, z: (
            low + (high - low) * (0.5 + 0.5 * np.sin(waves[0] * x + waves[1] * y + waves[2] * z + phase))
        )

    surfaces = {
        "z_max": fc.Surface(varying(10, 500), layer=fc.DopedLayer("n", 90), contact=fc.Contact("front", 2)),
        "z_min": fc.Surface(srv_cm_per_s=varying(10, 1e4), contact=fc.Contact("rear", 1)),
        "x_max": fc.Surface(srv_cm_per_s=varying(0, 1e5)),
    }  # fmt: skip
    base = constant_base(D, varying(0.2, 5.0), thickness_um=None)
    given = {"volumes": {"base": base}, "surfaces": surfaces, "cell_area_cm2": 1e-4} | changes
    return fc.Problem(mesh, **given)


def random_light(seed, size=1e18):
    weights = np.random.default_rng(seed).uniform(0.02, 0.3, 3)
    return fc.Light.function(
        lambda x, y, z: size * (1 + np.sin(weights[0] * x) * np.cos(weights[1] * y + weights[2] * z))
    )


class TestReciprocity:
    """C. Donolato, Appl. Phys. Lett. 46, 270 (1985): the current is the integral of generation times φ."""

    @pytest.mark.parametrize("kind", list(AXES))
    def test_excess_form(self, kind):
        problem = random_problem(kind, 1)
        dark = fc.solve_excess(problem)
        response = ExcessResponse(dark.state)
        fields = {key: response.field(key) for key in response.keys}
        assert np.abs(sum(fields.values()) - 1).max() < 1e-12
        lit = fc.solve_excess(problem.changed(light=random_light(2, 1e10)))
        for key, rate in lit.state.leaving().items():
            assert lit.state.system.load @ fields[key] == pytest.approx(rate, rel=1e-12)
        for (volume, channel), rate in lit.state.system.bulk_rates(lit.state.dn).items():
            assert lit.state.system.load @ fields["bulk", f"{volume}: {channel}"] == pytest.approx(rate, rel=1e-11)
        for name in ("z_min", "x_max"):
            rate = lit.state.system.surface_rates(lit.state.dn)[name]
            assert lit.state.system.load @ fields["surface", name] == pytest.approx(rate, rel=1e-11)

    @pytest.mark.parametrize("kind", list(AXES))
    @pytest.mark.parametrize("voltage_V", [0.0, 0.4])
    def test_bipolar_form(self, kind, voltage_V):
        """Every channel against the linear response of the unknowns to random loads, under bias light."""
        problem = random_problem(kind, 3, light=random_light(4, 1e20))
        response = BipolarResponse(fc.solve_bipolar(problem, voltage_V).state)
        fields = {key: response.field(key) for key in response.functionals}
        assert np.abs(sum(fields[key] for key in response.keys) - 1).max() < 1e-11
        assert np.abs(fields["terminal", "front"] - fields["terminal", "rear"]).max() < 1e-11
        rng = np.random.default_rng(6)
        for _ in range(3):
            load = rng.uniform(0, 1, problem.space.size) * response.state.system.load.mean()
            moved = response.moved(load)
            equations = response.matrix @ moved + np.concatenate([-load, load])
            for key, functional in response.functionals.items():
                change = functional.by_unknowns @ moved + functional.by_equations @ equations
                assert change == pytest.approx(fields[key] @ load, rel=1e-9)

    @pytest.mark.parametrize("kind", ["quad", "tetra"])
    def test_bipolar_form_against_solves(self, kind):
        """Every current and every rate of recombination against central differences of full solves."""
        light, other = random_light(4, 1e20), random_light(5, 1e16)
        problem = random_problem(kind, 3, light=light)
        solution = fc.solve_bipolar(problem, 0.4)
        response = BipolarResponse(solution.state)
        more, less = (fc.solve_bipolar(problem.changed(light=light.scaled(1 + s) + other), 0.4) for s in (0, -1e-4))
        change = more.state.system.load - less.state.system.load
        middle = problem.changed(light=light.scaled(1 - 0.5e-4) + other)
        response = BipolarResponse(fc.solve_bipolar(middle, 0.4).state)
        scale = problem.cell_area_cm2 * 1e-3 / 1.602176634e-19
        for key in response.keys:
            difference = (more.ledger.rows[key] - less.ledger.rows[key]) * scale
            assert change @ response.field(key) == pytest.approx(difference, rel=3e-6)

    @pytest.mark.parametrize("form", ["excess", "bipolar"])
    def test_dark_carriers_of_a_small_bias(self, form):
        """φ is the relative excess density of the dark junction: Δn = n0 (V/VT) φ at V → 0, from a forward solve."""
        problem = random_problem("quad", 7)
        field = fc.collection_probability(problem, "front", form=form)
        voltage = 1e-6
        solve = fc.solve_excess if form == "excess" else fc.solve_bipolar
        dark = solve(problem, voltage).excess_density_per_cm3 / (problem.equilibrium.n0 * voltage / VT)
        assert np.abs(dark - field.values).max() < (1e-4 if form == "excess" else 2e-2)


class TestBase:
    """W = 180 µm, L = 200 µm, D = 30 cm²/s, S = 1000 cm/s: values of the textbook solution, computed independently."""

    def problem(self, dimension):
        base = constant_base(D, 200e-4**2 / D * 1e6, doping_per_cm3=1.5e16)
        cell = cell_of(base, 20, dimension, front=junction(), rear=fc.Surface(srv_cm_per_s=1000))
        return fc.problem(cell)

    @pytest.mark.parametrize("dimension", [2, 3])
    def test_quantum_efficiency(self, dimension):
        problem = self.problem(dimension)
        table = quantum_efficiency(problem.changed(surfaces=dict(problem.surfaces)), absorption_per_cm=[1000.0, 100.0])
        # the contact covers the face and would shade it: the internal efficiency counts the photons that entered
        assert table["shaded_percent"].to_numpy() == pytest.approx([0, 0], abs=1e-9)
        wanted = [95.55891464, 63.99439374]
        assert table["external_quantum_efficiency_percent"].to_numpy() == pytest.approx(wanted, rel=1e-5)
        assert table.drop(columns="absorption_per_cm").iloc[:, 2:].sum(axis=1).to_numpy() == pytest.approx(
            100, rel=1e-11
        )

    @pytest.mark.parametrize("dimension", [2, 3])
    def test_bipolar_form(self, dimension):
        """In low injection and without current to speak of the bipolar form has the same φ and efficiency."""
        base = constant_base(D, 200e-4**2 / D * 1e6, doping_per_cm3=1.5e16)
        rear = fc.Surface(srv_cm_per_s=1000, contact=fc.Contact("rear"))
        problem = fc.problem(cell_of(base, 20, dimension, front=junction(), rear=rear))
        field = fc.collection_probability(problem, "junction", form="bipolar")
        assert field.at(point(dimension, 10, 90)) == pytest.approx(0.6674117207, rel=1e-5)
        assert field.at(point(dimension, 10, 0)) == pytest.approx(0.4722704361, rel=1e-5)
        table = quantum_efficiency(problem, absorption_per_cm=[1000.0, 100.0], form="bipolar")
        wanted = [95.55891464, 63.99439374]
        assert table["external_quantum_efficiency_percent"].to_numpy() == pytest.approx(wanted, rel=1e-5)


class TestQuarterSpace:
    """Collector and recombining plane at right angles, published as integrals over the transverse wave number k.

    With s = S/D and μ² = k² + 1/L², φ = exp(−x/L) − (2s/π) ∫ k sin(kx) exp(−μ|z|)/[μ²(μ + s)] dk: W. van Roosbroeck,
    J. Appl. Phys. 26, 380 (1955) for a free surface z = 0; C. Donolato, J. Appl. Phys. 54, 1314 (1983) for a grain
    boundary, on which each side has half of its S. The formula was derived anew by a sine transform in x from the
    equations these papers solve (the papers themselves were not at hand).
    """

    L = 20e-4

    def exact(self, x_um, z_um, s):
        x, z, kappa = x_um * 1e-4, abs(z_um) * 1e-4, 1 / self.L

        def integrand(k):
            mu = math.hypot(k, kappa)
            return k * math.exp(-mu * z) / (mu**2 * (mu + s))

        # split as a Fourier integral, so that it converges at z = 0 too
        return (
            math.exp(-x / self.L) - 2 * s / math.pi * quad(integrand, 0, math.inf, weight="sin", wvar=x, limlst=200)[0]
        )

    def exact_light(self, z_um, s, alpha):
        """∫ α exp(−αx) φ dx for light that enters through the collector, a distance z from the boundary."""
        kappa = 1 / self.L

        def integrand(k):
            mu = math.hypot(k, kappa)
            return alpha * k**2 * math.exp(-mu * abs(z_um) * 1e-4) / (mu**2 * (mu + s) * (alpha**2 + k**2))

        return alpha / (alpha + kappa) - 2 * s / math.pi * quad(integrand, 0, math.inf, limit=500)[0]

    def lifetime_us(self):
        return self.L**2 / D * 1e6

    @pytest.mark.parametrize("srv", [1e3, 1e5])
    def test_collector_perpendicular_to_a_surface(self, srv):
        grid = np.concatenate([[0], np.geomspace(0.3, 400, 70)])
        mesh = box_mesh("quad", grid, 400 - grid[::-1])
        base = constant_base(D, self.lifetime_us(), thickness_um=None)
        surfaces = {"x_min": junction(), "z_max": fc.Surface(srv_cm_per_s=srv)}
        problem = fc.Problem(mesh, {"base": base}, surfaces, cell_area_cm2=400e-4)
        field = fc.collection_probability(problem, "junction")
        for x in (2.0, 10.0, 30.0, 60.0):
            for depth in (0.0, 1.0, 8.0, 30.0):
                assert field.at([x, 400 - depth])[0] == pytest.approx(self.exact(x, depth, srv / D), rel=1e-3)

    @pytest.mark.parametrize("form", ["excess", "bipolar"])
    @pytest.mark.parametrize("srv", [1e4, 1e6])
    def test_grain_boundary_at_normal_incidence(self, srv, form):
        """φ beside the boundary, and a scan of a narrow beam across it."""
        base = constant_base(D, self.lifetime_us(), thickness_um=300.0)
        plane = InnerSurface(x_um=0.0, srv_cm_per_s=srv)
        front = fc.Face(fc.Surface(layer=fc.DopedLayer("n", 1e-3), contact=fc.Contact("junction")))
        rear = fc.Surface(contact=fc.Contact("rear"))
        cell = fc.UnitCell(base, 500, front=front, rear=rear, symmetry="periodic", inner={"grain_boundary": plane})
        problem = fc.problem(cell, first_step_um=0.01, growth=1.22)
        field = fc.collection_probability(problem, "junction", form=form)
        s = srv / (2 * D)
        for depth in (1.0, 5.0, 20.0):
            for x in (0.0, 2.0, -10.0, 40.0):
                assert field.at([x, 300 - depth])[0] == pytest.approx(self.exact(depth, x, s), rel=1e-3)
        scan = scan_line(problem, -30, 30, 7, spot_diameter_um=0.0005, absorption_per_cm=1000.0, form=form)
        for x, value in zip(scan["x_um"], scan["external_quantum_efficiency_percent"], strict=True):
            assert value == pytest.approx(100 * self.exact_light(x, s, 1000.0), rel=1e-3)


def striped(pitch_y_um=None, **changes):
    """A finger that shades, an absorbing layer, rear metal, a grain boundary and an edge: every channel there is."""
    layer = fc.DopedLayer("n", 120, absorbing_depth_um=0.3, collection=0.6)
    front = fc.Face(fc.Surface(layer=layer), [fc.Strip("finger", 30, contact=fc.Contact("front", 2))])
    rear = fc.Face(
        fc.Surface(srv_cm_per_s=100), [fc.Strip("line", 60, srv_cm_per_s=1e5, contact=fc.Contact("rear", 1))]
    )
    given = {
        "front": front, "rear": rear, "light": fc.Light.sunlight(0.03),
        "sides": {"x_max": fc.Surface(srv_cm_per_s=1e4)},
        "inner": {"grain_boundary": InnerSurface(x_um=200, srv_cm_per_s=1e3)},
    }  # fmt: skip
    return fc.UnitCell(constant_base(D, 20.0), 900, pitch_y_um, **given | changes)


def shares_of(solution, keys):
    """Percent of the incident photons, by column."""
    columns, optics = channel_columns(keys, "_percent"), solution.optics
    found = {columns[key]: 100 * solution.ledger.rows[key] / optics.incident for key in keys}
    light = {f"{n}_percent": getattr(optics, n) for n in ("shaded", "reflected", "escaped", "parasitic")}
    return found | {name: 100 * value / optics.incident for name, value in light.items()}


class TestHundredWavelengths:
    WAVELENGTHS = np.linspace(300, 1190, 100)

    @pytest.mark.filterwarnings("ignore::fem_carriers.ModelWarning")
    @pytest.mark.parametrize("path", ["single_pass", "rear_mirror", "lambertian"])
    def test_equal_direct_solves(self, path):
        """All columns to 1e-9, at all of the hundred wavelengths for one path and every ninth for the others."""
        problem = fc.problem(striped())
        table = quantum_efficiency(problem, self.WAVELENGTHS, path=path)
        for i in range(0, 100, 1 if path == "single_pass" else 9):
            light = fc.Light.monochromatic(
                flux_per_cm2_s=1e10, wavelength_nm=self.WAVELENGTHS[i], reflectance=0.03, path=path
            )
            solution = fc.solve_excess(problem.changed(light=light))
            for column, wanted in shares_of(solution, list(solution.ledger.rows)).items():
                assert table[column][i] == pytest.approx(wanted, rel=1e-9, abs=1e-9)

    def test_equal_direct_solves_in_the_bipolar_form(self):
        """A weak monochromatic light in the dark: to the square of its size, and to round-off of the tiny currents."""
        problem = fc.problem(striped(sides={}, inner={}))
        table = quantum_efficiency(problem, [400, 800, 1100], form="bipolar")
        for i, wavelength in enumerate((400, 800, 1100)):
            light = fc.Light.monochromatic(flux_per_cm2_s=1e12, wavelength_nm=wavelength, reflectance=0.03)
            solution = fc.solve_bipolar(problem.changed(light=light))
            assert table["external_quantum_efficiency_percent"][i] == pytest.approx(
                100 * solution.collected_mA_per_cm2["front"] / solution.optics.incident, rel=1e-6
            )

    @pytest.mark.slow
    @pytest.mark.filterwarnings("ignore::fem_carriers.ModelWarning")
    @pytest.mark.parametrize("pitch_y_um", [None, 300])
    def test_cost(self, pitch_y_um):
        """At most 1.3 solves for a hundred wavelengths and the losses; least processor time of five each."""
        problem = fc.problem(striped(pitch_y_um))
        light = fc.Light.monochromatic(flux_per_cm2_s=1e10, wavelength_nm=900, reflectance=0.03)
        lit = problem.changed(light=light)
        solves, tables = [], []
        for _ in range(6):
            started = time.process_time()
            fc.solve_excess(lit)
            solves.append(time.process_time() - started)
            started = time.process_time()
            quantum_efficiency(problem, self.WAVELENGTHS)
            tables.append(time.process_time() - started)
        assert min(tables[1:]) <= 1.3 * min(solves[1:])


class TestScan:
    def test_average_over_the_piece_is_the_quantum_efficiency(self):
        """A scan over whole periods averages to uniform light, whatever the spot."""
        problem = fc.problem(striped(sides={}))
        wanted = quantum_efficiency(problem, [900])["external_quantum_efficiency_percent"][0]
        for shape in ("gaussian", "top_hat"):
            scan = scan_line(problem, 0, 450, 451, spot_diameter_um=20, spot_shape=shape, wavelength_nm=900)
            mean = np.trapezoid(scan["external_quantum_efficiency_percent"], scan["x_um"]) / 450
            assert mean == pytest.approx(wanted, rel=1e-5)

    @pytest.mark.filterwarnings("ignore::fem_carriers.ModelWarning")
    def test_top_hat_equals_a_masked_solve(self):
        """A disc on a mesh that is fitted to it, partly on metal and away from it."""
        for center, diameter, tolerance in ((300.0, 40.0, 1e-4), (13.0, 20.0, 1e-3)):
            light = fc.Light.monochromatic(
                flux_per_cm2_s=1e10, wavelength_nm=900, reflectance=0.03, mask=fc.Spot(diameter, (center, 0))
            )
            problem = fc.problem(striped(light=light))
            solution = fc.solve_excess(problem)
            wanted = 100 * solution.collected_mA_per_cm2["front"] / solution.optics.incident
            scan = scan_line(
                problem, center, center + 1, 2, spot_diameter_um=diameter, spot_shape="top_hat", wavelength_nm=900
            )
            assert scan["external_quantum_efficiency_percent"][0] == pytest.approx(wanted, rel=tolerance)
