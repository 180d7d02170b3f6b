"""Graded one-dimensional grids: closed-form geometric series and the properties promised in the docstring."""

from __future__ import annotations

import numpy as np
import pytest

from fem_carriers.errors import InputError
from fem_carriers.meshing.grading import graded_axis

CASES = [
    (0.0, 100.0, [(0.0, 0.5)], 1.8, 20.0, []),
    (0.0, 100.0, [(30.0, 0.5)], 1.8, 20.0, [70.0, 10.0]),
    (0.0, 1.0, [(0.3, 1e-7)], 2.0, 0.2, []),
    (-5.0, 300.0, [(20.0, 0.1), (21.0, 0.3), (280.0, 2.0)], 1.5, 30.0, [100.0, 250.5]),
    (0.0, 10.0, [(5.0, 3.0)], 2.0, 0.2, []),
    (0.0, 180.0, [(0.0, 0.06), (180.0, 1.0)], 3.0, 60.0, [0.4]),
    (0.0, 10.0, [], 1.5, 3.0, [2.5]),
]


def allowed_step(x, fine_points, growth, largest):
    """The rule itself: a step that starts at x is at most min(largest, s + (growth − 1) |x − position|)."""
    return np.min([np.full_like(x, largest), *(s + (growth - 1) * np.abs(x - p) for p, s in fine_points)], axis=0)


def test_a_fitting_length_gives_the_geometric_series_itself():
    # partial sums of a geometric series: x_k = s (g^k − 1)/(g − 1) (Abramowitz & Stegun 1972, 3.1.10)
    first, growth, n = 0.25, 1.8, 9
    series = first * (growth ** np.arange(n + 1) - 1) / (growth - 1)
    x = graded_axis(0.0, series[-1], [(0.0, first)], growth, largest=1e9)
    np.testing.assert_allclose(x, series, rtol=1e-12)


def test_series_capped_at_largest_goes_on_with_equal_steps():
    x = graded_axis(0.0, 1000.0, [(0.0, 1.0)], 2.0, largest=10.0)
    steps = np.diff(x)
    np.testing.assert_allclose(steps[10:], steps[10], rtol=1e-12)
    assert 9.5 < steps[10] <= 10.0


def test_without_fine_points_the_grid_is_uniform():
    np.testing.assert_allclose(graded_axis(0.0, 1.0, [], 2.0, 0.2), np.linspace(0, 1, 6), rtol=1e-12)


@pytest.mark.parametrize(("low", "high", "fine", "growth", "largest", "fixed"), CASES)
def test_prescribed_positions_are_nodes_and_the_grid_ascends(low, high, fine, growth, largest, fixed):
    x = graded_axis(low, high, fine, growth, largest, fixed)
    assert x[0] == low
    assert x[-1] == high
    assert np.isin([*(p for p, _ in fine), *fixed], x).all()
    assert (np.diff(x) > 0).all()
    np.testing.assert_array_equal(x, graded_axis(low, high, fine, growth, largest, fixed))


@pytest.mark.parametrize(("low", "high", "fine", "growth", "largest", "fixed"), CASES)
def test_no_step_exceeds_the_rule(low, high, fine, growth, largest, fixed):
    x = graded_axis(low, high, fine, growth, largest, fixed)
    # a step may start at either end, whichever is nearer to a fine point; round-off of positions is 1e-16 of the length
    rule = np.minimum(*(allowed_step(end, fine, growth, largest) for end in (x[:-1], x[1:])))
    assert (np.diff(x) <= rule * (1 + 2e-8) + 1e-15 * (high - low)).all()
    for position, step in fine:
        beside = np.abs(x - position)
        assert np.sort(beside)[1] <= step * (1 + 2e-8)


@pytest.mark.parametrize(("low", "high", "fine", "growth", "largest", "fixed"), [c for c in CASES if not c[5]])
def test_neighbouring_steps_differ_by_at_most_growth(low, high, fine, growth, largest, fixed):
    steps = np.diff(graded_axis(low, high, fine, growth, largest))
    ratio = steps[1:] / steps[:-1]
    assert np.maximum(ratio, 1 / ratio).max() <= growth * (1 + 1e-6)


@pytest.mark.parametrize("position", np.linspace(0.7, 99.3, 23))
def test_a_fixed_position_causes_no_slivers(position):
    fine = [(0.0, 0.5), (100.0, 0.5)]
    x = graded_axis(0.0, 100.0, fine, 1.8, 20.0, [position])
    rule = allowed_step((x[1:] + x[:-1]) / 2, fine, 1.8, 20.0)
    assert (np.diff(x) / rule).min() > 0.3  # half the rule, which at a step's middle is 1.4 times that at its start


def test_mirrored_input_gives_the_mirrored_grid():
    fine, fixed = [(12.0, 0.1), (70.0, 2.0)], [33.0]
    x = graded_axis(0.0, 100.0, fine, 1.7, 15.0, fixed)
    mirrored = graded_axis(0.0, 100.0, [(100 - p, s) for p, s in fine], 1.7, 15.0, [100 - p for p in fixed])
    np.testing.assert_allclose(mirrored, 100 - x[::-1], atol=1e-12)


def test_tiny_first_steps_keep_their_accuracy():
    first, growth = 1e-7, 2.0
    steps = np.diff(graded_axis(0.0, 1.0, [(0.0, first), (1.0, first)], growth, 1.0))
    ratio = steps[1:12] / steps[:11]
    assert 0.5 * first < steps[0] <= first
    np.testing.assert_allclose(ratio, ratio[0], rtol=1e-8)
    np.testing.assert_allclose(steps[-12:][::-1], steps[:12], rtol=1e-8)  # 1e-16 of round-off at 1 against 1e-7


def test_refused_input_lists_every_problem():
    with pytest.raises(InputError) as caught:
        graded_axis(0.0, 1.0, [(2.0, 0.1), (0.5, -1.0)], 1.0, 0.2, [3.0])
    assert len(caught.value.complaints) == 4
