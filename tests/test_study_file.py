"""Study files: what they say, and every mistake in them told at once."""

import json
import math
import re
import runpy
import tomllib
from contextlib import suppress
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

import fem_carriers as fc
from fem_carriers.studies.axes import Range
from fem_carriers.studies.quantities import accuracy_options
from fem_carriers.studies.sampling import LogNormal, LogUniform, Measured, Normal, Triangular, Uniform, samples
from fem_carriers.studies.study_file import read_study
from fem_carriers.studies.study_lines import key_lines, parsed

EXAMPLES = Path(__file__).resolve().parents[1] / "examples" / "studies"
PAIRS = ("contact_pitch_sweep", "collected_current_sweep", "passivated_contacts", "sheet_resistance", "temperature")
GOOD = """\
title = "Pitch"
compute = "current_voltage"

[cell]
pitch_um = 1200

[base]
doping_type = "p"
resistivity_ohm_cm = 0.9
thickness_um = 150
lifetime_us = 400

[front]
J0_fA_per_cm2 = 28
layer = { doping_type = "n", sheet_resistance_ohm_per_sq = 130 }

[[front.patches]]
shape = "strip"
name = "finger"
width_um = 28
J0_fA_per_cm2 = 750
contact = { terminal = "front", contact_resistivity_mohm_cm2 = 1.5 }

[rear]
J0_fA_per_cm2 = 9

[[rear.patches]]
shape = "strip"
name = "line"
width_um = 45
contact = { terminal = "rear", contact_resistivity_mohm_cm2 = 1 }

[[light]]
kind = "sunlight"
reflectance = 0.02
path = "lambertian"

[sweep]
pitch_um = [900, 1200]

[accuracy]
first_step_um = 2
"""


@pytest.fixture
def study(tmp_path):
    """Read a text as a study file."""

    def read(text, name="pitch.toml"):
        path = tmp_path / name
        path.write_text(text, encoding="utf-8")
        return read_study(path)

    return read


def refused(study, text):
    """The complaints about a text."""
    with pytest.raises(fc.InputError) as caught:
        study(text)
    return [str(c) for c in caught.value.complaints]


def changed(old, new):
    """The good study with a part replaced."""
    assert old in GOOD
    return GOOD.replace(old, new, 1)


