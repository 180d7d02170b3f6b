"""Inputs by path, sweeps, and the best point of a sweep."""

import math
import os
import signal
import subprocess
import sys
import time
import warnings

import numpy as np
import pandas as pd
import pytest

import fem_carriers as fc
from fem_carriers.errors import SweepInterrupted
from fem_carriers.studies.best import best_point
from fem_carriers.studies.columns import collected_current
from fem_carriers.studies.paths import changed, known_paths, value_at
from fem_carriers.studies.sweep import sweep

N_LAYER = fc.DopedLayer("n", 120)


def two_dimensional(pitch_um=400.0, width_um=30.0, lifetime_us=200.0, light=None):
    return fc.UnitCell(
        fc.Base("p", doping_per_cm3=1e16, thickness_um=150, lifetime_us=lifetime_us),
        pitch_um,
        front=fc.Face(
            fc.Surface(J0_fA_per_cm2=6),
            [fc.Strip("finger", width_um, layer=N_LAYER, J0_fA_per_cm2=400, contact=fc.Contact("front", 2))],
        ),
        rear=fc.Face(fc.Surface(J0_fA_per_cm2=9), [fc.Strip("metal", 50, contact=fc.Contact("back"))]),
        light=light or fc.Light.sunlight(0.02),
        sides={"x_max": fc.Surface(srv_cm_per_s=100)},
    )


def patch_on_patch():
    return fc.UnitCell(
        fc.Base("p", resistivity_ohm_cm=2, thickness_um=150, tau_n0_us=100, tau_p0_us=1000),
        400,
        400,
        front=fc.Face(
            fc.Surface(J0_fA_per_cm2=6),
            [
                fc.Strip("strip", 100, layer=N_LAYER, J0_fA_per_cm2=50),
                fc.Strip("metal", 40, J0_fA_per_cm2=500, contact=fc.Contact("front", 3)),
            ],
        ),
        rear=fc.Face(fc.Surface(srv_cm_per_s=10), [fc.Dot("dot", 60, center_um=(0, 0), srv_cm_per_s=1e4)]),
        light=fc.Light.uniform(1e18) + fc.Light.monochromatic(flux_per_cm2_s=1e17, wavelength_nm=800),
    )


def light_entered(cell):
    """A cheap computation: current that enters a cell of this pitch and suns, in arbitrary units."""
    return {"entered": cell.light.sources[0].suns * (1 - cell.front.patches[0].width_um / cell.pitch_um)}


def dies_at_400(cell):
    if cell.pitch_um == 400:
        os._exit(3)
    return {"pitch_again_um": cell.pitch_um, "process": os.getpid()}


def nothing(cell):
    return {}


