"""Plots of sweeps, lines and lateral losses."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from ..analysis.uncertainty import with_bar
from ..studies.best import best_point
from ..units import split_name
from .canvas import check_columns, finish, legend_beside, need, new_figure
from .labels import label, words
from .style import DARK, OKABE_ITO, log_by_default

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from numpy.typing import NDArray

CURRENT, POWER = "_mA_per_cm2", "_mW_per_cm2"
OPTICAL_IN_POWER = ("shaded", "parasitic")
"""Reflected and escaped light hardly depends on the contacts and would hide the rest of a stack of powers."""
OPTICAL = ("shaded", "reflected", "escaped", "parasitic")
COORDINATES = ("distance_um", "x_um", "y_um", "z_um")


def plot_sweep(
    table: pd.DataFrame, x: str = "pitch_um", picture: str | Path | None = None, *, y: str | None = None
) -> Figure:
    """Efficiency or collected current against a variable, and below it where the rest went.

    The best point is marked, and the range in which the result stays within 0.5 % of it (see `best_point`) is shaded.
    The losses are stacked: light not absorbed (shaded, reflected, escaped) and carriers lost (columns
    ``lost_…_mA_per_cm2``); or, with columns ``lost_…_mW_per_cm2``, power lost by shading, recombination and transport
    at maximum power. Rows without a result are marked by crosses at the lower edge.

    Parameters
    ----------
    table : pandas.DataFrame
        Of a sweep: one row per point.
    x : str
        Column of the variable.
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.
    y : str, optional
        Column to judge by; default is ``efficiency_percent`` or else the sum of ``collected_…_mA_per_cm2``.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        A missing or non-numeric column, no result at all, or a picture that cannot be written.
    """
    table = table.reset_index() if x in table.index.names else table
    check_columns("plot_sweep", table, [x] if y is None else [x, y])
    table = table.sort_values(x)
    at = table[x].to_numpy(dtype=float)
    value, bars, axis_label, unit = _judged(table, y)
    good = np.isfinite(value) & np.isfinite(at)
    need("plot_sweep", bool(good.any()), "a table without a single finite result", "one or more results")
    losses = _loss_columns(table)
    figure, axes = new_figure(
        2 if losses else 1, (7.2, 6.6 if losses else 3.9), ratios=(1.0, 1.15)[: 2 if losses else 1]
    )
    _draw_best(axes[0], at[good], value[good], bars[good], (split_name(x)[1], unit))
    if (~good).any():
        lower_edge = axes[0].get_xaxis_transform()
        axes[0].plot(at[~good], np.zeros((~good).sum()), "x", color=DARK, transform=lower_edge, clip_on=False,
                     label="no result")  # fmt: skip
    axes[0].set_ylabel(axis_label)
    if losses:
        _draw_losses(axes[1], at[good], table[good], losses)
        axes[1].set_ylabel(f"losses ({'mW' if losses[0].endswith(POWER) else 'mA'}/cm²)")
    axes[-1].set_xlabel(label(x))
    for ax in axes:
        legend_beside(ax)
    return finish(figure, picture)


def _judged(table: pd.DataFrame, y: str | None) -> tuple[NDArray[np.float64], NDArray[np.float64], str, str]:
    """Values, error bars (NaN where unknown), axis label and unit of what the sweep is judged by."""
    none = table.iloc[:, 0].map(lambda _: np.nan)
    if y is None and "efficiency_percent" in table:
        y = "efficiency_percent"
    if y is not None:
        bars = table.get(f"error_bar_{y}", none)
        return table[y].to_numpy(dtype=float), bars.to_numpy(dtype=float), label(y), split_name(y)[1]
    collected = [c for c in table if str(c).startswith("collected_") and str(c).endswith(CURRENT)]
    known = ", ".join(map(str, table.columns))
    need("plot_sweep", bool(collected), f"columns {known}", "collected_…_mA_per_cm2, or y= a column to judge by")
    total = table[collected].to_numpy(dtype=float).sum(axis=1)
    all_bars = [table.get(f"error_bar_{c}", none).to_numpy(dtype=float) for c in collected]
    text = label(str(collected[0])) if len(collected) == 1 else "collected (mA/cm²)"
    return total, np.sum(all_bars, axis=0), text, "mA/cm²"


def _loss_columns(table: pd.DataFrame) -> list[str]:
    """Optical losses first, then carriers; columns that are zero throughout are left out."""
    unit = POWER if any(str(c).startswith("lost_") and str(c).endswith(POWER) for c in table) else CURRENT
    shown = OPTICAL if unit == CURRENT else OPTICAL_IN_POWER
    optical = [f"{o}{unit}" for o in shown if f"{o}{unit}" in table]
    columns = optical + [
        str(c) for c in table if str(c).startswith("lost_") and str(c).endswith(unit) and c not in optical
    ]
    top = max((float(table[c].max()) for c in columns), default=0.0)
    return [c for c in columns if float(table[c].max()) > 1e-6 * top]


def _draw_best(
    ax: Axes, x: NDArray[np.float64], y: NDArray[np.float64], bars: NDArray[np.float64], units: tuple[str, str]
) -> None:
    """The curve with its error bars, its best point and flat range as `best_point` finds them."""
    import pandas as pd

    best = best_point(pd.DataFrame({"x": x, "y": y, "error_bar_y": bars}).drop_duplicates("x"), "x", "y")
    text = f"within {best.within_percent:g} %:\n{best.flat_from:.4g} to {best.flat_to:.4g} {units[0]}"
    ax.axvspan(best.flat_from, best.flat_to, color=OKABE_ITO[4], alpha=0.22, linewidth=0, label=text)
    known = np.where(np.isfinite(bars), bars, 0.0)
    ax.errorbar(x, y, yerr=known, fmt="-o", color=OKABE_ITO[0], markersize=4, elinewidth=1.2, capsize=2)
    value, place = with_bar(best.value, best.value_bar, 4), with_bar(best.location, best.location_bar, 4)
    text = f"best: {value} {units[1]}\nat {place} {units[0]}"
    ax.plot(best.location, best.value, "D", color=OKABE_ITO[5], markersize=8, label=text)
    ax.margins(y=0.12)


def _draw_losses(ax: Axes, x: NDArray[np.float64], table: pd.DataFrame, columns: list[str]) -> None:
    """Stacked areas (one bar for a single point); beyond the colours at hand the smallest are taken together."""
    series = {c: table[c].fillna(0.0).to_numpy(dtype=float) for c in columns}
    room = len(OKABE_ITO)
    if len(series) > room:
        small = sorted(series, key=lambda c: float(series[c].max()))[: len(series) - room + 1]
        rest = np.sum([series.pop(c) for c in small], axis=0)
        series["other"] = rest
    names = [_loss_name(c) for c in series]
    colors = OKABE_ITO[: len(series)]
    if len(x) == 1:
        bottoms = np.cumsum([0.0, *(float(v[0]) for v in series.values())])
        for (values, name, color), bottom in zip(
            zip(series.values(), names, colors, strict=True), bottoms, strict=False
        ):
            ax.bar(x, values, width=0.2 * abs(x[0]) or 0.2, bottom=bottom, color=color, label=name)
    else:
        ax.stackplot(x, *series.values(), labels=names, colors=colors, edgecolor="white", linewidth=0.6)
    ax.set_ylim(bottom=0)


def _loss_name(column: str) -> str:
    text = split_name(column.removeprefix("lost_"))[0].replace("_", " ")
    return {"shaded": "shading", "reflected": "reflection", "escaped": "escaped light"}.get(text, text)


def plot_line(table: pd.DataFrame, log: bool | None = None, picture: str | Path | None = None) -> Figure:
    """Fields along a line.

    Parameters
    ----------
    table : pandas.DataFrame
        From `Solution.along_line`, or several joined: ``distance_um`` and one or more fields of one unit.
    log : bool, optional
        Logarithmic axis; default for densities and rates that span more than two decades.
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        No ``distance_um``, or no field.
    """
    check_columns("plot_line", table, ["distance_um"])
    fields = [str(c) for c in table if c not in COORDINATES]
    need("plot_line", bool(fields), f"columns {', '.join(map(str, table))}", "distance_um and a field")
    check_columns("plot_line", table, fields)
    values = table[fields].to_numpy(dtype=float)
    log = any(log_by_default(f, table[f].to_numpy(dtype=float)) for f in fields) if log is None else log
    figure, axes = new_figure(1, (6.4, 4.0))
    for i, field in enumerate(fields):
        shown = np.where(values[:, i] > 0, values[:, i], np.nan) if log else values[:, i]
        axes[0].plot(table["distance_um"], shown, color=OKABE_ITO[i % len(OKABE_ITO)], label=words(field))
    axes[0].set_yscale("log" if log else "linear")
    axes[0].set_xlabel("distance along the line (µm)")
    unit = label(fields[0]).removeprefix(words(fields[0])).strip()
    axes[0].set_ylabel(label(fields[0]) if len(fields) == 1 else unit.strip("()"))
    if len(fields) > 1:
        legend_beside(axes[0])
    return finish(figure, picture)


def plot_lateral_losses(table: pd.DataFrame, picture: str | Path | None = None) -> Figure:
    """Generation, collection and losses against the distance from the contact, as steps over the bins.

    Parameters
    ----------
    table : pandas.DataFrame
        From `lateral_losses`: bins and currents per bin.
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        A missing column.
    """
    bins = ["distance_from_um", "distance_to_um"]
    groups = (["generated", "collected"], ["lost_in_bulk", "lost_at_surfaces"])
    check_columns("plot_lateral_losses", table, [*bins, *(g + CURRENT for group in groups for g in group)])
    edges = np.append(table[bins[0]].to_numpy(dtype=float), float(table[bins[1]].iloc[-1]))
    figure, axes = new_figure(2, (7.2, 5.6), ratios=(1.0, 1.0))
    styles = iter(zip(OKABE_ITO[1::-1] + OKABE_ITO[5:6] + OKABE_ITO[2:3], ("-", "-", "-", "--"), strict=True))
    for ax, group in zip(axes, groups, strict=True):
        for name in group:
            color, style = next(styles)
            values = table[name + CURRENT].to_numpy(dtype=float)
            ax.stairs(values, edges, baseline=None, color=color, linestyle=style, linewidth=2, label=words(name))
        low, high = ax.dataLim.intervaly
        ax.set_ylim(min(0.0, 1.05 * low), 1.08 * high or 1.0)
        ax.set_xlim(edges[0], edges[-1])
        ax.set_ylabel("per bin (mA/cm² of cell)")
        legend_beside(ax)
    axes[-1].set_xlabel("distance from the contact (µm)")
    return finish(figure, picture)