class TestRead:
    def test_says_what_the_python_call_says(self, study):
        found = study(GOOD)
        layer = fc.DopedLayer("n", sheet_resistance_ohm_per_sq=130)
        front_metal, rear_metal = fc.Contact("front", 1.5), fc.Contact("rear", 1)
        expected = fc.UnitCell(
            fc.Base("p", resistivity_ohm_cm=0.9, thickness_um=150, lifetime_us=400),
            pitch_um=1200,
            front=fc.Face(
                fc.Surface(J0_fA_per_cm2=28, layer=layer),
                [fc.Strip("finger", 28, J0_fA_per_cm2=750, contact=front_metal)],
            ),
            rear=fc.Face(fc.Surface(J0_fA_per_cm2=9), [fc.Strip("line", 45, contact=rear_metal)]),
            light=fc.Light.sunlight(0.02, path="lambertian"),
        )
        assert found.cell == expected
        assert found.plan.names == ("pitch_um",)
        assert list(found.plan.values) == [(900.0,), (1200.0,)]
        assert (found.accuracy, found.title, found.compute) == ({"first_step_um": 2}, "Pitch", "current_voltage")
        assert found.store_path == found.path.with_name("pitch.sqlite")
        assert found.cell_at(1) == expected
        with pytest.raises(fc.InputError, match="from 0 to 1"):
            found.cell_at(2)

    def test_all_parts_of_a_three_dimensional_cell(self, study, tmp_path):
        (tmp_path / "profile.csv").write_text("depth_um,rate_per_cm3_s\n0,1e20\n10,1e18\n")
        found = study("""
            compute = "collected_current"
            cell = { pitch_um = 400, pitch_y_um = 300, symmetry = "periodic" }
            base.auger = [1e-31, 2e-31]
            base.doping_type = "n"
            base.doping_per_cm3 = 1e15
            base.thickness_um = 100
            base.tau_n0_us = 10
            base.tau_p0_us = inf
            front.srv_cm_per_s = 10
            front.patches = [
                { shape = "dot", name = "dot", diameter_um = 50, center_um = [20, -10], J0_fA_per_cm2 = 3 },
                { shape = "rectangle", name = "pad", width_um = 20, length_um = 30, center_um = [120, 0] },
                { shape = "polygon", name = "wedge", points_um = [[-150, -50], [-100, -50], [-100, 50]] },
            ]
            [inner.grain]
            x_um = -60
            srv_cm_per_s = 1e4
            [[light]]
            kind = "depth_profile"
            depth_um = "profile.csv"
            [[light]]
            kind = "monochromatic"
            flux_per_cm2_s = 1e17
            wavelength_nm = 900
            enters = "rear"
            mask = [{ shape = "spot", diameter_um = 60 }, { shape = "rectangle", x_um = [50, 100] }]
        """)
        front = found.cell.front
        assert found.cell.base == fc.Base(
            "n", doping_per_cm3=1e15, thickness_um=100, tau_n0_us=10, tau_p0_us=math.inf, auger=(1e-31, 2e-31)
        )
        assert front.patches == (
            fc.Dot("dot", 50, (20, -10), J0_fA_per_cm2=3),
            fc.Rectangle("pad", 20, 30, (120, 0)),
            fc.Polygon("wedge", points_um=((-150, -50), (-100, -50), (-100, 50))),
        )
        profile, spot = found.cell.light.sources
        assert profile.rate_per_cm3_s == (1e20, 1e18)
        assert spot.mask == (fc.Spot(60), fc.LitRectangle((50, 100)))
        assert found.cell.inner["grain"].srv_cm_per_s == 1e4
        assert len(found.plan) == 1

    @pytest.mark.parametrize("path", sorted(EXAMPLES.glob("*.toml")), ids=lambda p: p.stem)
    def test_examples_are_sound_and_ask_a_question(self, path):
        found = read_study(path)
        assert found.title
        assert "?" in found.question
        assert found.outputs.tables[0] == f"{path.stem}.csv"
        assert found.text.startswith(f"# fem-carriers run {path.name}\n")

    @pytest.mark.parametrize("name", PAIRS)
    def test_examples_describe_the_cells_of_the_python_examples(self, name):
        script = EXAMPLES.parent / f"{name}.py"
        assert read_study(EXAMPLES / f"{name}.toml").cell == runpy.run_path(str(script))["cell"]

    def test_accuracy_is_what_the_function_takes(self):
        assert {"first_step_um", "growth", "target_error_percent"} <= set(accuracy_options("current_voltage"))
        assert "progress" not in accuracy_options("current_voltage")


