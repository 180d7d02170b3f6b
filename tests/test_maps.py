"""The map of a sweep of two variables: places and numbers of its cells, and what it refuses."""

import numpy as np
import pandas as pd
import pytest

import fem_carriers as fc


def two_variables():
    rows = [(p, w, 20 + 0.001 * p - 0.01 * w) for w in (40, 20) for p in (500, 900, 700)]
    return pd.DataFrame(rows, columns=["pitch_um", "front.finger.width_um", "efficiency_percent"])


def written(figure):
    """Numbers by (column, row)."""
    return {tuple(map(int, text.get_position())): float(text.get_text()) for text in figure.axes[0].texts}


def frame(figure):
    """Column and row of the framed cell."""
    (patch,) = figure.axes[0].patches
    return patch.get_x() + 0.5, patch.get_y() + 0.5


class TestMap:
    def test_numbers_stand_where_they_belong(self, tmp_path):
        """Rows of the table are unordered; axes rise to the right and upwards."""
        figure = fc.plot_map(two_variables(), "pitch_um", "front.finger.width_um", picture=tmp_path / "map.png")
        ax = figure.axes[0]
        assert [t.get_text() for t in ax.get_xticklabels()] == ["500", "700", "900"]
        assert [t.get_text() for t in ax.get_yticklabels()] == ["20", "40"]
        pitches, widths = (500, 700, 900), (20, 40)
        expected = {
            (i, j): round(20 + 0.001 * p - 0.01 * w, 2) for i, p in enumerate(pitches) for j, w in enumerate(widths)
        }
        assert written(figure) == expected
        assert ax.yaxis.get_ticks_position() == "left"
        assert ax.get_ylim()[0] < ax.get_ylim()[1]
        assert frame(figure) == (2, 0)
        assert (ax.get_xlabel(), ax.get_ylabel()) == ("pitch (µm)", "front finger width (µm)")
        assert (tmp_path / "map.png").stat().st_size > 1000

    def test_points_without_a_result_stay_empty(self):
        table = two_variables()
        table.loc[1, "efficiency_percent"] = np.nan
        figure = fc.plot_map(table.drop(index=0), "pitch_um", "front.finger.width_um")
        assert len(written(figure)) == 4
        assert frame(figure) == (2, 0)

    @pytest.mark.parametrize(
        ("change", "words"),
        [
            (lambda t: pd.concat([t, t]), "several rows"),
            (lambda t: t.assign(efficiency_percent=np.nan), "finite result"),
            (lambda t: t.drop(columns="pitch_um"), "no column 'pitch_um'"),
            (lambda t: t.assign(efficiency_percent="high"), "numbers"),
            (lambda t: t.iloc[:0], "empty table"),
        ],
    )
    def test_refuses(self, change, words):
        with pytest.raises(fc.InputError, match=words):
            fc.plot_map(change(two_variables()), "pitch_um", "front.finger.width_um")

    def test_one_point_and_zeros(self):
        assert written(fc.plot_map(two_variables().iloc[:1], "pitch_um", "front.finger.width_um")) == {(0, 0): 20.1}
        zeros = two_variables().assign(efficiency_percent=0.0)
        assert set(written(fc.plot_map(zeros, "pitch_um", "front.finger.width_um")).values()) == {0.0}
