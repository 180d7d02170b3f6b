"""Error bars: their rule, their print, what asks for them, and that they hold on problems with known answers."""

from __future__ import annotations

import math
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from simple_cells import constant_base

import fem_carriers as fc
from fem_carriers.analysis.accuracy import error_bar
from fem_carriers.analysis.uncertainty import with_bar

sys.path.append(str(Path(__file__).parent / "benchmarks"))
REAR = fc.Surface(J0_fA_per_cm2=10, contact=fc.Contact("rear", contact_resistivity_mohm_cm2=5))
LIGHT = fc.Light.sunlight(0.03, path="lambertian")


def cell(pitch_um=1000.0):
    wafer = fc.Base("p", doping_per_cm3=1e16, thickness_um=150, lifetime_us=200)
    finger = fc.Strip("finger", 30, J0_fA_per_cm2=600, contact=fc.Contact("front", 2))
    front = fc.Face(fc.Surface(J0_fA_per_cm2=30, layer=fc.DopedLayer("n", 100)), [finger])
    return fc.UnitCell(wafer, pitch_um, front=front, rear=REAR, light=LIGHT)


@pytest.mark.parametrize("share", [0.25, 0.35, 0.6])
def test_bar_of_a_geometric_sequence_holds_and_is_tight(share):
    errors = 1e-2 * share ** np.arange(5)
    bar = error_bar(list(1 + errors), [0.25] * 4, 1.0)
    assert errors[-1] < bar < 4 * errors[-1]


@pytest.mark.parametrize("share", [0.25, 0.35, 0.6])
@pytest.mark.parametrize("steps", [(1.0, 0.5), (0.5, 1.0), (1.0, 1.2)])
def test_bar_holds_and_is_tight_for_unequal_steps(share, steps):
    """The error falls by `share` per level; the last two steps are parts of one, or more."""
    levels = np.cumsum([0.0, 1.0, *steps])
    errors = 1e-2 * share**levels
    bar = error_bar(list(1 + errors), list(0.25 ** np.diff(levels)), 1.0, steps)
    assert errors[-1] < bar < 4 * errors[-1]


def test_bar_of_a_lucky_difference_is_not_small():
    """Two errors of opposite sign pass through zero: 1e-3, 1e-4, then -1e-5 by chance next to 1e-4."""
    values = [1.001, 1.0001, 1.000099]
    assert error_bar(values, [0.25, 0.25], 1.0) > 1e-4


def test_bar_needs_three_meshes():
    assert error_bar([1.0, 1.1], [0.25], 1.0) == math.inf
    assert error_bar([1.0, 1.0, 1.0], [0.25, 0.25], 1.0) > 0


@pytest.mark.parametrize(
    ("value", "bar", "text"),
    [
        (0.6868058, 1.2e-4, "0.68681 ± 0.00012"),
        (23.687, 0.0061, "23.687 ± 0.007"),
        (0.6868058, 2e-8, "0.686806 ± 0.000001"),
        (1240.2, 33.0, "1240 ± 33"),
        (5.4057982e9, 2e5, "(5.4058 ± 0.0002)e9"),
        (23.687, None, "23.687"),
        (23.687, math.inf, "23.687"),
    ],
)
def test_print_of_a_bar(value, bar, text):
    assert with_bar(value, bar) == text


def test_curve_of_a_cell_has_bars_that_hold():
    curve = fc.current_voltage(cell())
    fine = fc.current_voltage(fc.problem(cell(), level=1))
    assert curve.uncertainty is not None
    assert curve.uncertainty.reached
    for name, bar in curve.uncertainty.items():
        assert abs(curve.summary[name] - fine.summary[name]) < bar < 1e-3 * curve.summary[name], name
        assert curve.summary[f"error_bar_{name}"] == bar
    assert "±" in str(curve)
    assert "no error bars" in str(fine)


def test_meshes_that_are_stated_stay_as_they_are():
    for curve in (
        fc.current_voltage(cell(), first_step_um=3, growth=3),
        fc.current_voltage(fc.problem(cell(), level=-3)),
    ):
        assert curve.uncertainty is None
    with pytest.raises(fc.InputError, match="growth"):
        fc.current_voltage(fc.problem(cell(), level=-3), growth=3)