class TestSweep:
    def points(self, study, sweep):
        found = study(changed("[sweep]\npitch_um = [900, 1200]\n", sweep))
        return found.plan.names, np.array(found.plan.values)

    def test_crossed_the_last_one_fastest(self, study):
        names, values = self.points(study, "[sweep]\npitch_um = [1, 2]\nfront.finger.width_um = [0.3, 0.4]\n")
        assert names == ("pitch_um", "front.finger.width_um")
        assert values.tolist() == [[1, 0.3], [1, 0.4], [2, 0.3], [2, 0.4]]

    def test_paired_with_each_other_and_crossed_with_the_rest(self, study):
        text = """
            [sweep]
            "light.suns" = [1, 2]
            [[sweep.paired]]
            pitch_um = [500, 700]
            rear.line.width_um = [30, 40]
            [sweep.follow]
            front.finger.width_um = { equals = "rear.line.width_um", times = 0.5, plus = 1 }
        """
        names, values = self.points(study, text)
        assert names == ("light.suns", "pitch_um", "rear.line.width_um", "front.finger.width_um")
        assert values.tolist() == [[1, 500, 30, 16], [1, 700, 40, 21], [2, 500, 30, 16], [2, 700, 40, 21]]

    def test_samples_repeat_with_the_seed_and_cross_with_lists(self, study):
        text = """
            [sweep]
            pitch_um = [500, 700]
            sampled.points = 8
            sampled.seed = {seed}
            sampled.inputs.base.lifetime_us = {{ distribution = "uniform", lowest = 100, highest = 200 }}
            sampled.inputs.front.finger.width_um = {{ distribution = "normal", mean = 30, standard_deviation = 2 }}
        """
        names, values = self.points(study, text.format(seed=3))
        assert names == ("pitch_um", "base.lifetime_us", "front.finger.width_um")
        assert values.shape == (16, 3)
        np.testing.assert_array_equal(values[:8, 1:], values[8:, 1:])
        np.testing.assert_array_equal(values, self.points(study, text.format(seed=3))[1])
        assert not np.array_equal(values, self.points(study, text.format(seed=4))[1])

    @pytest.mark.parametrize(
        ("made", "expected"),
        [
            (Range(1, 9, points=5), [1, 3, 5, 7, 9]),
            (Range(1, 2, step=0.25), [1, 1.25, 1.5, 1.75, 2]),
            (Range(0, 1, step=0.1), np.arange(11) / 10),
            (Range(1, 2, step=0.4), [1, 1.4, 1.8]),
            (Range(1, 10000, points=5, spacing="log"), [1, 10, 100, 1000, 10000]),
            (Range(100, 1000, points=4, spacing="log", round_to=100), [100, 200, 500, 1000]),
            (Range(1, 3, points=9, round_to=1), [1, 2, 3]),
        ],
    )
    def test_ranges(self, made, expected):
        np.testing.assert_allclose(made.values(), expected, rtol=1e-12, atol=1e-12)


class TestDistributions:
    """Against SciPy's own distributions, by other routes: their `ppf`, and moments of many samples."""

    @pytest.mark.parametrize(
        ("ours", "scipys"),
        [
            (Uniform(2, 5), stats.uniform(2, 3)),
            (LogUniform(2, 50), stats.loguniform(2, 50)),
            (Normal(30, 2), stats.norm(30, 2)),
            (Normal(30, 2, lowest=29, highest=34), stats.truncnorm(-0.5, 2, 30, 2)),
            (LogNormal(400, 1.5), stats.lognorm(math.log(1.5), scale=400)),
            (Triangular(1, 2, 6), stats.triang(0.2, 1, 5)),
        ],
    )
    def test_quantiles(self, ours, scipys):
        share = np.linspace(0.01, 0.99, 37)
        np.testing.assert_allclose(ours.quantile(share), scipys.ppf(share), rtol=1e-9)

    def test_measured_values_are_reproduced(self):
        values = (310, 365, 390, 402, 415)
        np.testing.assert_allclose(Measured(values).quantile(np.linspace(0, 1, 5)), values)

    @pytest.mark.parametrize("method", ["sobol", "halton", "latin_hypercube", "random"])
    def test_samples_have_the_moments_and_are_independent(self, method):
        drawn = samples([Normal(30, 2), Uniform(0, 1)], 4096, method, seed=1)
        assert drawn.shape == (4096, 2)
        error = 4 / math.sqrt(4096)
        np.testing.assert_allclose(drawn.mean(axis=0), [30, 0.5], atol=2 * error)
        np.testing.assert_allclose(drawn.std(axis=0), [2, math.sqrt(1 / 12)], rtol=error)
        assert abs(np.corrcoef(drawn.T)[0, 1]) < error


