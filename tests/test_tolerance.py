"""Scatter of the inputs: percentiles, shares of the variance, the best design on average; study files."""

import math

import numpy as np
import pandas as pd
import pytest
from scipy import stats

import fem_carriers as fc
from fem_carriers.output.search_plots import plot_designs, plot_tolerance
from fem_carriers.studies.sampling import LogNormal, Measured, Normal, Uniform, samples
from fem_carriers.studies.study_file import read_study
from fem_carriers.studies.study_run import run_study, study_outcome
from fem_carriers.studies.tolerance import PERCENTILES, tolerance

QUIET = {"progress": False, "processes": 1}
INPUTS = {
    "lifetime_us": Measured([60, 80, 90, 95, 100, 105, 112, 130, 170]),
    "thickness_um": Normal(30, 4, lowest=5),
    "resistance": LogNormal(1.5, 1.4),
}
BAR = 0.05


def simple(pitch_um=1000.0, lifetime_us=100.0, thickness_um=150.0, resistance=1.0):
    base = fc.Base("p", resistivity_ohm_cm=resistance, thickness_um=thickness_um, lifetime_us=lifetime_us)
    return fc.UnitCell(base, pitch_um)


def law(pitch, lifetime, width, resistance):
    """Shading, resistance and lifetime as in a cell, with a product of inputs and curvature."""
    series = 0.6 * (1 + 0.4 * resistance) * (pitch / 1500) ** 2
    return 24 - 40 / 3 * width / pitch - series - 6 * resistance / width + 0.4 * np.log(lifetime / 100)


def exact(cell):
    base = cell.base
    value = law(cell.pitch_um, base.lifetime_us, base.thickness_um, base.resistivity_ohm_cm)
    return {"efficiency_percent": float(value)}


def with_bars(cell):
    return exact(cell) | {"error_bar_efficiency_percent": BAR}


def ishigami(cell):
    """T. Ishigami and T. Homma, Proc. ISUMA '90, 398 (1990), with a = 7, b = 0.1, on three inputs of a cell."""
    x, y, z = cell.base.lifetime_us - 10, cell.base.thickness_um - 100, cell.pitch_um - 1000
    return {"y": math.sin(x) + 7 * math.sin(y) ** 2 + 0.1 * z**4 * math.sin(x)}


def one_law(resistance_fixed):
    return lambda lifetime_us, thickness_um: simple(1000.0, lifetime_us, thickness_um, resistance_fixed)


class TestPercentiles:
    def test_against_brute_force(self):
        """Ten times the evaluations, each computed: percentiles within 1 % of the value and within the bars."""
        found = tolerance(simple, INPUTS, compute=exact, **QUIET)
        assert found.reached
        assert len(found.table) <= 64
        rows = samples(list(INPUTS.values()), 10 * len(found.table), "sobol", seed=5)
        brute = np.percentile(law(1000.0, *rows.T), PERCENTILES)
        assert found.percentiles["efficiency_percent"].to_numpy() == pytest.approx(brute, rel=0.01)
        dense = law(1000.0, *samples(list(INPUTS.values()), 2**17, "sobol", seed=6).T)
        off = np.abs(found.percentiles["efficiency_percent"] - np.percentile(dense, PERCENTILES))
        assert (off <= found.percentiles["error_bar_efficiency_percent"]).all()
        assert off.max() < 0.03 * dense.std()
        assert found.mean == pytest.approx(dense.mean(), abs=0.01 * dense.std())
        assert found.standard_deviation == pytest.approx(dense.std(), rel=0.02)
        assert found.nominal == pytest.approx(law(1000.0, 100, 30, 1.5), abs=0.01 * dense.std())

    def test_normal_of_normal(self):
        """A linear function of one normal input is normal."""
        linear = lambda cell: {"efficiency_percent": 20 + 0.1 * (cell.base.thickness_um - 150)}
        cell = simple()
        found = tolerance(cell, {"base.thickness_um": Normal(150, 8)}, compute=linear, percentiles=(5, 50, 95), **QUIET)
        expected = 20 + 0.8 * stats.norm.ppf([0.05, 0.5, 0.95])
        assert found.percentiles["efficiency_percent"].to_numpy() == pytest.approx(expected, abs=0.01)
        assert found.shares["total_percent"][0] == pytest.approx(100, abs=1)

    def test_bars_of_the_points_end_the_refinement(self):
        """With error bars there is no point in a better surrogate, and the bars are in those of the percentiles."""
        few = tolerance(simple, INPUTS, compute=with_bars, **QUIET)
        many = tolerance(simple, INPUTS, compute=exact, **QUIET)
        assert few.reached
        assert few.surrogate_bar <= BAR
        assert len(few.table) <= len(many.table)
        assert (few.percentiles["error_bar_efficiency_percent"] > BAR).all()
        assert few.discretisation_bar == BAR

    def test_says_when_it_is_not_good_enough(self):
        inputs = {"lifetime_us": Uniform(10 - math.pi, 10 + math.pi), "thickness_um": Uniform(97, 103)}
        made = lambda lifetime_us, thickness_um: simple(1000.0, lifetime_us, thickness_um)
        found = tolerance(made, inputs, quantity="y", compute=ishigami, most_points=20, **QUIET)
        assert not found.reached
        assert len(found.table) == 20
        assert "allow more points" in str(found)

    def test_failures_are_left_out(self):
        def fails(cell):
            if cell.base.thickness_um > 36:
                raise ValueError("too thick")
            return exact(cell)

        found = tolerance(simple, INPUTS, compute=fails, **QUIET)
        assert 0 < found.table["efficiency_percent"].isna().sum() < 15
        assert "without a result" in found.outcome


