"""Pictures: that they are drawn, what is on them, and what is refused. Everything off screen."""

from __future__ import annotations

import math

import matplotlib.image
import numpy as np
import pandas as pd
import pytest
import pyvista as pv

import fem_carriers as fc
from fem_carriers.output.axes import axes, other_edges, ticks
from fem_carriers.output.drawing import Drawing
from fem_carriers.output.images import ITSELF, images
from fem_carriers.output.labels import label
from fem_carriers.output.scene import Scene, straight_lines
from fem_carriers.output.style import linear_range, log_by_default, log_range
from fem_carriers.output.window import Window, has_display, new_plotter

BASE = fc.Base("p", doping_per_cm3=1e16, thickness_um=160, lifetime_us=100)


def cell(pitch_y_um=None, **changes):
    rear = fc.Strip("metal", 80) if pitch_y_um is None else fc.Rectangle("metal", 80, 120)
    given = {
        "pitch_um": 600, "pitch_y_um": pitch_y_um, "light": fc.Light.sunlight(),
        "front": fc.Face(fc.Surface(J0_fA_per_cm2=5), [fc.Strip("finger", 60, srv_cm_per_s=math.inf)]),
        "rear": fc.Face(fc.Surface(J0_fA_per_cm2=8), [rear.__class__(**vars(rear) | {"contact": fc.Contact("back")})]),
    }  # fmt: skip
    return fc.UnitCell(BASE, **given | changes)


def solve(cell, **settings):
    return fc.solve_excess(fc.problem(cell, first_step_um=8, growth=3, **settings))


@pytest.fixture(scope="module")
def flat():
    return solve(cell())


@pytest.fixture(scope="module")
def solid():
    return solve(cell(600), order=1)


@pytest.fixture(autouse=True)
def closed_plotters():
    """Plotters that stay open leak."""
    yield
    open_ones = [p for p in pv.plotting.plotter._ALL_PLOTTERS.values() if not p._closed]
    assert not open_ones


def pixels(path):
    return matplotlib.image.imread(path)[..., :3]


def colours(picture):
    return len(np.unique((picture * 15).astype(int).reshape(-1, 3), axis=0))


class TestView:
    def test_cross_section(self, flat, tmp_path):
        path = fc.view(flat, picture=tmp_path / "a.png", size=(640, 400))
        assert path == tmp_path / "a.png"
        assert pixels(path).shape == (400, 640, 3)
        assert colours(pixels(path)) > 30
        assert [p.name for p in tmp_path.iterdir()] == ["a.png"]

    @pytest.mark.parametrize("clip", [True, False])
    def test_solid(self, solid, tmp_path, clip):
        path = fc.view(solid, picture=tmp_path / "a.png", clip=clip, arrows=clip, copies=(2, 1), size=(640, 400))
        assert colours(pixels(path)) > 30

    def test_every_field(self, flat, tmp_path):
        seen = set()
        for name in Scene(flat).names:
            path = fc.view(flat, name, picture=tmp_path / "a.png", size=(320, 240), arrows=True)
            seen.add(pixels(path).tobytes())
        assert len(seen) == len(Scene(flat).names)

    def test_log_scale_changes_the_picture(self, flat, tmp_path):
        made = [fc.view(flat, picture=tmp_path / f"{log}.png", log=log, size=(320, 240)) for log in (True, False)]
        assert not np.array_equal(*map(pixels, made))

    def test_constant_field(self, tmp_path):
        dark = solve(cell(light=None))
        assert fc.view(dark, picture=tmp_path / "a.png", size=(320, 240), arrows=True, log=True).exists()

    def test_without_display_it_saves_a_picture(self, flat, tmp_path, monkeypatch):
        monkeypatch.setattr("fem_carriers.output.window.has_display", lambda: False)
        monkeypatch.chdir(tmp_path)
        with pytest.warns(UserWarning, match=r"no display.*excess_density_per_cm3\.png"):
            path = fc.view(flat, size=(320, 240))
        assert colours(pixels(path)) > 10

    def test_display(self, monkeypatch):
        monkeypatch.setattr("sys.platform", "linux")
        monkeypatch.setattr(pv, "OFF_SCREEN", False)
        monkeypatch.delenv("WAYLAND_DISPLAY", raising=False)
        monkeypatch.delenv("DISPLAY", raising=False)
        assert not has_display()
        monkeypatch.setenv("DISPLAY", ":0")
        assert has_display()

    @pytest.mark.parametrize(
        ("arguments", "words"),
        [
            ({"field": "temperature_K"}, ["temperature_K", "excess_density_per_cm3", "diffusion_length_um"]),
            ({"picture": "a.bmp"}, ["a.bmp", ".png"]),
            ({"picture": "absent/a.png"}, ["existing folder"]),
            ({"copies": (0, 1)}, ["copies", "1 to"]),
            ({"copies": (2, 2)}, ["along y", "cross section"]),
            ({"stretch_z": 0}, ["stretch_z", "above 0"]),
            ({"size": (10, 10)}, ["size", "pixels"]),
        ],
    )
    def test_refusals(self, flat, tmp_path, monkeypatch, arguments, words):
        monkeypatch.chdir(tmp_path)
        with pytest.raises(fc.InputError) as error:
            fc.view(flat, **{"picture": "a.png"} | arguments)
        assert all(word in str(error.value) for word in words)