BASE, CELL = '[base]\ndoping_type = "p"\n', "[cell]\npitch_um = 1200\n"
LIGHT = '[[light]]\nkind = "sunlight"\n'
FINGER = 'name = "finger"\nwidth_um = 28\n'
SWEEP = "pitch_um = [900, 1200]\n"
WRONG = {
    # text of the study, then for every mistake: line, part of what was given, part of the suggestion
    "misspelt key": (
        changed("lifetime_us", "lifetme_us"),
        [(11, "lifetme_us = 400", "lifetime_us"), (7, "none of", "")],
    ),
    "unit left out": (
        changed("width_um = 28", "width = 28"),
        [(20, "unknown key front.patches[0].width", "width_um"), (17, "width_um missing", "")],
    ),
    "unknown table": (GOOD + "[acuracy]\ngrowth = 2\n", [(43, "acuracy", "accuracy")]),
    "key in the wrong table": (
        changed(CELL, CELL + "thickness_um = 150\n"),
        [(6, "cell.thickness_um", "under [base]")],
    ),
    "negative numbers": (
        changed("thickness_um = 150", "thickness_um = -150").replace("width_um = 28", "width_um = -28"),
        [(10, "thickness_um = -150", ""), (20, "width_um = -28", "")],
    ),
    "text for a number": (changed("lifetime_us = 400", 'lifetime_us = "400"'), [(11, "lifetime_us = '400'", "")]),
    "wrong choice": (changed('doping_type = "p"', 'doping_type = "P"'), [(8, "doping_type = 'P'", "")]),
    "both of two": (
        changed(BASE, BASE + "doping_per_cm3 = 1e16\n"),
        [(10, "resistivity_ohm_cm = 0.9 and doping_per_cm3", "")],
    ),
    "unknown shape": (
        changed('shape = "strip"\nname = "finger"', 'shape = "line"\nname = "finger"'),
        [(18, "shape = 'line'", "")],
    ),
    "shape missing": (changed('shape = "strip"\nname = "finger"', 'name = "finger"'), [(17, "shape missing", "")]),
    "two of one name": (
        changed('name = "line"', 'name = "line"\nwidth_um = 3\n[[rear.patches]]\nshape = "strip"\nname = "line"'),
        [(27, "2 patches named 'line'", "")],
    ),
    "layer misspelt inside": (
        changed("sheet_resistance_ohm_per_sq = 130", "sheet_resistance_ohm = 130"),
        [(15, "sheet_resistance_ohm ", "sheet_resistance_ohm_per_sq"), (15, "sheet_resistance_ohm_per_sq missing", "")],
    ),
    "layer is a number": (
        changed('layer = { doping_type = "n", sheet_resistance_ohm_per_sq = 130 }', "layer = 130"),
        [(15, "front.layer = 130", "")],
    ),
    "contact without a terminal": (changed('terminal = "rear", ', ""), [(31, "terminal missing", "")]),
    "strip wider than the pitch": (changed("width_um = 28", "width_um = 1300"), [(17, "finger", "")]),
    "no light": (GOOD.replace(LIGHT + 'reflectance = 0.02\npath = "lambertian"\n', ""), [(1, "no light", "")]),
    "unknown light": (changed('kind = "sunlight"', 'kind = "sun"'), [(34, "kind = 'sun'", "")]),
    "reflectance above one": (changed("reflectance = 0.02", "reflectance = 2"), [(35, "reflectance", "")]),
    "unknown quantity": (
        changed('compute = "current_voltage"', 'compute = "current_votage"'),
        [(2, "current_votage", "current_voltage")],
    ),
    "nothing to compute": (changed('compute = "current_voltage"\n', ""), [(1, "compute missing", "")]),
    "no base": (re.sub(r"\[base\].*?\n\n", "", GOOD, flags=re.DOTALL), [(1, "table [base] missing", "")]),
    "unknown path": (
        changed(SWEEP, "front.fingr.width_um = [20, 30]\n"),
        [(39, "front.fingr.width_um", "front.finger.width_um")],
    ),
    "unknown path and a broken cell": (
        changed(SWEEP, "front.fingr.width_um = [20, 30]\n").replace("lifetime_us = 400", "lifetime_us = 0"),
        [(11, "lifetime_us = 0", ""), (39, "front.fingr.width_um", "front.finger.width_um")],
    ),
    "values that are no list": (changed(SWEEP, "pitch_um = 900\n"), [(39, "pitch_um = 900", "[900]")]),
    "a text among values": (changed(SWEEP, 'pitch_um = [\n  900,\n  "1200",\n]\n'), [(41, "pitch_um[1] = '1200'", "")]),
    "range upside down": (
        changed(SWEEP, "pitch_um = { lowest = 9, highest = 3, points = 1 }\n"),
        [(39, "lowest = 9, highest = 3", ""), (39, "points = 1", "")],
    ),
    "range with a misspelt key": (
        changed(SWEEP, "pitch_um = { lowest = 3, higest = 9, points = 3 }\n"),
        [(39, "higest", "highest"), (39, "highest missing", "")],
    ),
    "paired lists of different length": (
        changed(SWEEP, "[[sweep.paired]]\npitch_um = [1, 2]\nrear.line.width_um = [1, 2, 3]\n"),
        [(39, "2 values of pitch_um, 3 values of rear.line.width_um", "")],
    ),
    "one input twice": (changed(SWEEP, SWEEP + "[[sweep.paired]]\npitch_um = [1, 2]\n"), [(41, "swept 2 times", "")]),
    "unknown distribution": (
        changed(SWEEP, 'sampled.points = 0\nsampled.inputs.pitch_um = { distribution = "gauss", mean = 3 }\n'),
        [(39, "points = 0", ""), (40, "distribution = 'gauss'", "")],
    ),
    "distribution with a wrong width": (
        changed(
            SWEEP,
            "sampled.points = 4\n"
            'sampled.inputs.pitch_um = { distribution = "normal", mean = 3, standard_deviation = -1 }\n',
        ),
        [(40, "standard_deviation = -1", "")],
    ),
    "follows nothing": (
        changed(SWEEP, SWEEP + 'follow.rear.line.width_um = { equals = "pich_um" }\n'),
        [(40, "pich_um", "pitch_um")],
    ),
    "accuracy out of range": (
        changed("first_step_um = 2", "first_step_um = 0\ngrowth = 1\nfirst_step = 3"),
        [(42, "first_step_um = 0", ""), (43, "growth = 1", ""), (44, "first_step ", "first_step_um")],
    ),
    "tables of an unknown kind": (
        GOOD + '[outputs]\ntables = ["a.xlsx"]\nfields = 1\n',
        [(44, "a.xlsx", ""), (45, "fields = 1", "")],
    ),
    "text without quotes": (changed('name = "finger"', "name = finger"), [(19, "name = finger", "")]),
    "a key twice": (
        changed("lifetime_us = 400", "lifetime_us = 400\nlifetime_us = 300"),
        [(12, "lifetime_us = 300", "")],
    ),
    "several lines that are no TOML, and a misspelt key": (
        changed("thickness_um = 150", "thickness_um 150")
        .replace('kind = "sunlight"', "kind = sunlight")
        .replace("width_um = 45", "widht_um = 45"),
        [(10, "thickness_um 150", ""), (30, "widht_um", "width_um"), (34, "kind = sunlight", "")],
    ),
    "an open bracket": (changed(SWEEP, "pitch_um = [900, 1200\n"), [(39, "Unclosed array", "")]),
    "tables that are numbers": (
        "compute = 3\ncell = 1\nbase = 2\nfront = 3\nlight = 4\nsweep = 5\naccuracy = 6\noutputs = 7\n",
        [
            (i + 1, text, "")
            for i, text in enumerate(
                (
                    "compute = 3",
                    "cell = 1",
                    "base = 2",
                    "front = 3",
                    "light",
                    "sweep = 5",
                    "accuracy = 6",
                    "outputs = 7",
                )
            )
        ],
    ),
    "empty": (
        "",
        [(1, "compute missing", ""), (1, "[cell] missing", ""), (1, "[base] missing", ""), (1, "no light", "")],
    ),
}


