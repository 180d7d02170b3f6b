"""Collection probability as a field, quantum efficiency and scans as tables, currents under many lights, plots."""

from __future__ import annotations

import json
import math

import numpy as np
import pandas as pd
import pytest
from simple_cells import box_mesh, constant_base, junction

import fem_carriers as fc
from fem_carriers.analysis.light_currents import currents_under
from fem_carriers.analysis.quantum_efficiency import quantum_efficiency
from fem_carriers.analysis.scan import scan_line, scan_map
from fem_carriers.analysis.spot import BeamSpot, image, sweep_over, windows
from fem_carriers.cell.inner import InnerSurface
from fem_carriers.output.response import plot_quantum_efficiency, plot_scan_line, plot_scan_map
from fem_carriers.transport.probe import Probe

SUN = fc.Light.sunlight(0.03)
EXTERNAL = "external_quantum_efficiency_percent"
BLUE = fc.Light.monochromatic(flux_per_cm2_s=1e17, wavelength_nm=450)
LIGHTS = {"dim": SUN.scaled(1e-3), "sun": SUN, "blue": BLUE}


def cell(pitch_y_um=None, **changes):
    """A finger on a layer, full rear metal behind a passivated layer's worth of S, SRH lifetimes."""
    base = fc.Base("p", resistivity_ohm_cm=1.0, thickness_um=160, tau_n0_us=5, tau_p0_us=50)
    layer = fc.DopedLayer("n", 120)
    front = fc.Face(fc.Surface(J0_fA_per_cm2=30, layer=layer), [fc.Strip("finger", 30, contact=fc.Contact("front", 2))])
    rear = fc.Surface(srv_cm_per_s=500, contact=fc.Contact("rear", 1))
    return fc.UnitCell(**{
        "base": base, "pitch_um": 900, "pitch_y_um": pitch_y_um, "front": front, "rear": rear, "light": SUN
    } | changes)  # fmt: skip


@pytest.fixture(scope="module")
def problem():
    return fc.problem(cell())


class TestField:
    def test_is_taken_like_a_solution(self, problem, tmp_path):
        import meshio
        from PIL import Image

        field = fc.collection_probability(problem, "front", form="bipolar")
        picture = fc.view(field, picture=tmp_path / "phi.png")
        with Image.open(picture) as shown:
            assert len(shown.convert("RGB").getcolors(2**24)) > 200
        written = meshio.read(fc.write_fields(field, tmp_path / "phi.vtu"))
        assert written.point_data["collection_probability"] == pytest.approx(field.values)
        assert "collection_probability" in json.loads((tmp_path / "phi.json").read_text())["fields"]
        assert "CollectionProbability of 'front'" in repr(field)

    def test_operating_points(self, problem):
        """Dark or lit problem, a solution of either form, a voltage: φ is that of the state asked for."""
        lit = fc.collection_probability(problem, "front", form="bipolar")
        same = fc.collection_probability(fc.solve_bipolar(problem), "front")
        assert same.values == pytest.approx(lit.values, abs=1e-12)
        dark = fc.collection_probability(problem.changed(light=None), "front", form="bipolar")
        assert not dark.load.any()
        assert np.abs(dark.values - lit.values).max() > 1e-3
        biased = fc.collection_probability(problem, "front", 0.62, form="bipolar")
        assert biased.values.mean() < 0.9 * lit.values.mean()
        rear = fc.collection_probability(problem, "rear", form="bipolar")
        assert rear.values == pytest.approx(lit.values, abs=1e-9)

    @pytest.mark.parametrize(
        ("arguments", "text"),
        [
            (("nothing",), "terminal 'nothing'"),
            (("front", 0.0, "other"), "'excess' or 'bipolar'"),
        ],
    )
    def test_refusals(self, problem, arguments, text):
        terminal, *rest = arguments
        with pytest.raises(fc.InputError, match=text):
            fc.collection_probability(problem, terminal, *rest[:1], **({"form": rest[1]} if rest[1:] else {}))

    def test_a_solution_has_its_voltage(self, problem):
        with pytest.raises(fc.InputError, match="a solution, which has its voltages"):
            fc.collection_probability(fc.solve_bipolar(problem), "front", 0.3)


