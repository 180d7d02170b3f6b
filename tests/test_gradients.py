"""Gradients by the adjoint against central differences of full solutions on the same moved mesh; sensitivity table."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest
from simple_cells import box_mesh, constant_base, junction

import fem_carriers as fc
from fem_carriers.analysis import held
from fem_carriers.cell.inner import InnerSurface
from fem_carriers.meshing.moved_mesh import moved_mesh
from fem_carriers.output.fit_plot import plot_sensitivity
from fem_carriers.studies.gradients import gradients, input_words, sensitivity_table
from fem_carriers.studies.paths import changed
from fem_carriers.transport.moved import with_cell

STEP = 1e-3
FIGURES = ("jsc_mA_per_cm2", "voc_V", "fill_factor_percent", "maximum_power_mW_per_cm2", "efficiency_percent")


def rich_cell(**changes):
    """Every kind of input holds a number: layers, contacts, shunt, J02, opaque width, a grain boundary, an edge."""
    wafer = fc.Base("p", resistivity_ohm_cm=0.9, thickness_um=150, lifetime_us=300)
    layer = fc.DopedLayer("n", 130, absorbing_depth_um=0.05, collection=0.7)
    surface = fc.Surface(J0_fA_per_cm2=28, J02_nA_per_cm2=2.0, shunt_ohm_cm2=1e4, layer=layer)
    metal = fc.Contact("front", contact_resistivity_mohm_cm2=1.5)
    finger = fc.Strip("finger", 28, J0_fA_per_cm2=750, contact=metal, opaque_width_um=22)
    line = fc.Strip("line", 45, srv_cm_per_s=900, contact=fc.Contact("rear", 1))
    return fc.UnitCell(
        **{
            "base": wafer, "pitch_um": 1200, "front": fc.Face(surface, [finger]),
            "rear": fc.Face(fc.Surface(srv_cm_per_s=20), [line]),
            "light": fc.Light.sunlight(0.02, path="lambertian"),
            "inner": {"gb": InnerSurface(x_um=200, srv_cm_per_s=500, from_z_um=20)},
            "sides": {"x_max": fc.Surface(srv_cm_per_s=300, J02_edge_nA_per_cm=5)},
        } | changes
    )  # fmt: skip


@pytest.fixture(scope="module")
def lit():
    posed = fc.problem(rich_cell(), level=-4)
    curve = fc.current_voltage(posed, [])
    return posed, curve, sensitivity_table(curve)


VOLTAGE_V = 0.57


@pytest.fixture(scope="module")
def at_a_voltage(lit):
    table = gradients(fc.solve_bipolar(lit[0], VOLTAGE_V), "collected_front_mA_per_cm2")
    return table.set_index("input")


def figures(curve):
    best = curve.maximum_power.power_mW_per_cm2
    return np.array([curve.jsc_mA_per_cm2, curve.voc_V, curve.fill_factor_percent, best, curve.efficiency_percent])


def by_differences(posed, path, value, number, step=STEP):
    """dNumber/dInput by central differences of full solutions, of fourth order in the step."""
    cell = posed.cell
    at = lambda k: number(with_cell(posed, cell, changed(cell, {path: value * (1 + k * step)})))
    return ((at(1) - at(-1)) * 4 - (at(2) - at(-2)) / 2) / (6 * step * value)


class TestCurve:
    PATHS = (
        "base.temperature_K", "base.resistivity_ohm_cm", "base.lifetime_us", "base.thickness_um", "pitch_um",
        "front.finger.width_um", "front.finger.opaque_width_um", "front.J0_fA_per_cm2", "front.J02_nA_per_cm2",
        "front.shunt_ohm_cm2", "front.layer.sheet_resistance_ohm_per_sq", "front.layer.absorbing_depth_um",
        "front.layer.collection", "front.finger.contact.contact_resistivity_mohm_cm2", "rear.srv_cm_per_s",
        "rear.line.width_um", "inner.gb.srv_cm_per_s", "inner.gb.x_um", "inner.gb.from_z_um", "light.suns",
        "light.reflectance", "sides.x_max.srv_cm_per_s", "sides.x_max.J02_edge_nA_per_cm",
    )  # fmt: skip

    @pytest.mark.parametrize("path", ["base.temperature_K", "pitch_um", "light.suns", "front.finger.width_um"])
    def test_figures_against_differences(self, lit, path):
        """1e-6 of the derivative, or of 1 ppm of the figure per 1 % of the input where that nearly vanishes."""
        posed, curve, table = lit
        row = table[table["input"] == path].iloc[0]
        wanted = (
            0.01
            * row["value"]
            * by_differences(posed, path, row["value"], lambda p: figures(fc.current_voltage(p, [])))
        )
        found = np.array([row[f"change_{name}"] for name in FIGURES])
        assert (np.abs(found - wanted) <= 1e-6 * np.maximum(np.abs(wanted), 1e-4 * np.abs(figures(curve)))).all()

    @pytest.mark.parametrize("path", PATHS)
    def test_every_kind_of_input(self, lit, at_a_voltage, path):
        """Of the current near maximum power; full solutions at that voltage are differenced."""
        value, found = at_a_voltage.loc[path, ["value", "derivative_collected_front_mA_per_cm2"]]
        solve = lambda p: fc.solve_bipolar(p, VOLTAGE_V).collected_mA_per_cm2["front"]
        wanted = by_differences(lit[0], path, value, solve)
        assert found == pytest.approx(wanted, rel=1e-6, abs=1e-8 / value)

    def test_every_number_has_a_derivative(self, lit):
        table = lit[2]
        assert set(self.PATHS) <= set(table["input"])
        assert (table["note"] == "").all()
        assert table.filter(like="change_").notna().all(axis=None)

    def test_sorted_and_in_words(self, lit):
        table = lit[2]
        size = table["change_efficiency_percent"].abs().to_numpy()
        assert (np.diff(size) <= 0).all()
        row = table[table["input"] == "front.layer.sheet_resistance_ohm_per_sq"].iloc[0]
        amount = f"{-row['change_efficiency_percent']:.2g}"
        assert row["in_words"] == f"1 % more front layer sheet resistance costs {amount} % absolute of efficiency"
        assert input_words("front.finger.contact.contact_resistivity_mohm_cm2") == "front finger contact resistivity"

    @pytest.mark.parametrize(
        ("figure", "solves"), [("voc_V", 1), ("maximum_power_mW_per_cm2", 1), ("jsc_mA_per_cm2", 1)]
    )
    def test_cost_in_solves(self, lit, monkeypatch, figure, solves):
        counted = []
        solve = held.BipolarResponse.multipliers
        monkeypatch.setattr(held.BipolarResponse, "multipliers", lambda *a: counted.append(1) or solve(*a))
        table = gradients(lit[1], figure, list(self.PATHS[:4]))
        assert len(table) == 4
        assert len(counted) == solves

    def test_plot(self, lit, tmp_path):
        figure = plot_sensitivity(lit[2], tmp_path / "sensitivity.png")
        assert figure.axes[0].get_xlabel().endswith("for 1 % more (% absolute)")
        assert (tmp_path / "sensitivity.png").stat().st_size > 10_000
        with pytest.raises(fc.InputError, match="figure = 'nothing'"):
            plot_sensitivity(lit[2], figure="nothing")


def test_n_type_base_and_ideal_contacts():
    emitter = fc.Face(
        fc.Surface(J0_fA_per_cm2=20, layer=fc.DopedLayer("p", 90)), [fc.Strip("metal", 60, contact=fc.Contact("plus"))]
    )
    rear = fc.Surface(J0_fA_per_cm2=10, layer=fc.DopedLayer("n", 60), contact=fc.Contact("minus"))
    wafer = fc.Base("n", doping_per_cm3=3e15, thickness_um=120, tau_n0_us=200, tau_p0_us=900)
    posed = fc.problem(fc.UnitCell(wafer, 800, front=emitter, rear=rear, light=fc.Light.sunlight(0.05)), level=-4)
    table = sensitivity_table(fc.current_voltage(posed, []))
    for path in ("base.tau_p0_us", "base.doping_per_cm3", "front.metal.width_um"):
        row = table[table["input"] == path].iloc[0]
        wanted = by_differences(posed, path, row["value"], lambda p: fc.current_voltage(p, []).efficiency_percent)
        assert row["change_efficiency_percent"] == pytest.approx(0.01 * row["value"] * wanted, rel=1e-6)


def low_light(share=1e-4):
    """With metal on all of the layer, so that the excess-carrier form is right in every respect."""
    front = fc.Surface(J0_fA_per_cm2=28, layer=fc.DopedLayer("n", 130), contact=fc.Contact("front"))
    return rich_cell(front=front, light=fc.Light.sunlight(0.02).scaled(share))


class TestSolutions:
    @pytest.mark.parametrize("voltage", [0.0, 0.45])
    def test_excess_form(self, voltage):
        posed = fc.problem(low_light(), level=-4)
        solve = lambda p: fc.solve_excess(p, voltage).collected_mA_per_cm2["front"]
        table = gradients(fc.solve_excess(posed, voltage), "collected_front_mA_per_cm2").set_index("input")
        for path in ("base.lifetime_us", "base.temperature_K", "pitch_um", "rear.line.srv_cm_per_s", "inner.gb.x_um"):
            value, found = table.loc[path, ["value", "derivative_collected_front_mA_per_cm2"]]
            assert found == pytest.approx(by_differences(posed, path, value, solve), rel=1e-6)

    def test_bipolar_form(self):
        posed = fc.problem(rich_cell(), level=-4)
        solution = fc.solve_bipolar(posed, 0.55)
        for terminal in ("front", "rear"):
            figure = f"collected_{terminal}_mA_per_cm2"
            row = gradients(solution, figure, ["pitch_um"]).iloc[0]
            solve = lambda p, t=terminal: fc.solve_bipolar(p, 0.55).collected_mA_per_cm2[t]
            assert row[f"derivative_{figure}"] == pytest.approx(
                by_differences(posed, "pitch_um", 1200, solve), rel=1e-6
            )

    def test_round_contacts_in_three_dimensions(self):
        """On cells bent onto circles, whose points follow the outlines."""
        layer = fc.Surface(J0_fA_per_cm2=30, layer=fc.DopedLayer("n", 90), contact=fc.Contact("front"))
        rear = fc.Face(fc.Surface(J0_fA_per_cm2=5), [fc.Dot("dot", 80, srv_cm_per_s=1e4)])
        wafer = fc.Base("p", resistivity_ohm_cm=1.0, thickness_um=100, lifetime_us=50)
        light = fc.Light.sunlight(0.02).scaled(1e-3)
        posed = fc.problem(fc.UnitCell(wafer, 400, 300, front=layer, rear=rear, light=light), level=-4)
        figure = "collected_front_mA_per_cm2"
        table = gradients(fc.solve_excess(posed), figure).set_index("input")
        solve = lambda p: fc.solve_excess(p).collected_mA_per_cm2["front"]
        for path in ("rear.dot.diameter_um", "pitch_y_um", "base.thickness_um"):
            value, found = table.loc[path, ["value", f"derivative_{figure}"]]
            assert found == pytest.approx(by_differences(posed, path, value, solve), rel=1e-6)

    def test_zero_inputs_and_what_has_no_derivative(self):
        posed = fc.problem(fc.UnitCell(
            constant_base(30, 5.0), 400, front=junction("front"), light=fc.Light.sunlight(lowest_nm=300).scaled(1e-3),
            rear=fc.Surface(srv_cm_per_s=0.0), sides={"x_max": fc.Surface(srv_cm_per_s=math.inf)},
        ), level=-3)  # fmt: skip
        paths = ["rear.srv_cm_per_s", "light.lowest_nm", "sides.x_max.srv_cm_per_s"]
        table = gradients(fc.solve_excess(posed), "collected_front_mA_per_cm2", paths)
        solve = lambda s: fc.solve_excess(
            with_cell(posed, posed.cell, changed(posed.cell, {"rear.srv_cm_per_s": s}))
        ).collected_mA_per_cm2["front"]
        h = 0.5
        wanted = (-3 * solve(0.0) + 4 * solve(h) - solve(2 * h)) / (2 * h)
        assert table.iloc[0, 2] == pytest.approx(wanted, rel=1e-6)
        assert table["note"][1] == "the spectrum is a table with steps"
        assert table["note"][2] == "no finite number"

    def test_a_spacing_cannot_change_alone(self):
        rear = fc.Face(fc.Surface(J0_fA_per_cm2=5), [fc.Strip("line", 40, spacing_um=300, contact=fc.Contact("rear"))])
        posed = fc.problem(fc.UnitCell(constant_base(30, 5.0), 600, front=junction("front"), rear=rear), level=-4)
        table = gradients(fc.solve_excess(posed), "collected_front_mA_per_cm2", ["rear.line.spacing_um"])
        assert table["note"][0].startswith("cannot change alone")

    def test_refusals(self, lit):
        posed, curve, _ = lit
        with pytest.raises(fc.InputError, match="figure 'power'"):
            gradients(curve, "power")
        with pytest.raises(fc.InputError, match="path 'pitch'"):
            gradients(curve, "voc_V", ["pitch"])
        with pytest.raises(fc.InputError, match="a result of current_voltage"):
            gradients(posed, "voc_V")
        given = fc.problem(low_light(), level=-4)
        other = dict(given.surfaces) | {"rear": fc.Surface(srv_cm_per_s=5)}
        with pytest.raises(fc.InputError, match="before it is meshed"):
            gradients(fc.solve_excess(given.changed(surfaces=other)), "collected_front_mA_per_cm2")
        mesh = box_mesh("quad", np.linspace(0, 50, 6), np.linspace(0, 50, 6))
        imported = fc.Problem(mesh, {"base": constant_base(30, 5.0)}, {"z_max": junction("front")}, cell_area_cm2=1.0)
        with pytest.raises(fc.InputError, match="made from a UnitCell"):
            gradients(fc.solve_excess(imported), "collected_front_mA_per_cm2")


class TestMovedMesh:
    @pytest.mark.parametrize(
        ("path", "value"), [("pitch_um", 1210.0), ("front.finger.width_um", 29.0), ("base.thickness_um", 160.0)]
    )
    def test_areas_are_those_of_the_new_cell(self, path, value):
        """Every surface and the volume, against meshes made for the new cell."""
        cell = rich_cell()
        new = changed(cell, {path: value})
        mesh = moved_mesh(fc.problem(cell, level=-4).mesh, cell, new)
        made = fc.problem(new, level=-4).mesh
        assert mesh.volume_cm3() == pytest.approx(made.volume_cm3(), rel=1e-12)
        for name in made.surfaces:
            assert mesh.surface_area_cm2(name) == pytest.approx(made.surface_area_cm2(name), rel=1e-12)

    def test_outlines_in_one_place_cannot_part(self):
        rear = fc.Face(fc.Surface(J0_fA_per_cm2=5), [fc.Strip("line", 28, contact=fc.Contact("rear"))])
        cell = rich_cell(rear=rear)
        with pytest.raises(fc.MeshError, match="part or meet"):
            moved_mesh(fc.problem(cell, level=-4).mesh, cell, changed(cell, {"front.finger.width_um": 29.0}))

    def test_same_mesh_where_nothing_moves(self):
        cell = rich_cell()
        mesh = fc.problem(cell, level=-4).mesh
        assert moved_mesh(mesh, cell, changed(cell, {"base.lifetime_us": 10.0})) is mesh


def test_table_of_gradients_is_a_table(lit):
    table = gradients(lit[1], "voc_V", ["base.lifetime_us"])
    assert isinstance(table, pd.DataFrame)
    assert list(table) == ["input", "value", "derivative_voc_V", "change_voc_V", "note"]
    assert table["change_voc_V"][0] == pytest.approx(0.01 * 300 * table["derivative_voc_V"][0])
