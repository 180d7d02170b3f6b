"""The best design from few evaluations: surrogate, limits, error bars, stores, study files."""

import math
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.optimize import minimize

import fem_carriers as fc
from fem_carriers.output.search_plots import plot_optimum
from fem_carriers.studies import search as search_module
from fem_carriers.studies.limits import Limit, Region
from fem_carriers.studies.optimum import optimum
from fem_carriers.studies.scales import Scales, scales_of
from fem_carriers.studies.search import first_points
from fem_carriers.studies.store import read_store
from fem_carriers.studies.study_file import read_study
from fem_carriers.studies.study_run import run_study, study_outcome
from fem_carriers.studies.surrogate import _Likelihood, fitted

PITCH, LIFETIME, THICK = "pitch_um", "base.lifetime_us", "base.thickness_um"
BOTH = {PITCH: (500.0, 3000.0), LIFETIME: (10.0, 60.0)}
QUIET = {"progress": False, "processes": 1}
BAR = 0.02


def simple(pitch_um=1000.0, lifetime_us=100.0, thickness_um=150.0):
    return fc.UnitCell(fc.Base("p", doping_per_cm3=1e16, thickness_um=thickness_um, lifetime_us=lifetime_us), pitch_um)


def law(pitch, width):
    """Shading w/p, sheet resistance p², contact 1/w. dη/dw = 0: w² = 0.675 p; dη/dp = 0: w = p³/1.5e7."""
    return 24 - 40 / 3 * width / pitch - (pitch / 1500) ** 2 - 9 / width


BEST_PITCH = (0.675 * 1.5e7**2) ** 0.2
BEST = (BEST_PITCH, math.sqrt(0.675 * BEST_PITCH))


def exact(cell):
    return {"efficiency_percent": law(cell.pitch_um, cell.base.lifetime_us)}


def exact_along(cell):
    return {"efficiency_percent": law(cell.pitch_um, 21.5)}


def with_noise(cell):
    """Errors of at most the bar, as different as can be from point to point."""
    phase = math.sin(1e4 * cell.pitch_um + 1e5 * cell.base.lifetime_us)
    value = law(cell.pitch_um, cell.base.lifetime_us) + BAR * phase
    return {"efficiency_percent": value, "error_bar_efficiency_percent": BAR}


def drifting(cell):
    """An error that drifts over the whole bar from one end of the range to the other."""
    value = law(cell.pitch_um, 21.5) + BAR * (2 * math.log(cell.pitch_um / 500) / math.log(6) - 1)
    return {"efficiency_percent": value, "error_bar_efficiency_percent": BAR}


def fails_when_wide(cell):
    if cell.pitch_um > 1500:
        raise ValueError("too wide")
    return exact(cell)


class TestSurrogate:
    @pytest.mark.parametrize("rough", [False, True])
    def test_gradient_of_the_likelihood(self, rough):
        """Against central differences."""
        points = np.random.default_rng(0).random((12, 2))
        values = np.sin(3 * points[:, 0]) + points[:, 1] ** 2
        task = _Likelihood(points, values, np.full(12, 1e-4), rough)
        at, h = np.array([-0.3, 0.2, 0.5, -1.0]), 1e-6
        numeric = [(task(at + h * e)[0] - task(at - h * e)[0]) / (2 * h) for e in np.eye(4)]
        assert task(at)[1] == pytest.approx(numeric, rel=1e-5, abs=1e-5)

    def test_error_is_as_large_as_it_says(self):
        """Root mean square of error over predicted deviation, in the middle of 14 points of a smooth function."""
        generator = np.random.default_rng(1)
        f = lambda x: np.exp(x[:, 0]) * np.cos(2 * x[:, 1])
        points, tried = generator.random((14, 2)), 0.1 + 0.8 * generator.random((2000, 2))
        found = fitted(points, f(points))
        error = found.mean(tried) - f(tried)
        assert 0.2 < np.sqrt(np.mean((error / found.deviation(tried)) ** 2)) < 2
        assert np.abs(error).max() < 0.02 * np.ptp(f(tried))

    def test_leaving_out_is_leaving_out(self):
        """Residuals of the formula against fits without the point, with the other numbers of the fit kept."""
        points = np.linspace(0, 1, 7)[:, None]
        found = fitted(points, np.sin(5 * points[:, 0]))
        covariance = found.factor @ found.factor.T
        keep = np.arange(7) != 3
        rest = found.values[keep] - found.trend
        expected = found.trend + covariance[3, keep] @ np.linalg.solve(covariance[np.ix_(keep, keep)], rest)
        assert found.left_out()[3] == pytest.approx(found.values[3] - expected, rel=1e-4)