class TestMistakes:
    @pytest.mark.parametrize("name", WRONG)
    def test_every_mistake_with_its_line_and_the_nearest_key(self, study, name):
        text, expected = WRONG[name]
        found = refused(study, text)
        for line, given, suggestion in expected:
            fitting = [c for c in found if c.startswith(f"line {line}: ") and given in c.split(": allowed is")[0]]
            assert fitting, f"no complaint on line {line} with {given!r} in:\n" + "\n".join(found)
            assert any(suggestion in c.rpartition("Try: ")[2] for c in fitting), (suggestion, fitting)

    def test_there_are_thirty_or_more(self):
        assert len(WRONG) >= 30

    def test_all_at_once_in_one_file(self, study):
        text = GOOD.replace("lifetime_us", "lifetme_us").replace("width_um = 28", "width_um = -28")
        text = text.replace("reflectance = 0.02", "reflectance = 7").replace("[900, 1200]", '["x"]')
        text = text.replace("first_step_um", "frst_step_um").replace('compute = "current', 'compute = "curent')
        found = refused(study, text)
        lines = [int(re.match(r"line (\d+)", c)[1]) for c in found]
        assert lines == sorted(lines)
        assert {2, 11, 20, 35, 39, 42} <= set(lines)

    def test_files_that_are_not_there_or_not_text(self, tmp_path):
        for name in ("missing.toml", "study.yaml"):
            with pytest.raises(fc.InputError, match="study file"):
                read_study(tmp_path / name)
        (tmp_path / "binary.toml").write_bytes(b"\xff\xfe\x00")
        with pytest.raises(fc.InputError, match="UTF-8"):
            read_study(tmp_path / "binary.toml")

    def test_nothing_is_evaluated(self, study, tmp_path):
        marker = tmp_path / "executed"
        attack = f"__import__('pathlib').Path({str(marker)!r}).touch()"
        refused(study, changed("lifetime_us = 400", f"lifetime_us = {json.dumps(attack)}"))
        refused(study, changed("lifetime_us = 400", f"lifetime_us = {attack}"))
        assert not marker.exists()

    @pytest.mark.parametrize("name", WRONG)
    def test_damaged_copies_never_end_in_a_traceback(self, study, name):
        """Every text cut off somewhere, or with a character changed: sound, or refused in words."""
        draw = np.random.default_rng(len(name))
        text = WRONG[name][0]
        for _ in range(6):
            cut = int(draw.integers(0, len(text) + 1))
            mark = str(draw.choice(list('[]{}="#,.\n')))
            for damaged in (text[:cut], text[:cut] + mark + text[cut + 1 :]):
                with suppress(fc.InputError):
                    study(damaged)