class TestPaths:
    @pytest.mark.parametrize("build", [two_dimensional, patch_on_patch])
    def test_every_path_reads_and_changes_back_to_the_same_cell(self, build):
        cell = build()
        for path in known_paths(cell):
            value = value_at(cell, path)
            if isinstance(value, int | float):
                assert value_at(changed(cell, {path: value}), path) == value
        stated = {p: value_at(cell, p) for p in known_paths(cell) if value_at(cell, p) is not None}
        assert value_at(changed(cell, stated), "base.thickness_um") == 150

    def test_documented_paths(self):
        cell = two_dimensional()
        new = changed(
            cell,
            {
                "pitch_um": 900, "base.lifetime_us": 50, "front.J0_fA_per_cm2": 1, "front.finger.width_um": 20,
                "front.finger.layer.sheet_resistance_ohm_per_sq": 80, "sides.x_max.srv_cm_per_s": math.inf,
                "front.finger.contact.contact_resistivity_mohm_cm2": 5, "light.suns": 2, "light.0.reflectance": 0.1,
            },
        )  # fmt: skip
        finger = new.front.patches[0]
        assert (new.pitch_um, new.base.lifetime_us, new.front.surface.J0_fA_per_cm2, finger.width_um) == (
            900,
            50,
            1,
            20,
        )
        assert finger.layer.sheet_resistance_ohm_per_sq == 80
        assert finger.contact.contact_resistivity_mohm_cm2 == 5
        assert new.sides["x_max"].pins_to_zero
        assert (new.light.sources[0].suns, new.light.sources[0].reflectance) == (2, 0.1)
        assert cell == two_dimensional()  # the given cell is as it was
        assert changed(cell, {"front.surface.J0_fA_per_cm2": 1}) == changed(cell, {"front.J0_fA_per_cm2": 1})

    def test_three_dimensional_paths(self):
        cell = patch_on_patch()
        new = changed(cell, {"rear.dot.diameter_um": 90, "rear.dot.center_x_um": 200, "pitch_y_um": 500})
        dot = new.rear.patches[0]
        assert (dot.diameter_um, dot.center_um, new.pitch_y_um) == (90, (200, 0), 500)
        assert changed(cell, {"light.1.flux_per_cm2_s": 7}).light.sources[1].flux_per_cm2_s == 7
        assert value_at(cell, "rear.dot.center_y_um") == 0

    def test_inherited_values_read_through_and_may_be_set(self):
        cell = patch_on_patch()
        path = "front.metal.layer.sheet_resistance_ohm_per_sq"  # from the strip below
        assert value_at(cell, path) == 120
        new = changed(cell, {path: 60})
        assert value_at(new, path) == 60
        assert value_at(new, "front.strip.layer.sheet_resistance_ohm_per_sq") == 120
        below = changed(cell, {"front.strip.layer.sheet_resistance_ohm_per_sq": 40})
        assert value_at(below, path) == 40
        assert value_at(two_dimensional(), "rear.metal.J0_fA_per_cm2") == 9
        assert (
            value_at(changed(two_dimensional(), {"rear.metal.J0_fA_per_cm2": 700}), "rear.metal.J0_fA_per_cm2") == 700
        )

    def test_together_where_one_by_one_would_be_refused(self):
        cell = two_dimensional()
        with pytest.raises(fc.InputError, match="width_um"):
            changed(cell, {"pitch_um": 20})
        new = changed(cell, {"pitch_um": 20, "front.finger.width_um": 5, "rear.metal.width_um": 6})
        assert new.pitch_um == 20

    def test_inputs_that_exclude_each_other_replace_each_other(self):
        assert changed(patch_on_patch(), {"base.doping_per_cm3": 1e15}).base.resistivity_ohm_cm is None
        assert changed(patch_on_patch(), {"base.lifetime_us": 30}).base.tau_n0_us is None
        rear = changed(patch_on_patch(), {"rear.J0_fA_per_cm2": 4, "rear.dot.J0_fA_per_cm2": 90}).layout("rear")
        assert [(r.surface.J0_fA_per_cm2, r.surface.srv_cm_per_s) for r in rear.regions] == [(4, None), (90, None)]
        with pytest.raises(fc.InputError, match="one recombination law"):
            changed(patch_on_patch(), {"rear.J0_fA_per_cm2": 4, "rear.srv_cm_per_s": 3})

    @pytest.mark.parametrize(
        ("path", "near"),
        [
            ("pitch", "pitch_um"),
            ("front.fingr.width_um", "front.finger.width_um"),
            ("front.finger.sheet_resistance_ohm_per_sq", "front.finger.layer.sheet_resistance_ohm_per_sq"),
            ("base.lifetime", "base.lifetime_us"),
            ("light.1.suns", "light.suns"),
        ],
    )
    def test_unknown_path_names_the_nearest(self, path, near):
        with pytest.raises(fc.InputError, match="known_paths") as caught:
            changed(two_dimensional(), {path: 1})
        assert near in caught.value.complaints[0].try_
        assert "numeric input" in caught.value.complaints[0].allowed

    def test_every_unknown_path_is_named_and_one_input_twice_is_refused(self):
        with pytest.raises(fc.InputError, match="2 problems"):
            changed(two_dimensional(), {"a": 1, "b": 2})
        with pytest.raises(fc.InputError, match="twice"):
            changed(two_dimensional(), {"front.J0_fA_per_cm2": 1, "front.surface.J0_fA_per_cm2": 2})