class TestShares:
    def test_ishigami(self):
        """Analytic: first order 0.3139, 0.4424, 0; total 0.5576, 0.4424, 0.2437 (Ishigami and Homma 1990)."""
        span = lambda middle: Uniform(middle - math.pi, middle + math.pi)
        inputs = {"lifetime_us": span(10), "thickness_um": span(100), "pitch_um": span(1000)}
        found = tolerance(simple, inputs, quantity="y", compute=ishigami, most_points=256, **QUIET)
        shares = found.shares.set_index("input").loc[list(inputs)]
        assert shares["alone_percent"].to_numpy() == pytest.approx([31.39, 44.24, 0], abs=1.5)
        assert shares["total_percent"].to_numpy() == pytest.approx([55.76, 44.24, 24.37], abs=1.5)
        assert (abs(shares["total_percent"] - [55.76, 44.24, 24.37]) <= shares["error_bar_percent"]).all()

    def test_sum_of_squares(self):
        """Of a sum of independent terms, shares are those of their variances: 1 and 4 parts of 5."""
        total = lambda cell: {"y": cell.base.lifetime_us + 2 * cell.base.thickness_um}
        inputs = {"lifetime_us": Normal(100, 3), "thickness_um": Normal(150, 3)}
        found = tolerance(one_law(1.0), inputs, quantity="y", compute=total, **QUIET)
        assert dict(zip(found.shares["input"], found.shares["alone_percent"], strict=True)) == pytest.approx(
            {"lifetime_us": 20, "thickness_um": 80}, abs=0.5
        )


class TestDesigns:
    def test_best_on_average_is_another_one(self):
        """The loss grows with the square of pitch times resistance: averages of exp differ from the median's."""
        inputs = {"resistance": LogNormal(1.0, 2.5)}
        lossy = lambda p, r: 20 - 300 / p - r * (p / 1000) ** 2
        compute = lambda cell: {"efficiency_percent": float(lossy(cell.pitch_um, cell.base.resistivity_ohm_cm))}
        made = lambda pitch_um, resistance: simple(pitch_um, resistance=resistance)
        found = tolerance(made, inputs, designs={"pitch_um": (200, 1500)}, compute=compute, most_points=96, **QUIET)
        mean_resistance = math.exp(math.log(2.5) ** 2 / 2)
        for best, r in ((found.best_nominal, 1.0), (found.best_on_average, mean_resistance)):
            exact_best = (300 * 1000**2 / (2 * r)) ** (1 / 3)
            assert abs(best.location["pitch_um"] - exact_best) <= best.location_bar["pitch_um"] + 0.01 * exact_best
            assert best.value == pytest.approx(lossy(exact_best, r), abs=max(best.value_bar, 0.01))
        assert found.best_on_average.location["pitch_um"] < 0.9 * found.best_nominal.location["pitch_um"]
        assert list(found.by_design)[:2] == ["pitch_um", "nominal_efficiency_percent"]
        assert found.design == dict(found.best_on_average.location)

    def test_plots(self, tmp_path):
        found = tolerance(simple, INPUTS, designs={"pitch_um": (500, 2500)}, compute=exact, **QUIET)
        figure = plot_tolerance(found, tmp_path / "tolerance.png")
        assert [ax.get_xlabel() for ax in figure.axes] == ["efficiency (%)", "share of the variance (%)"]
        assert plot_designs(found, tmp_path / "designs.png").axes[0].get_xlabel() == "pitch (µm)"
        with pytest.raises(fc.InputError, match="one design variable"):
            plot_designs(tolerance(simple, INPUTS, compute=exact, **QUIET))