class TestScales:
    def test_ends_are_exact_and_positive_ranges_logarithmic(self):
        scales = Scales(("a", "b"), (500.0, -3.0), (3000.0, 5.0))
        assert scales.values(np.array([[0.0, 1.0], [1.0, 0.0]])).tolist() == [[500.0, 5.0], [3000.0, -3.0]]
        assert scales.values(np.array([[0.5, 0.5]]))[0] == pytest.approx([math.sqrt(500 * 3000), 1.0])
        assert scales.unit(scales.values(np.array([[0.3, 0.7]])))[0] == pytest.approx([0.3, 0.7])

    def test_refusals(self):
        with pytest.raises(fc.InputError, match="2 problems"):
            scales_of("optimum", {"a": (3, 2), "b": 5})

    def test_first_points_cover_the_region(self):
        """9 points of two variables: no allowed point further from all than in the regular 3 × 3 pattern, nearly."""
        region = Region(Scales(("a", "b"), (1.0, 1.0), (10.0, 10.0)))
        points = first_points(region)
        tried = np.random.default_rng(0).random((4000, 2))
        nearest = np.min(np.linalg.norm(tried[:, None] - points[None], axis=2), axis=1)
        assert len(points) == 9
        assert nearest.max() < 1.25 * math.hypot(0.25, 0.25)