class TestImages:
    def test_mirror_images_are_the_symmetric_continuation(self, solid):
        scene = Scene(solid)
        grid = scene.grid(images(solid.problem, (2, 2)))
        points = np.random.default_rng(1).uniform(1, 159, (40, 3))
        here = pv.PolyData(points).sample(grid, tolerance=1e-9)["excess_density_per_cm3"]
        for sign in ([-1, 1, 1], [1, -1, 1], [-1, -1, 1]):
            there = pv.PolyData(points * sign).sample(grid, tolerance=1e-9)["excess_density_per_cm3"]
            assert np.allclose(there, here, rtol=1e-6)
        assert grid.compute_cell_sizes()["Volume"].min() > 0
        assert np.allclose(grid.bounds, [-300, 300, -300, 300, 0, 160])

    def test_mirrored_flux_points_to_the_mirrored_contact(self, flat):
        grid = Scene(flat).grid(images(flat.problem, (2, 1)))
        flux, centre = grid["flux"], grid.cell_centers().points
        half = grid.n_cells // 2
        assert np.allclose(flux[half:] * [-1, 1, 1], flux[:half])
        assert np.allclose(centre[half:] * [-1, 1, 1], centre[:half])

    def test_periods_are_translated(self):
        problem = fc.problem(cell(symmetry="periodic"), first_step_um=8, growth=3)
        offsets = [i.offset_um[0] for i in images(problem, (3, 1))]
        assert offsets == pytest.approx([0, -600, 600])
        assert not any(i.inverted for i in images(problem, (3, 1)))

    def test_four_pieces_lie_side_by_side(self, flat):
        ends = [sorted(i.points(np.array([[0.0, 0, 0], [300.0, 0, 0]]))[:, 0]) for i in images(flat.problem, (4, 1))]
        assert ends[0] == [0, 300]
        assert np.allclose(sorted(ends), [[-600, -300], [-300, 0], [0, 300], [300, 600]])

    def test_real_edge_ends_the_copies(self):
        problem = fc.problem(cell(sides={"x_max": fc.Surface(srv_cm_per_s=1e4)}), first_step_um=8, growth=3)
        assert {i.offset_um[0] for i in images(problem, (2, 1))} == {0}
        with pytest.raises(fc.InputError, match="real edges"):
            images(problem, (3, 1))

    def test_imported_meshes_do_not_repeat(self, flat):
        p = flat.problem
        imported = fc.Problem(p.mesh, p.volumes, p.surfaces, cell_area_cm2=1.0)
        assert images(imported, (1, 1)) == [ITSELF]
        with pytest.raises(fc.InputError, match="imported"):
            images(imported, (2, 1))