class TestQuantumEfficiency:
    def test_columns_sum_to_all_photons(self, problem):
        for form in ("excess", "bipolar"):
            table = quantum_efficiency(problem, range(400, 1101, 100), form=form)
            assert list(table)[:4] == [
                "wavelength_nm",
                "absorption_per_cm",
                EXTERNAL,
                "internal_quantum_efficiency_percent",
            ]
            assert table.iloc[:, 4:].sum(axis=1).to_numpy() == pytest.approx(100, abs=1e-8)
            assert {"collected_front_percent", "lost_rear_percent", "lost_base_SRH_percent"} <= set(table)
            assert table["shaded_percent"].to_numpy() == pytest.approx(100 * 30 / 900)
            entering = 1 - 30 / 900 - 0.03 * (1 - 30 / 900)
            internal = table["internal_quantum_efficiency_percent"]
            assert internal.to_numpy() == pytest.approx(table[EXTERNAL].to_numpy() / entering)

    def test_bias_light_changes_it(self, problem):
        """With τp0 ten times τn0 the lifetime grows with injection, and so does the differential efficiency."""
        dark = quantum_efficiency(problem, [1000], form="bipolar")
        lit = quantum_efficiency(fc.solve_bipolar(problem), [1000])
        assert lit[EXTERNAL][0] > dark[EXTERNAL][0] + 0.01

    def test_takes_optics_from_the_light_or_the_caller(self, problem):
        wavelength, share = [300.0, 600.0, 1200.0], [0.3, 0.05, 0.1]
        table = quantum_efficiency(problem, [600, 900], reflectance=(wavelength, share), losses=False)
        lit = 1 - 30 / 900
        assert table["reflected_percent"].to_numpy() == pytest.approx([5 * lit, 7.5 * lit])
        mirrored = quantum_efficiency(problem, [1050], path="rear_mirror")
        assert mirrored["escaped_percent"][0] < quantum_efficiency(problem, [1050])["escaped_percent"][0]
        assert not [c for c in table if c.startswith("lost_")]

    def test_imported_mesh(self):
        mesh = box_mesh("triangle", np.linspace(0, 100, 21), np.linspace(0, 60, 25))
        surfaces = {"z_max": junction(), "z_min": fc.Surface(srv_cm_per_s=1e3)}
        given = fc.Problem(mesh, {"base": constant_base(30, 5.0)}, surfaces, lit_surface="z_max", cell_area_cm2=100e-4)
        table = quantum_efficiency(given, absorption_per_cm=[300.0])
        lit = given.changed(light=fc.Light.monochromatic(flux_per_cm2_s=1e10, absorption_per_cm=300.0))
        solution = fc.solve_excess(lit)
        wanted = 100 * solution.collected_mA_per_cm2["junction"] / solution.optics.incident
        assert table[EXTERNAL][0] == pytest.approx(wanted, rel=1e-11)

    @pytest.mark.parametrize(
        ("arguments", "text"),
        [
            ({}, "exactly one of wavelength_nm, absorption_per_cm"),
            ({"wavelength_nm": [500, -1]}, "finite numbers above 0"),
            ({"wavelength_nm": "red"}, "finite numbers above 0"),
            ({"wavelength_nm": [500], "path": "zigzag"}, "'single_pass'"),
            ({"wavelength_nm": [500], "enters": "left"}, "'front' or 'rear'"),
            ({"wavelength_nm": [500], "terminal": "rare"}, "terminal 'rare'"),
            ({"wavelength_nm": [500], "reflectance": 2}, "0 to 1"),
            ({"absorption_per_cm": [500], "path": "lambertian"}, "wavelength_nm for a Lambertian path"),
            ({"wavelength_nm": [5000]}, "the range of the table"),
        ],
    )
    def test_refusals(self, problem, arguments, text):
        with pytest.raises(fc.InputError, match=text):
            quantum_efficiency(problem, **arguments)