class TestOptimum:
    def test_two_variables(self):
        found = optimum(simple(), BOTH, compute=exact, **QUIET)
        assert len(found.table) <= 25
        assert found.reached
        for name, best in zip(BOTH, BEST, strict=True):
            assert abs(found.location[name] - best) <= found.location_bar[name] < 0.1 * best
        assert law(*BEST) - law(*found.location.values()) < 0.1 * found.within
        assert abs(found.value - law(*BEST)) <= found.value_bar < 0.01
        assert not found.binding
        assert math.isnan(found.discretisation_bar)

    def test_range_within_the_loss(self):
        """Between where the law has lost 0.04 and 0.06: the surrogate is meant to be right within 0.01."""
        found = optimum(simple(), BOTH, compute=exact, **QUIET)
        pitch, width = np.linspace(400, 3000, 250001), np.linspace(10, 60, 250001)
        lost = (law(*BEST) - law(pitch, BEST[1]), law(*BEST) - law(BEST[0], width))
        for name, at, loss in zip(BOTH, (pitch, width), lost, strict=True):
            ends = [np.interp(e, at, loss) for e in found.ranges[name]]
            assert all(0.04 < end < 0.06 for end in ends)

    def test_noise_is_not_chased(self):
        found = optimum(simple(), BOTH, compute=with_noise, **QUIET)
        assert len(found.table) <= 25
        for name, best in zip(BOTH, BEST, strict=True):
            assert abs(found.location[name] - best) <= found.location_bar[name] < 0.4 * best
        assert abs(found.value - law(*BEST)) <= found.value_bar < 3 * BAR
        assert found.discretisation_bar == BAR

    def test_bars_that_drift(self):
        best = minimize(lambda p: -law(p[0] * 1000, 21.5), [0.7]).x[0] * 1000
        found = optimum(simple(), {PITCH: BOTH[PITCH]}, compute=drifting, **QUIET)
        assert len(found.table) <= 15
        assert 5 < abs(found.location[PITCH] - best) <= found.location_bar[PITCH]

    def test_limits_and_ends_bind(self):
        """A limit on the pitch alone: the best is on it, and w = √(0.675 p) there."""
        tool = Limit({PITCH: 1.0}, at_most=600.0, name="widest that the tool prints")
        found = optimum(simple(), BOTH, compute=exact, constraints=tool, **QUIET)
        assert found.location[PITCH] == pytest.approx(600, rel=0.01)
        assert found.location[LIFETIME] == pytest.approx(math.sqrt(0.675 * 600), rel=0.02)
        assert found.binding == ("widest that the tool prints",)
        assert (found.table[PITCH] <= 600).all()
        free = optimum(simple(), {PITCH: (900.0, 3000.0), LIFETIME: (10.0, 60.0)}, compute=exact, **QUIET)
        assert free.location[PITCH] == 900
        assert free.binding == ("pitch_um at the lower end of its range (900)",)
        assert "(end of the range)" in str(free)

    def test_function_as_limit(self):
        def gap(values):
            return values[PITCH] - 40 * values[LIFETIME]

        found = optimum(simple(), BOTH, compute=exact, constraints=[gap], **QUIET)
        assert found.binding == ("gap",)
        assert (found.table[PITCH] >= 40 * found.table[LIFETIME]).all()
        ratio = minimize(lambda p: -law(1000 * p[0], 25 * p[0]), [0.7]).x[0] * 1000
        assert found.location[PITCH] == pytest.approx(ratio, rel=0.03)

    def test_minimize_and_failures(self):
        """The same turned round; points beyond 1500 µm fail, and the search stays away."""
        up = optimum(simple(), BOTH, compute=fails_when_wide, **QUIET)
        assert up.location[PITCH] == pytest.approx(BEST[0], rel=0.03)
        assert "without a result" in up.outcome
        turned = lambda cell: {"loss_percent": -law(cell.pitch_um, cell.base.lifetime_us)}
        down = optimum(simple(), BOTH, compute=turned, minimize="loss_percent", **QUIET)
        assert down.value == pytest.approx(-law(*BEST), abs=0.01)
        assert str(down).startswith("smallest loss -22.95")

    def test_three_variables_of_a_function(self):
        """A quadratic in logarithms with its top at 1000, 30, 120."""

        def three(cell):
            off = [math.log(v) for v in (cell.pitch_um / 1000, cell.base.lifetime_us / 30, cell.thickness_um / 120)]
            return {
                "efficiency_percent": 20 - off[0] ** 2 - 0.5 * off[1] ** 2 - 2 * off[2] ** 2 + 0.5 * off[0] * off[2]
            }

        ranges = {"pitch_um": (500, 2500), "lifetime_us": (10, 100), "thickness_um": (90, 180)}
        found = optimum(simple, ranges, compute=three, **QUIET)
        assert len(found.table) <= 45
        assert list(found.location.values()) == pytest.approx([1000, 30, 120], rel=0.02)
        assert plot_optimum(found).axes[2].get_xlabel() == "thickness (µm)"

    def test_table(self):
        pitches = np.geomspace(400, 1500, 9)
        table = pd.DataFrame({PITCH: pitches, "efficiency_percent": law(pitches, 21.5)})
        found = optimum(table, [PITCH])
        best = minimize(lambda p: -law(p[0] * 1000, 21.5), [0.7]).x[0] * 1000
        assert abs(found.location[PITCH] - best) <= found.location_bar[PITCH] < 20
        assert len(found.table) == 9

    def test_store_goes_on(self, tmp_path):
        """Interrupted after the first round: the second run computes only what is missing, with the same result."""
        store, cell, one = tmp_path / "search.sqlite", simple(), {PITCH: BOTH[PITCH]}
        first = optimum(cell, one, compute=exact_along, most_points=5, store=store, **QUIET)
        assert len(first.table) == 5
        assert not first.reached
        whole = optimum(cell, one, compute=exact_along, store=store, **QUIET)
        fresh = optimum(cell, one, compute=exact_along, **QUIET)
        pd.testing.assert_frame_equal(whole.table, fresh.table)
        with read_store(store) as opened:
            assert opened.counts()[:2] == (len(whole.table), len(whole.table))
            assert sum(run["points"] for run in opened.runs()) == len(whole.table)

    def test_refusals(self):
        with pytest.raises(fc.InputError, match="path 'pitch'"):
            optimum(simple(), {"pitch": (500, 900)}, compute=exact, **QUIET)
        with pytest.raises(fc.InputError, match="2 problems"):
            optimum(simple(), BOTH, maximize="a", minimize="b", within=0, **QUIET)
        with pytest.raises(fc.InputError, match="constraint <lambda>, which gives KeyError"):
            optimum(simple(), BOTH, constraints=[lambda v: v["width"]], **QUIET)
        with pytest.raises(fc.InputError, match=r"with 'width': allowed is variables: pitch_um"):
            optimum(simple(), BOTH, constraints=[Limit({"width": 1.0}, at_least=0)], **QUIET)
        with pytest.raises(fc.SolverError, match="leave less than 1 % of the ranges"):
            optimum(simple(), BOTH, compute=exact, constraints=[Limit({PITCH: 1.0}, at_most=400)], **QUIET)
        with pytest.raises(fc.SolverError, match=r"0 of 9 points have a result.*no column"):
            optimum(simple(), BOTH, compute=exact, maximize="voc_V", **QUIET)