class TestScene:
    def test_regions(self, solid):
        regions = {r.name: r for r in Scene(solid).regions}
        assert next(iter(regions)) == "rear.metal"
        assert regions["rear.metal"].title == "rear.metal (contact back)"
        assert not regions["x_min"].described
        length = np.linalg.norm(np.diff(regions["rear.metal"].edges_um, axis=1), axis=2).sum()
        assert length == pytest.approx(2 * (40 + 60))

    def test_names_stand_on_their_surface(self, solid):
        for region in Scene(solid).regions:
            anchor = region.anchor_um(np.full(len(region.spots_um), 1e9))
            assert np.abs(region.spots_um - anchor).max(axis=1).min() == 0
        assert region.anchor_um(np.zeros(len(region.spots_um))) is None

    def test_no_seams_between_images(self, solid):
        scene = Scene(solid)
        finger = next(r for r in scene.regions if r.name == "front.finger")
        lines = scene.lines(finger, images(solid.problem, (2, 2)))
        assert lines.n_lines == 4  # one rectangle, 60 by 600 µm
        assert lines.length == pytest.approx(math.hypot(60, 600))

    def test_straight_chains_become_one_segment(self):
        corner = np.array([[0.0, 0, 0], [1, 0, 0], [1 + 1e-5, 0, 0], [3, 0, 0], [3, 2, 0]])
        joined = straight_lines(np.stack([corner[:-1], corner[1:]], axis=1))
        assert sorted(np.linalg.norm(np.diff(joined, axis=1), axis=2).ravel()) == pytest.approx([2, 3])

    def test_arrows_follow_the_flux(self, flat):
        scene = Scene(flat)
        grid = scene.grid([ITSELF])
        arrows = scene.arrows(grid, None)
        low, high = np.reshape(grid.bounds, (3, 2)).T
        assert arrows.n_cells > 1000
        assert (arrows.center > low - 1)[[0, 2]].all()
        assert (arrows.center < high + 1)[[0, 2]].all()

    def test_stretching_moves_depth_only(self, flat):
        assert np.allclose(Scene(flat, 4.0).grid([ITSELF]).bounds, [0, 300, 0, 0, 0, 640])


@pytest.fixture
def window(solid):
    plotter = new_plotter(True, (400, 300))
    drawing = Drawing(Scene(solid), plotter, "excess_density_per_cm3", [ITSELF], log=None, clip=True, arrows=False)
    drawing.draw()
    yield Window(drawing, (1, 1))
    plotter.close()


class TestKeys:
    def test_fields(self, window):
        names = window.drawing.scene.names
        window.keys()["n"]()
        assert window.drawing.field == names[1]
        window.keys()["b"]()
        window.keys()["b"]()
        assert window.drawing.field == names[-1]

    def test_log(self, window):
        before = window.drawing.is_log
        window.keys()["l"]()
        assert window.drawing.is_log is not before

    def test_copies(self, window):
        window.keys()["m"]()
        assert len(window.drawing.shown) == 4
        assert window.drawing.grid.bounds[0] == -300
        window.keys()["m"]()
        assert len(window.drawing.shown) == 1

    def test_names(self, window):
        assert "names of surfaces" in "".join(window.plotter.actors)
        window.keys()["o"]()
        assert "names of surfaces" not in "".join(window.plotter.actors)
        assert "outline 0" not in window.plotter.actors

    def test_saved_pictures_are_numbered(self, window, tmp_path, monkeypatch):
        monkeypatch.chdir(tmp_path)
        assert [window.keys()["s"]().name for _ in range(2)] == [f"excess_density_per_cm3-{i}.png" for i in (1, 2)]
        assert colours(pixels(tmp_path / "excess_density_per_cm3-2.png")) > 20

    def test_moving_the_cut(self, window):
        assert window.plotter.actors["body"].bounds == pytest.approx((0, 300, 150, 300, 0, 160))
        window._move_plane((1.0, 0, 0), (100.0, 0, 0))
        assert window.plotter.actors["body"].bounds == pytest.approx((100, 300, 0, 300, 0, 160))
        window.keys()["period"]()
        window.keys()["period"]()
        window.keys()["comma"]()
        assert window.plotter.actors["body"].bounds == pytest.approx((115, 300, 0, 300, 0, 160))