class TestSweep:
    def test_crossed_and_paired_in_order(self):
        variables = {"pitch_um": [300, 600], "light.suns": np.array([1, 2, 3])}
        crossed = sweep(two_dimensional(), variables, compute=light_entered, processes=1)
        assert list(crossed.columns) == ["pitch_um", "light.suns", "entered", "failure", "note"]
        assert crossed["pitch_um"].tolist() == [300, 300, 300, 600, 600, 600]
        assert crossed["light.suns"].tolist() == [1, 2, 3, 1, 2, 3]
        np.testing.assert_allclose(crossed["entered"], [0.9, 1.8, 2.7, 0.95, 1.9, 2.85])
        matched = {"pitch_um": [300, 600], "light.suns": [1, 3]}
        paired = sweep(two_dimensional(), matched, compute=light_entered, paired=True, processes=1)
        np.testing.assert_allclose(paired["entered"], [0.9, 2.85])
        with pytest.raises(fc.InputError, match="2 values of pitch_um, 3 values"):
            sweep(two_dimensional(), variables, compute=light_entered, paired=True)

    def test_failures_are_rows_and_keep_their_reason(self):
        def fragile(cell):
            if cell.pitch_um == 500:
                raise fc.SolverError("not converged", "no luck")
            if cell.pitch_um == 600:
                raise ZeroDivisionError("oops")
            return {"value": "text"} if cell.pitch_um == 700 else {"value": cell.pitch_um}

        table = sweep(two_dimensional(), {"pitch_um": [10, 400, 500, 600, 700, 800]}, compute=fragile, processes=1)
        assert table["value"].isna().tolist() == [True, False, True, True, True, False]
        reasons = ["width_um = 30", "", "no luck [not converged]", "ZeroDivisionError: oops", "not a number", ""]
        for found, expected in zip(table["failure"], reasons, strict=True):
            assert expected in found
            assert bool(expected) == bool(found)

    def test_every_point_fails(self):
        table = sweep(two_dimensional(), {"pitch_um": [5, 10]})
        assert table["failure"].str.contains("repeat length").all()
        assert list(table.columns) == ["pitch_um", "failure", "note"]

    def test_a_function_of_coupled_sizes(self):
        def scaled(pitch_um, share):
            return two_dimensional(pitch_um, share * pitch_um)

        table = sweep(scaled, {"pitch_um": [300, 600], "share": [0.1, 0.2]}, compute=light_entered, progress=False)
        np.testing.assert_allclose(table["entered"], [0.9, 0.8, 0.9, 0.8])
        with pytest.raises(fc.InputError, match="missing a required argument: 'pitch_um'"):
            sweep(scaled, {"pitch": [300], "share": [0.1]})
        not_a_cell = sweep(lambda pitch_um: 3, {"pitch_um": [300]}, progress=False)
        assert "returns a UnitCell" in not_a_cell["failure"][0]

    def test_refused_at_once(self):
        for variables in ({}, {"pitch_um": []}, {"pitch_um": "400"}, {"pitch_um": 400}, {"pich_um": [400]}):
            with pytest.raises(fc.InputError):
                sweep(two_dimensional(), variables)
        with pytest.raises(fc.InputError, match="processes"):
            sweep(two_dimensional(), {"pitch_um": [400]}, processes=0)
        with pytest.raises(fc.InputError, match="growth for a compute that does not take it"):
            sweep(two_dimensional(), {"pitch_um": [400]}, growth=2, compute=light_entered)

    def test_default_columns_close_both_balances(self):
        table = sweep(two_dimensional(), {"pitch_um": [300.0]}, processes=1)
        row = table.iloc[0]
        light = row["generated_mA_per_cm2"] + sum(row[f"{o}_mA_per_cm2"] for o in ("shaded", "reflected", "escaped"))
        assert light == pytest.approx(row["incident_mA_per_cm2"], rel=1e-12)
        carriers = [c for c in table if str(c).startswith(("collected_", "lost_"))]
        assert row[carriers].sum() == pytest.approx(row["generated_mA_per_cm2"], rel=1e-10)
        assert {"lost_base_Auger_mA_per_cm2", "lost_front_mA_per_cm2", "lost_rear_metal_mA_per_cm2"} <= set(carriers)
        efficiency = 100 * row["collected_front_mA_per_cm2"] / row["generated_mA_per_cm2"]
        assert row["collection_efficiency_percent"] == pytest.approx(efficiency)
        assert row["unknowns"] > 100
        assert "majority density" in row["note"]
        assert row["failure"] == ""

    def test_computations_on_problems_and_mesh_options(self):
        fine = sweep(two_dimensional(), {"pitch_um": [300]}, first_step_um=0.5, processes=1)
        coarse = sweep(two_dimensional(), {"pitch_um": [300]}, first_step_um=4, compute=fc.solve_excess, processes=1)
        with warnings.catch_warnings(record=True):
            warnings.simplefilter("always")
            direct = collected_current(two_dimensional(300), first_step_um=4)
        assert coarse["unknowns"][0] < fine["unknowns"][0]
        assert coarse["collected_front_mA_per_cm2"][0] == direct["collected_front_mA_per_cm2"]

    def test_parallel_numbers_are_the_serial_ones(self):
        """Both with one thread: tests/conftest.py limits this process, the sweep limits its workers."""
        variables = {"pitch_um": [20.0, 250.0, 500.0], "base.lifetime_us": [50.0, 500.0]}
        serial = sweep(two_dimensional(), variables, processes=1)
        parallel = sweep(two_dimensional(), variables, processes=2)
        pd.testing.assert_frame_equal(serial, parallel, check_exact=False, rtol=1e-11, atol=1e-13)
        assert (serial["failure"] != "").tolist() == [True, True, False, False, False, False]

    def test_what_cannot_be_sent_runs_here_and_says_so(self, capsys):
        lifetime = lambda x_um, y_um, z_um: 100 + 0 * x_um
        cells = {"base.lifetime_us": [lifetime, 100.0]}
        table = sweep(two_dimensional(), cells, compute=nothing, processes=2)
        assert table["failure"].tolist() == ["", ""]
        assert "in one process" in capsys.readouterr().err
        sweep(two_dimensional(), cells, compute=nothing, processes=2, progress=False)
        assert capsys.readouterr().err == ""

    def test_a_process_that_dies_costs_only_its_point(self):
        pitches = [300, 350, 400, 450, 500, 550]
        table = sweep(two_dimensional(), {"pitch_um": pitches}, compute=dies_at_400, processes=2)
        assert ["died" in f for f in table["failure"]] == [p == 400 for p in pitches]
        assert table["pitch_again_um"].dropna().tolist() == [300, 350, 450, 500, 550]
        assert os.getpid() not in table["process"].tolist()

    def test_interruption_keeps_finished_rows(self, capsys):
        def interrupted(cell):
            if cell.pitch_um == 500:
                raise KeyboardInterrupt
            return {"value": 1.0}

        with pytest.raises(SweepInterrupted, match="2 of 4 points are finished") as caught:
            sweep(two_dimensional(), {"pitch_um": [300, 400, 500, 600]}, compute=interrupted, processes=1)
        assert caught.value.table["pitch_um"].tolist() == [300, 400]
        assert isinstance(caught.value, KeyboardInterrupt)
        assert "2 of 4" in capsys.readouterr().err


