"""Plots of fits (data, fitted curve, residuals) and of sensitivities."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from ..studies.gradients import input_words
from ..units import split_name
from .canvas import finish, need, new_figure
from .labels import label, words
from .style import DARK, OKABE_ITO

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from ..studies.fit import Fit

MOST_BARS = 20
GAIN, LOSS = OKABE_ITO[2], OKABE_ITO[5]


def plot_fit(fit: Fit, picture: str | Path | None = None, *, curve: str | None = None) -> Figure:
    """Measured points with their errors and the fitted curve; below it the residuals.

    Parameters
    ----------
    fit : Fit
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.
    curve : str, optional
        Name of the measurement, if several were fitted together; default is the first.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        No measurement of that name, or a picture that cannot be written.
    """
    problems = Complaints("plot_fit")
    problems.unless(curve is None or curve in fit.curves, f"curve = {curve!r}", f"one of {', '.join(fit.curves)}")
    problems.raise_if_any()
    table = fit.curves[curve or next(iter(fit.curves))]
    figure, axes = new_figure(2, (7.2, 5.6), ratios=(2.6, 1.0))
    _draw_curve(axes[0], table)
    _draw_residuals(axes[1], table)
    axes[1].set_xlabel(label(str(table.columns[0])))
    axes[0].set_title("\n".join(_wrapped(fit.statements)), fontsize=9, loc="left")
    return finish(figure, picture)


def _draw_curve(ax: Axes, table: pd.DataFrame) -> None:
    x, measured, fitted = (table.iloc[:, i].to_numpy(dtype=float) for i in range(3))
    ax.errorbar(x, measured, yerr=_errors(table), fmt="o", color=OKABE_ITO[0], markersize=3.5, elinewidth=1.0,
                label="measured")  # fmt: skip
    ax.plot(x, fitted, color=OKABE_ITO[5], label="fitted")
    ax.set_ylabel(label(str(table.columns[1]).removeprefix("measured_")))
    ax.legend(loc="best", frameon=False)


def _draw_residuals(ax: Axes, table: pd.DataFrame) -> None:
    x, residual = table.iloc[:, 0].to_numpy(dtype=float), table.iloc[:, 3].to_numpy(dtype=float)
    ax.axhline(0, color=DARK, linewidth=0.8)
    ax.errorbar(x, residual, yerr=_errors(table), fmt="o", color=OKABE_ITO[0], markersize=3.5, elinewidth=1.0)
    reach = 1.15 * float(np.max(np.abs(residual) + (0.0 if table.shape[1] < 5 else table.iloc[:, 4])))
    ax.set_ylim(-reach or -1.0, reach or 1.0)
    ax.set_ylabel(label(str(table.columns[3])))


def _errors(table: pd.DataFrame) -> Any:
    return table.iloc[:, 4].to_numpy(dtype=float) if table.shape[1] > 4 else None


def _wrapped(statements: tuple[str, ...]) -> list[str]:
    import textwrap

    return [line for text in statements for line in textwrap.wrap(text.replace("_", " "), 92)]


def plot_sensitivity(table: pd.DataFrame, picture: str | Path | None = None, *, figure: str | None = None) -> Figure:
    """Bars of what 1 % more of each input changes, the most important ones first.

    Parameters
    ----------
    table : pandas.DataFrame
        From `sensitivity_table` or `gradients`.
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.
    figure : str, optional
        Which figure of the table; default is the efficiency, or else its last one.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        No such figure, nothing to show, or a picture that cannot be written.
    """
    known = [str(c).removeprefix("change_") for c in table if str(c).startswith("change_")]
    need("plot_sensitivity", bool(known), f"columns {', '.join(map(str, table))}", "a table of sensitivity_table")
    chosen = figure or ("efficiency_percent" if "efficiency_percent" in known else known[-1])
    need("plot_sensitivity", chosen in known, f"figure = {chosen!r}", " or ".join(known))
    shown = table[np.isfinite(table[f"change_{chosen}"]) & (table[f"change_{chosen}"] != 0)]
    need("plot_sensitivity", len(shown) > 0, "a table without a single change", "inputs that matter")
    order = shown[f"change_{chosen}"].abs().sort_values(ascending=False).index[:MOST_BARS][::-1]
    names, values = shown.loc[order, "input"], shown.loc[order, f"change_{chosen}"].to_numpy(dtype=float)
    drawn, axes = new_figure(1, (7.6, 1.4 + 0.3 * len(values)))
    ax, size = axes[0], np.abs(values)
    ax.barh(np.arange(len(values)), size, color=[GAIN if v > 0 else LOSS for v in values], height=0.7)
    ax.set_yticks(np.arange(len(values)), [input_words(str(n)) for n in names])
    ax.set_xscale("log")
    ax.set_xlim(0.5 * size.min(), 4 * size.max())
    for i, value in enumerate(values):
        ax.annotate(f"{value:+.2g}", (size[i], i), xytext=(4, 0), textcoords="offset points", va="center", fontsize=8.5)
    _legend_of_signs(ax)
    unit = split_name(chosen)[1]
    ax.set_xlabel(f"size of the change of {words(chosen)} for 1 % more ({'% absolute' if unit == '%' else unit})")
    ax.grid(axis="y", visible=False)
    return finish(drawn, picture)


def _legend_of_signs(ax: Axes) -> None:
    from matplotlib.patches import Patch

    handles = [Patch(color=GAIN, label="more raises it"), Patch(color=LOSS, label="more lowers it")]
    ax.legend(handles=handles, loc="lower right", frameon=False, fontsize=9)