class TestAxes:
    def test_ticks_are_round_and_inside(self):
        assert ticks(0, 160, 4).tolist() == [0, 40, 80, 120, 160]
        assert ticks(-600, 600, 6).tolist() == [-600, -400, -200, 0, 200, 400, 600]

    def test_numbers_are_true_when_depth_is_stretched(self):
        z = axes((0, 300, 0, 0, 0, 640), 4.0)[-1]
        assert z.texts == ["0", "40", "80", "120", "160", "z (µm)"]
        assert z.segments[-1, 0, 2] == 640

    def test_box_is_complete(self):
        bounds = (0, 3, 0, 2, 0, 1)
        assert len(other_edges(bounds, axes(bounds, 1.0))) == 9


@pytest.mark.parametrize(
    ("name", "text"),
    [
        ("excess_density_per_cm3", "excess density (cm⁻³)"),
        ("pitch_um", "pitch (µm)"),
        ("collected_front_mA_per_cm2", "collected front (mA/cm²)"),
        ("front.finger.width_um", "front finger width (µm)"),
        ("generation_rate_per_cm3_s", "generation rate (cm⁻³ s⁻¹)"),
        ("quasi_fermi_splitting_V", "quasi-Fermi splitting (V)"),
        ("efficiency_percent", "efficiency (%)"),
        ("sheet_resistance_ohm_per_sq", "sheet resistance (Ω/sq)"),
        ("contact_resistivity_mohm_cm2", "contact resistivity (mΩ cm²)"),
        ("resistivity_ohm_cm", "resistivity (Ω cm)"),
        ("J0_fA_per_cm2", "J0 (fA/cm²)"),
        ("srv_cm_per_s", "surface recombination velocity (cm/s)"),
        ("lifetime_us", "lifetime (µs)"),
        ("voc_V", "open-circuit voltage (V)"),
        ("mobility_n_cm2_per_Vs", "mobility n (cm²/(V s))"),
        ("unknowns", "unknowns"),
    ],
)
def test_labels(name, text):
    assert label(name) == text


class TestScales:
    def test_log_for_densities_that_span_decades(self):
        wide, narrow = np.logspace(10, 15, 200), np.linspace(1, 50, 200)
        assert log_by_default("excess_density_per_cm3", wide)
        assert not log_by_default("excess_density_per_cm3", narrow)
        assert not log_by_default("quasi_fermi_splitting_V", wide)
        assert not log_by_default("excess_density_per_cm3", np.zeros(3))

    def test_a_few_small_cells_do_not_take_the_scale(self):
        values, volumes = np.array([1e5, 1e14, 2e14, 3e14]), np.array([1e-6, 1, 1, 1])
        assert log_range(values, volumes) == (1e14, 3e14)
        assert not log_by_default("excess_density_per_cm3", values, volumes)

    def test_ranges_of_nothing(self):
        assert linear_range(np.array([np.nan])) == (0, 1)
        assert linear_range(np.array([2.0, np.inf, 2.0])) == (1.98, 2.02)
        assert log_range(np.array([-1.0, 0.0])) == (0.1, 1)


def sweep_table():
    pitch = np.array([1000.0, 400, 600, 200, 800, 1500])
    collected = 40 - ((pitch - 600) / 400) ** 2
    collected[-1] = np.nan
    losses = {f"lost_part_{i}_mA_per_cm2": 0.1 * i + pitch / 1e3 for i in range(9)}
    return pd.DataFrame(
        {"pitch_um": pitch, "shaded_mA_per_cm2": 600 / pitch, "reflected_mA_per_cm2": 1.0 + 0 * pitch,
         "collected_front_mA_per_cm2": collected, **losses, "note": ["", "", "", "", "", "too wide"]}
    )  # fmt: skip