class TestLines:
    def test_line_of_every_key(self):
        text = (
            'a = 1 # "x"\n[b.c]\n"d e" = { f = [1,\n 2], g.h = "]" }\n[[b.k]]\nx = """\n[no]\n"""\n[[b.k]]\ny = \'\'\n'
            "[b.k.z]\nw = [\n { q = 1 }, # [\n { q = 2 },\n]\n"
        )
        lines = key_lines(text)
        assert tomllib.loads(text)["b"]["k"][1]["z"]["w"][1]["q"] == 2
        expected = {
            ("a",): 1, ("b", "c"): 2, ("b", "c", "d e"): 3, ("b", "c", "d e", "f", 1): 4,
            ("b", "c", "d e", "g", "h"): 4, ("b", "k", 0, "x"): 6, ("b", "k", 1): 9, ("b", "k", 1, "y"): 10,
            ("b", "k", 1, "z", "w"): 12,
            ("b", "k", 1, "z", "w", 0, "q"): 13, ("b", "k", 1, "z", "w", 1, "q"): 14,
        }  # fmt: skip
        assert {path: lines[path] for path in expected} == expected
        assert not any("no" in path for path in lines)

    def test_lines_that_are_no_toml_are_left_out(self):
        data, errors = parsed("a = 1\nb = x\nc 3\nd = 4\na = 2\n")
        assert data == {"a": 1, "d": 4}
        assert [line for line, _ in errors] == [2, 3, 5]