STUDY = """\
title = "Best pitch"
compute = "collected_current"

[cell]
pitch_um = 300

[base]
doping_type = "p"
doping_per_cm3 = 1e16
thickness_um = 100
lifetime_us = 20

[front]
J0_fA_per_cm2 = 8

[[front.patches]]
shape = "strip"
name = "finger"
width_um = 60
layer = { doping_type = "n", sheet_resistance_ohm_per_sq = 90 }
contact = { terminal = "front" }

[[light]]
kind = "sunlight"

[optimum]
maximize = "collected_front_mA_per_cm2"
within = 0.2
most_points = 8

[optimum.variables]
pitch_um = { lowest = 150, highest = 1200 }

[[optimum.constraints]]
name = "gap"
at_least = 100
terms.pitch_um = 1

[accuracy]
first_step_um = 8
growth = 3
"""


class TestStudyFile:
    def test_runs_and_goes_on(self, tmp_path):
        """A real cell: opaque fingers on local junctions, whose collected current has a best pitch."""
        path = tmp_path / "best.toml"
        path.write_text(STUDY)
        study = read_study(path)
        assert (study.most_points, len(study.plan)) == (8, 5)
        table = run_study(study, processes=1, progress=False)
        found = study_outcome(study)
        assert len(table) == len(found.table) <= 8
        dense = fc.sweep(study.cell, {PITCH: np.geomspace(200, 700, 8)}, first_step_um=8, growth=3, **QUIET)
        top = fc.best_point(dense, PITCH, "collected_front_mA_per_cm2")
        assert abs(found.location[PITCH] - top.location) <= found.location_bar[PITCH] + 0.02 * top.location
        again = run_study(path, processes=1, progress=False)
        pd.testing.assert_frame_equal(table, again)
        with read_store(study.store_path) as store:
            assert sum(run["points"] for run in store.runs()) == len(table)

    def test_every_mistake_at_once(self, tmp_path):
        path = tmp_path / "bad.toml"
        wrong = STUDY.replace("maximize", "maximise").replace("within = 0.2", "within = -1")
        wrong = wrong.replace("pitch_um = { lowest = 150", "pitch = { lowest = 1500").replace(
            "terms.pitch_um", "terms.p"
        )
        path.write_text(wrong.replace("most_points = 8", "most_points = 2.5") + "\n[sweep]\npitch_um = [1]\n")
        with pytest.raises(fc.InputError) as caught:
            read_study(path)
        text = str(caught.value)
        for words in (
            "unknown key optimum.maximise", "Try: maximize", "within = -1", "most_points = 2.5", "path 'pitch'",
            "lowest = 1500, highest = 1200", "terms of 'p'", "[sweep] and [optimum] in one study",
        ):  # fmt: skip
            assert words in text
        assert "Traceback" not in text
        assert len(caught.value.complaints) == 7

    def test_constraints_without_room(self, tmp_path):
        path = tmp_path / "bad.toml"
        path.write_text(STUDY.replace("at_least = 100", "at_least = 5000"))
        with pytest.raises(fc.InputError, match="leave less than 1 %"):
            read_study(path)


def test_plots(tmp_path):
    one = optimum(simple(), {PITCH: BOTH[PITCH]}, compute=with_noise, **QUIET)
    plot_optimum(one, tmp_path / "one.png")
    two = optimum(simple(), BOTH, compute=exact, **QUIET)
    figure = plot_optimum(two, tmp_path / "two.png")
    assert figure.axes[0].get_xscale() == "log"
    assert all(Path(tmp_path / f"{n}.png").stat().st_size > 10_000 for n in ("one", "two"))


def test_proposals_are_apart():
    """No point is asked for twice, whatever the surrogate thinks."""
    found = optimum(simple(), BOTH, compute=exact, most_points=40, within=1e-4, **QUIET)
    unit = found.goal.region.scales.unit(found.table[list(BOTH)].to_numpy())
    distance = np.linalg.norm(unit[:, None] - unit[None], axis=2) + np.eye(len(unit))
    assert distance.min() > 0.9 * search_module.TWINS