class TestPlots:
    def test_sweep(self, tmp_path):
        """Best 40 at 600; 0.5 % of it is 0.2, by which the parabola has fallen 400 √0.2 = 178.9 µm away."""
        figure = fc.plot_sweep(sweep_table(), picture=tmp_path / "a.png")
        above, below = figure.axes
        assert above.get_ylabel() == "collected front (mA/cm²)"
        assert below.get_xlabel() == "pitch (µm)"
        names = [t.get_text() for t in above.get_legend().get_texts()]
        assert names == ["no result", "best: 40 mA/cm²\nat 600 µm", "within 0.5 %:\n421.1 to 778.9 µm"]
        assert len(below.get_legend().get_texts()) == 8
        assert below.get_legend().get_texts()[0].get_text() == "other"
        heights = below.dataLim.ymax
        rows = sweep_table().iloc[:5]
        expected = rows[[c for c in rows if c.startswith(("shaded", "reflected", "lost"))]].sum(axis=1).max()
        assert heights == pytest.approx(expected)
        assert pixels(tmp_path / "a.png").shape[1] == round(7.2 * 150)
        assert colours(pixels(tmp_path / "a.png")) > 20

    def test_one_point_and_another_column(self):
        figure = fc.plot_sweep(sweep_table().iloc[:1].assign(efficiency_percent=22.0), y="efficiency_percent")
        assert figure.axes[0].get_ylabel() == "efficiency (%)"
        assert len(figure.axes[1].patches) == 8

    def test_sweep_without_losses(self):
        table = sweep_table()[["pitch_um", "collected_front_mA_per_cm2"]]
        assert len(fc.plot_sweep(table).axes) == 1

    @pytest.mark.parametrize(
        ("change", "arguments", "words"),
        [
            (lambda t: t, {"x": "width_um"}, ["width_um", "pitch_um"]),
            (lambda t: t, {"x": "note"}, ["note", "numbers"]),
            (lambda t: t.iloc[:0], {}, ["empty"]),
            (lambda t: t.iloc[-1:], {}, ["finite result"]),
            (lambda t: t.drop(columns="collected_front_mA_per_cm2"), {}, ["collected_", "y="]),
            (lambda t: t, {"picture": "a.gif"}, ["a.gif", ".png"]),
        ],
    )
    def test_refused_sweeps(self, change, arguments, words):
        with pytest.raises(fc.InputError) as error:
            fc.plot_sweep(change(sweep_table()), **arguments)
        assert all(word in str(error.value) for word in words)

    def test_line(self, flat, tmp_path):
        line = flat.along_line((0, 80), (300, 80), 31)
        figure = fc.plot_line(line, picture=tmp_path / "a.png")
        assert figure.axes[0].get_ylabel() == "excess density (cm⁻³)"
        assert np.allclose(figure.axes[0].lines[0].get_ydata(), line["excess_density_per_cm3"])
        assert fc.plot_line(line, log=True).axes[0].get_yscale() == "log"
        assert colours(pixels(tmp_path / "a.png")) > 5

    def test_several_lines_share_their_unit(self, flat):
        line = flat.along_line((0, 80), (300, 80), 31)
        line["hole_density_per_cm3"] = flat.along_line((0, 80), (300, 80), 31, "hole_density_per_cm3").iloc[:, -1]
        ax = fc.plot_line(line).axes[0]
        assert ax.get_ylabel() == "cm⁻³"
        assert [t.get_text() for t in ax.get_legend().get_texts()] == ["hole density", "excess density"]

    def test_line_without_field(self, flat):
        with pytest.raises(fc.InputError, match="field"):
            fc.plot_line(flat.along_line((0, 80), (300, 80)).iloc[:, :3])

    def test_lateral_losses(self, flat, tmp_path):
        table = fc.lateral_losses(flat, edges_um=6)
        figure = fc.plot_lateral_losses(table, picture=tmp_path / "a.svg")
        stairs = [p for ax in figure.axes for p in ax.patches]
        assert np.allclose(stairs[0].get_data().values, table["generated_mA_per_cm2"])
        assert np.allclose(stairs[3].get_data().values, table["lost_at_surfaces_mA_per_cm2"])
        assert (tmp_path / "a.svg").read_text().startswith("<?xml")
        with pytest.raises(fc.InputError, match="generated"):
            fc.plot_lateral_losses(table.iloc[:, :2])

    def test_nothing_is_registered_globally(self):
        import sys

        if "matplotlib.pyplot" in sys.modules:
            assert sys.modules["matplotlib.pyplot"].get_fignums() == []