def test_absolute_targets():
    loose = fc.solve_bipolar(cell(), 0.5, target_error={"current_front_mA_per_cm2": 1.0})
    tight = fc.solve_bipolar(cell(), 0.5, target_error={"current_front_mA_per_cm2": 2e-6})
    assert tight.problem.space.size > loose.problem.space.size
    assert tight.uncertainty["current_front_mA_per_cm2"] <= 2e-6
    with pytest.raises(fc.InputError, match="allowed is one of current_front_mA_per_cm2"):
        fc.solve_bipolar(cell(), 0.5, target_error={"voc_V": 1e-3})
    for wrong in (0, -1, "small", True):
        with pytest.raises(fc.InputError, match="target_error_percent"):
            fc.current_voltage(cell(), target_error_percent=wrong)


def test_end_of_the_meshes_is_said():
    with pytest.warns(fc.ModelWarning, match="not reached with"):
        solution = fc.solve_bipolar(cell(), 0.5, target_error_percent=1e-7, largest_unknowns=3000)
    assert not solution.uncertainty.reached
    assert solution.problem.space.size <= 3000
    assert 0 < solution.uncertainty["current_front_mA_per_cm2"] < 1e-2


def test_dark_and_contactless_pieces():
    dark = fc.UnitCell(cell().base, 1000, front=cell().front, rear=REAR)
    curve = fc.current_voltage(dark, [0.0, 0.5])
    assert set(curve.uncertainty) == {"current_mA_per_cm2"}
    sample = fc.UnitCell(cell().base, 1000, front=fc.Surface(J0_fA_per_cm2=10), light=LIGHT)
    assert set(fc.solve_bipolar(sample).uncertainty) == {"implied_voltage_V"}
    assert set(fc.solve_excess(sample).uncertainty) == {"mean_excess_density_per_cm3"}


def test_table_and_optimum_carry_bars():
    table = fc.sweep(cell(), {"pitch_um": [800, 1100, 1400, 1800]}, compute=fc.current_voltage, processes=1)
    bars = table["error_bar_efficiency_percent"]
    assert ((bars > 0) & (bars < 1e-3 * table["efficiency_percent"])).all()
    best = fc.best_point(table, "pitch_um", "efficiency_percent")
    dense = fc.sweep(cell(), {"pitch_um": np.linspace(best.location - 60, best.location + 60, 5)},
                     compute=fc.current_voltage, processes=1)  # fmt: skip
    fine = fc.best_point(dense, "pitch_um", "efficiency_percent")
    assert abs(fine.location - best.location) < best.location_bar < 100
    assert abs(fine.value - best.value) < best.value_bar
    assert "±" in str(best)
    shown = fc.with_bars(table, {"pitch_um": "pitch (µm)", "efficiency_percent": "efficiency (%)"})
    assert shown["efficiency (%)"].str.contains("±").all()
    first, second = table.iloc[0], table.iloc[1]
    assert fc.distinguishable(first, second, "efficiency_percent")
    assert not fc.distinguishable(first, first, "efficiency_percent")


def test_points_that_cannot_be_told_apart_are_named():
    table = pd.DataFrame(
        {
            "pitch_um": [1.0, 2, 3, 4],
            "efficiency_percent": [20.0, 20.9, 21.0, 20.0],
            "error_bar_efficiency_percent": 0.1,
        }
    )
    best = fc.best_point(table, "pitch_um", "efficiency_percent")
    assert best.tied == (2.0, 3.0)
    assert "cannot be told apart" in str(best)


def test_random_problems_with_known_answers():
    """A sample of tests/benchmarks/error_bars.py, which names the sources of the answers."""
    from error_bars import run

    table = run(2, 11, skip_3d=True)
    assert table["inside"].all(), table[~table["inside"]].to_string()
    assert table["bar_over_error"].median() < 6


def test_bar_in_three_dimensions():
    """A corner contact; the share collected on the finest of five families of meshes is 0.29220."""
    front = fc.Face(
        fc.Surface(), [fc.Rectangle("corner", 40, 150, layer=fc.DopedLayer("n", 100), contact=fc.Contact("metal"))]
    )
    base = constant_base(30.0, 500e-4**2 / 30 * 1e6)
    corner = fc.UnitCell(base, 1200, 600, front=front, light=fc.Light.uniform(1e16))
    solution = fc.solve_excess(corner, target_error_percent=1.0)
    share = solution.ledger.share("metal")
    bar = solution.uncertainty["collected_metal_mA_per_cm2"] / solution.ledger.generated_mA_per_cm2
    assert abs(share - 0.29221) < bar < 0.01 * share