def test_table_and_refusals():
    found = tolerance(simple, INPUTS, compute=exact, **QUIET)
    again = tolerance(found.table, INPUTS)
    pd.testing.assert_frame_equal(found.percentiles, again.percentiles)
    with pytest.raises(fc.InputError, match="2 problems"):
        tolerance(simple, {"lifetime_us": 5}, compute=exact, most_points=2, **QUIET)
    with pytest.raises(fc.InputError, match="percentiles"):
        tolerance(simple, INPUTS, compute=exact, percentiles=(0, 50), **QUIET)
    with pytest.raises(fc.InputError, match=r"path 'front\.finger\.width'"):
        tolerance(simple(), {"front.finger.width": Normal(1, 0.1)}, compute=exact, **QUIET)
    with pytest.raises(fc.InputError, match="lifetime_us among inputs and designs"):
        tolerance(simple, INPUTS, designs={"lifetime_us": (1, 2)}, compute=exact, **QUIET)
    with pytest.raises(fc.SolverError, match="0 of"):
        tolerance(simple, INPUTS, quantity="voc_V", compute=exact, **QUIET)


STUDY = """\
title = "Misplaced fingers"
question = "What does a misplaced finger cost?"
compute = "collected_current"

[cell]
pitch_um = 400
symmetry = "periodic"

[base]
doping_type = "p"
doping_per_cm3 = 1e16
thickness_um = 100
lifetime_us = 20

[front]
J0_fA_per_cm2 = 8

[[front.patches]]
shape = "strip"
name = "strip"
width_um = 90
layer = { doping_type = "n", sheet_resistance_ohm_per_sq = 90 }

[[front.patches]]
shape = "strip"
name = "finger"
width_um = 40
contact = { terminal = "front" }

[[light]]
kind = "sunlight"

[tolerance]
quantity = "collected_front_mA_per_cm2"
percentiles = [10, 50, 90]
most_points = 14
seed = 3

[tolerance.inputs]
front.finger.center_um = { distribution = "normal", mean = 0, standard_deviation = 8, lowest = -24, highest = 24 }
base.lifetime_us = { distribution = "measured", values = [17, 18, 20, 21, 24] }

[accuracy]
first_step_um = 8
growth = 3
"""


class TestStudyFile:
    def test_misalignment_in_a_whole_period(self, tmp_path):
        """A real cell. The collected current hardly depends on where on its strip an ideal finger lies."""
        path = tmp_path / "misplaced.toml"
        path.write_text(STUDY)
        study = read_study(path)
        table = run_study(study, processes=1, progress=False)
        assert (table["failure"] == "").all()
        found = study_outcome(study)
        assert list(found.percentiles["percentile"]) == [10, 50, 90]
        shares = dict(zip(found.shares["input"], found.shares["total_percent"], strict=True))
        assert shares["base.lifetime_us"] > 90
        brute = fc.sweep(study.cell, {"base.lifetime_us": [17.4, 20, 22.8]}, first_step_um=8, growth=3, **QUIET)
        low, middle, high = brute["collected_front_mA_per_cm2"]
        assert found.percentiles["collected_front_mA_per_cm2"].to_numpy() == pytest.approx(
            [low, middle, high], abs=0.1 * (high - low)
        )
        assert len(run_study(path, processes=1, progress=False)) == len(table)

    def test_every_mistake_at_once(self, tmp_path):
        path = tmp_path / "bad.toml"
        wrong = (
            STUDY.replace('"normal"', '"norml"').replace("[10, 50, 90]", "[10, 500]").replace("seed = 3", "sead = 3")
        )
        path.write_text(
            wrong.replace("base.lifetime_us = {", "base.lifetime = {") + "[tolerance.designs]\npitch_um = 5\n"
        )
        with pytest.raises(fc.InputError) as caught:
            read_study(path)
        text = str(caught.value)
        for words in ("'norml'", "percentiles = (10, 500)", "unknown key tolerance.sead", "Try: seed",
                      "'base.lifetime'", "pitch_um = 5: allowed is a range"):  # fmt: skip
            assert words in text
        assert len(caught.value.complaints) == 5