SLOW_COMPUTE = """
import os, time
def slow(cell):
    time.sleep(0.1 if cell.pitch_um < 500 else 60)
    return {"process": os.getpid()}
"""
SCRIPT = """
import signal
import sys
import fem_carriers as fc
from fem_carriers.errors import SweepInterrupted
from slow_compute import slow
signal.signal(signal.SIGINT, signal.default_int_handler)  # shells let background jobs ignore it
print("started", flush=True)
base = fc.Base("p", doping_per_cm3=1e16, thickness_um=150, lifetime_us=100)
pitches = [float(p) for p in sys.argv[1:]]
try:
    table = fc.sweep(fc.UnitCell(base, 400), {"pitch_um": pitches}, compute=slow, processes=2)
except SweepInterrupted as stopped:
    table = stopped.table
print(len(table), (table["failure"] == "").all(), table["process"].nunique())
"""


@pytest.fixture
def script(tmp_path):
    (tmp_path / "slow_compute.py").write_text(SLOW_COMPUTE)
    (tmp_path / "script.py").write_text(SCRIPT)
    return lambda *pitches: subprocess.Popen(
        [sys.executable, "script.py", *map(str, pitches)], cwd=tmp_path, stdout=subprocess.PIPE, stderr=subprocess.PIPE,
        text=True, start_new_session=True,
    )  # fmt: skip