class TestScan:
    def test_line_over_finger_boundary_and_edge(self):
        given = cell(
            inner={"grain": InnerSurface(x_um=250, srv_cm_per_s=1e5)}, sides={"x_max": fc.Surface(srv_cm_per_s=1e5)}
        )
        table = scan_line(fc.problem(given), -100, 500, 121, spot_diameter_um=10, wavelength_nm=900)
        signal = table.set_index("x_um")[EXTERNAL]
        assert signal[0.0] == pytest.approx(0, abs=1e-9)  # on the finger
        assert signal[-50.0] == pytest.approx(signal[50.0], rel=1e-9)  # the mirror image
        assert signal[250.0] < signal[200.0]
        assert signal[250.0] < signal[300.0]
        assert signal[500.0] == pytest.approx(0, abs=1e-9)  # beyond the edge
        shaded = table.set_index("x_um")["shaded_percent"]
        assert shaded[450.0] == pytest.approx(50, abs=1e-6)  # half of the spot is off the cell

    def test_periodic_piece(self):
        base = fc.problem(cell(symmetry="periodic"))
        table = scan_line(base, -300, 600, 4, spot_diameter_um=30, wavelength_nm=900)
        assert table[EXTERNAL][0] == pytest.approx(table[EXTERNAL][3], rel=1e-9)

    def test_map_of_dots_is_mirrored_and_averages_to_the_quantum_efficiency(self):
        """On extruded triangles: the mean over whole periods is the response to uniform light."""
        layer = fc.DopedLayer("n", 120)
        front = fc.Face(fc.Surface(J0_fA_per_cm2=30, layer=layer), [fc.Dot("spot", 60, contact=fc.Contact("front", 2))])
        given = fc.problem(cell(300, pitch_um=300, front=front), first_step_um=6)
        positions = np.linspace(-150, 150, 11)
        table = scan_map(given, positions, positions, spot_diameter_um=90, wavelength_nm=900)
        signal = table.pivot(index="x_um", columns="y_um", values=EXTERNAL).to_numpy()
        assert signal == pytest.approx(signal[::-1], rel=2e-3)
        assert signal == pytest.approx(signal.T, rel=2e-2)
        mean = signal[:-1, :-1].mean()  # a trapezoid over one period
        assert mean == pytest.approx(quantum_efficiency(given, [900])[EXTERNAL][0], rel=2e-3)

    def test_line_in_three_dimensions_is_that_of_the_section(self, problem):
        flat = scan_line(problem, 20, 200, 4, spot_diameter_um=20, wavelength_nm=900)
        deep = scan_line(fc.problem(cell(300)), (20, 40), (200, 40), 4, spot_diameter_um=20, wavelength_nm=900)
        assert deep[EXTERNAL].to_numpy() == pytest.approx(flat[EXTERNAL].to_numpy(), rel=2e-2)  # a line and a disc
        assert list(deep)[:3] == ["distance_um", "x_um", "y_um"]

    def test_integration_points(self):
        """Weights cover each window once, on mirror images too."""
        spot = BeamSpot(10.0)
        centres = np.array([-30.0, 12.0, 15.0, 140.0])
        sweep = sweep_over((0.0, 100.0), ("mirror", "edge"), np.array([33.0]), centres, spot)
        covered = windows(centres, spot.reach_um)
        assert len(covered) == 3
        assert sweep.weights_um.sum() == pytest.approx(sum(b - a for a, b in covered))
        assert (np.diff(sweep.at_um) > 0).all()
        left = sweep.at_um < 0
        assert sweep.in_piece_um[left] == pytest.approx(-sweep.at_um[left])
        assert not sweep.there[sweep.at_um > 100].any()
        assert image(-2, ("mirror", "mirror")) == (True, False)
        assert image(-2, ("mirror", "edge"))[0] is False

    def test_probe_equals_the_general_search(self, problem):
        rng = np.random.default_rng(1)
        points = rng.uniform([[0], [0]], [[450e-4], [160e-4]], (2, 500))
        nodal = rng.normal(size=problem.space.size)
        probe = Probe(problem.space)
        assert probe.table is not None
        assert probe.values(nodal, points) == pytest.approx(problem.space.numbering.probes(points) @ nodal, abs=1e-9)

    @pytest.mark.parametrize("kind", ["triangle", "tetra", "quad", "hexahedron"])
    def test_probe_of_a_linear_function(self, kind):
        """On stretched and displaced cells: every point gets its own coordinates back."""
        rng = np.random.default_rng(2)
        axes = [np.geomspace(1, 301, 9) - 1, np.geomspace(1, 41, 7) - 1, np.linspace(0, 60, 5)]
        axes = axes[:2] if kind in ("triangle", "quad") else axes
        size = np.array([a[-1] for a in axes]) * 1e-4

        def shaken(p):
            inner = ((p > 0) & (p < (1 - 1e-9) * size[:, None])).all(axis=0)
            return p + inner * rng.uniform(-1e-6, 1e-6, p.shape)

        mesh = box_mesh(kind, *axes, move=shaken)
        problem = fc.Problem(mesh, {"base": constant_base(30, 1.0)}, {}, cell_area_cm2=1.0)
        points = rng.uniform(0, 1, (len(axes), 2000)) * size[:, None]
        for axis in range(len(axes)):
            values = Probe(problem.space).values(problem.space.points_cm[axis], points)
            assert values == pytest.approx(points[axis], abs=1e-10 * size.max())

    @pytest.mark.parametrize(
        ("arguments", "text"),
        [
            ({"spot_diameter_um": 0.0}, "spot_diameter_um"),
            ({"spot_shape": "square"}, "'gaussian' or 'top_hat'"),
            ({"wavelength_nm": None}, "exactly one of"),
            ({"points": 1}, "at least 2"),
            ({"start_um": (0, 1)}, "x in a cross section"),
            ({"spot_diameter_um": 1e-3, "points": 1_000_001}, "a larger spot"),
        ],
    )
    def test_refusals(self, problem, arguments, text):
        given = {"start_um": 0, "end_um": 400, "points": 4001, "spot_diameter_um": 10, "wavelength_nm": 900} | arguments
        with pytest.raises(fc.InputError, match=text):
            scan_line(problem, **given)

    def test_map_needs_three_dimensions(self, problem):
        with pytest.raises(fc.InputError, match="scan_line"):
            scan_map(problem, [0, 1], [0, 1], spot_diameter_um=10, wavelength_nm=900)


