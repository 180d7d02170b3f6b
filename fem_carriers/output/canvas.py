"""Figures with the look of the package, and what every plot checks first."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from ..errors import Complaints
from ..files.atomic import target, write_atomically
from .style import DARK

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

PICTURES = (".png", ".pdf", ".svg")
LOOK: Any = {
    "font.size": 10, "axes.labelsize": 10.5, "axes.spines.top": False, "axes.spines.right": False,
    "axes.grid": True, "grid.alpha": 0.25, "grid.linewidth": 0.6, "axes.axisbelow": True,
    "axes.formatter.use_mathtext": True,
    "legend.frameon": False, "legend.fontsize": 9, "axes.edgecolor": DARK, "lines.linewidth": 1.8,
}  # fmt: skip


def need(what: str, condition: bool, given: str, allowed: str) -> None:
    """Refuse what was given, in words, unless the condition holds."""
    problems = Complaints(what)
    problems.unless(condition, given, allowed)
    problems.raise_if_any()


def check_columns(what: str, table: pd.DataFrame, names: list[str]) -> None:
    """Refuse an empty table, and columns that are missing or hold no numbers."""
    from pandas.api.types import is_numeric_dtype

    problems = Complaints(what)
    for name in names:
        known = ", ".join(map(str, table.columns))
        if problems.unless(name in table, f"no column {name!r}", f"one of {known}"):
            problems.unless(is_numeric_dtype(table[name]), f"column {name!r} of {table[name].dtype}", "numbers")
    problems.unless(len(table) > 0, "an empty table", "one or more rows")
    problems.raise_if_any()


def new_figure(
    rows: int, size: tuple[float, float], ratios: tuple[float, ...] | None = None, shared: bool = True
) -> tuple[Figure, list[Axes]]:
    """A figure with its own canvas, so that nothing is registered globally; axes below each other, x shared or not."""
    import matplotlib
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    with matplotlib.rc_context(LOOK):
        figure = Figure(figsize=size, layout="constrained")
        FigureCanvasAgg(figure)
        axes = figure.subplots(rows, 1, sharex=shared, squeeze=False, height_ratios=ratios)
    return figure, list(axes[:, 0])


def legend_beside(ax: Axes) -> None:
    """Legend to the right of the axes, in the order in which areas are stacked (top first)."""
    handles, names = ax.get_legend_handles_labels()
    legend = ax.legend(
        handles[::-1], names[::-1], loc="upper left", bbox_to_anchor=(1.01, 1.0), fontsize=9, frameon=False
    )
    legend.set_in_layout(False)  # a legend taller than its axes would squeeze them; see `finish`


def finish(figure: Figure, picture: Any) -> Figure:
    """Leave room for the legends beside the axes, and save."""
    legends = [legend for ax in figure.axes if (legend := ax.get_legend()) is not None and not legend.get_in_layout()]
    engine = figure.get_layout_engine()
    if legends and engine is not None:
        figure.canvas.draw()
        widest = max(legend.get_window_extent().width for legend in legends)
        engine.set(rect=(0.0, 0.0, 1.0 - widest / figure.bbox.width - 0.015, 1.0))  # type: ignore[call-arg]
    if picture is not None:
        path = target("picture", picture, PICTURES)
        write_atomically(path, lambda p: figure.savefig(p, dpi=150))
    return figure