def test_script_without_a_main_guard_is_not_run_again(script):
    out, err = script(*range(300, 320)).communicate(timeout=60)
    assert out.splitlines() == ["started", "20 True 2"], err


@pytest.mark.skipif(os.name == "nt", reason="signals to a group of processes")
def test_interrupt_from_the_keyboard_with_processes(script):
    process = script(300, 310, 600, 610)
    assert process.stdout.readline() == "started\n"
    time.sleep(10)
    os.killpg(process.pid, signal.SIGINT)  # as a terminal does: to all processes of the group
    out, err = process.communicate(timeout=40)
    assert out.startswith("2 True"), err
    assert "2 of 4 points are finished" in err


class TestBestPoint:
    """Against y = top − c (x − x0)², whose maximum and range within p % are known."""

    @pytest.mark.parametrize("at", [np.geomspace(80, 1500, 12), np.linspace(100, 900, 5), np.array([100.0, 600, 900])])
    def test_known_parabola(self, at):
        best = best_point(
            pd.DataFrame({"pitch_um": at, "jsc_mA_per_cm2": 36 - 1e-5 * (at - 412) ** 2}), "pitch_um", "jsc_mA_per_cm2"
        )
        half = math.sqrt(0.005 * 36 / 1e-5)
        found = (best.location, best.value, best.flat_from, best.flat_to)
        np.testing.assert_allclose(found, (412, 36, 412 - half, 412 + half), rtol=1e-9)
        assert not best.at_end
        assert str(best) == "best pitch 412 µm: 36 mA/cm²; within 0.5 % from 277.8 to 546.2 µm"

    def test_best_at_the_end_says_so(self):
        at = np.linspace(100, 300, 5)
        table = pd.DataFrame({"pitch_um": at, "y": 36 - 1e-5 * (at - 412) ** 2})
        best = best_point(table, "pitch_um", "y")
        assert (best.location, best.value, best.at_end, best.flat_to_is_end) == (300, table["y"].max(), True, True)
        assert not best.flat_from_is_end
        assert "at the end of the swept range" in str(best)
        mirrored = best_point(table.assign(pitch_um=-at), "pitch_um", "y")
        assert (mirrored.location, mirrored.flat_from_is_end) == (-300, True)

    def test_failed_rows_are_left_out_and_the_order_does_not_matter(self):
        at = np.array([600.0, 400, 200, 500, 300])
        y = 10 - ((at - 420) / 300) ** 2
        y[3] = np.nan
        table = pd.DataFrame({"x_um": at, "y": y})
        assert best_point(table, "x_um", "y", within_percent=1).location == pytest.approx(420)

    def test_refused(self):
        table = pd.DataFrame({"x": [1.0, 1.0], "y": [1.0, 2.0], "z": [np.nan, np.nan]})
        for x, y in (("x", "y"), ("x", "q"), ("y", "z")):
            with pytest.raises(fc.InputError):
                best_point(table, x, y)

    def test_one_point(self):
        best = best_point(pd.DataFrame({"x": [2.0], "y": [5.0]}), "x", "y")
        assert (best.location, best.value, best.flat_from, best.flat_to) == (2, 5, 2, 2)