class TestCurrentsUnder:
    @pytest.mark.parametrize(("form", "voltage"), [("excess", 0.0), ("bipolar", 0.0), ("bipolar", 0.5)])
    def test_equals_solves_within_what_it_says(self, problem, form, voltage):
        """From one operating point; the estimate of the nonlinear part is right within a fifth of itself."""
        point = problem.changed(light=SUN.scaled(0.9))
        loose = currents_under(point, LIGHTS, form=form, voltage_V=voltage, tolerance_percent=1e6)
        tight = currents_under(point, LIGHTS, form=form, voltage_V=voltage, tolerance_percent=1e-9)
        assert not loose["solved"].any()
        assert tight["solved"].all()
        exact, linear = tight["collected_mA_per_cm2"], loose["collected_mA_per_cm2"]
        true = 100 * np.abs(linear - exact) / np.abs(exact)
        near = loose["nonlinear_part_percent"] < 10
        assert near.any()
        assert loose["nonlinear_part_percent"][near].to_numpy() == pytest.approx(
            true[near].to_numpy(), rel=0.2, abs=1e-6
        )

    def test_a_large_change_is_solved_or_refused(self, problem):
        table = currents_under(problem.changed(light=None), LIGHTS, form="bipolar", voltage_V=0.55)
        assert list(table["solved"]) == [False, True, True]
        direct = fc.solve_bipolar(problem, 0.55).collected_mA_per_cm2["front"]
        assert table["collected_mA_per_cm2"][1] == pytest.approx(direct, rel=1e-9)
        with pytest.raises(fc.InputError, match=r"light 'sun', whose current is .* % off a linear response"):
            currents_under(problem.changed(light=None), LIGHTS, form="bipolar", voltage_V=0.55, when_large="refuse")

    def test_a_linear_problem_is_exact_for_any_light(self):
        base = constant_base(30, 20.0)
        given = fc.problem(fc.UnitCell(base, 600, front=junction(), rear=fc.Surface(srv_cm_per_s=1e3)))
        lights = [fc.Light.uniform(1e10), fc.Light.uniform(1e18), fc.Light.depth_profile([0, 50], [1e18, 0])]
        table = currents_under(given, lights)
        assert table["nonlinear_part_percent"].max() < 1e-9
        for light, current in zip(lights, table["collected_mA_per_cm2"], strict=True):
            solution = fc.solve_excess(given.changed(light=light))
            assert current == pytest.approx(solution.collected_mA_per_cm2["junction"], rel=1e-10)

    @pytest.mark.parametrize(
        ("lights", "more", "text"),
        [
            ([], {}, "a list of lights"),
            ([1], {}, "a Light"),
            ([SUN], {"when_large": "guess"}, "'solve' or 'refuse'"),
            ([SUN], {"tolerance_percent": 0}, "tolerance_percent"),
        ],
    )
    def test_refusals(self, problem, lights, more, text):
        with pytest.raises(fc.InputError, match=text):
            currents_under(problem, lights, **more)


class TestPlots:
    def test_quantum_efficiency(self, problem, tmp_path):
        table = quantum_efficiency(problem, range(400, 1101, 100))
        figure = plot_quantum_efficiency(table, tmp_path / "qe.png")
        names = [t.get_text() for t in figure.axes[0].get_legend().get_texts()]
        assert {"external", "internal", "shaded", "reflected", "rear"} <= set(names)
        assert figure.axes[0].get_xlabel() == "wavelength (nm)"
        assert (tmp_path / "qe.png").stat().st_size > 10_000
        with pytest.raises(fc.InputError, match="two or more wavelengths"):
            plot_quantum_efficiency(table[:1])

    def test_scans(self, tmp_path):
        x = np.linspace(0, 100, 11)
        line = pd.DataFrame({"x_um": x, EXTERNAL: 80 - x / 10})
        figure = plot_scan_line({"fine": line, "coarse": line}, tmp_path / "line.svg")
        assert figure.axes[0].get_ylabel() == "external quantum efficiency (%)"
        grid = pd.DataFrame({"x_um": np.repeat(x, 3), "y_um": np.tile([0.0, 5, 10], 11), EXTERNAL: np.arange(33.0)})
        figure = plot_scan_map(grid, tmp_path / "map.png")
        assert figure.axes[0].get_aspect() == 1
        with pytest.raises(fc.InputError, match="two or more each way"):
            plot_scan_map(grid[grid["y_um"] == 0])
        assert math.isfinite(figure.axes[1].get_ylim()[1])
