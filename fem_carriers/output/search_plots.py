"""Plots of an optimum and of a tolerance."""

from __future__ import annotations

from pathlib import Path
from textwrap import fill
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.uncertainty import with_bar
from ..studies.optimum import place_text
from ..studies.search import bars_of
from ..units import split_name
from .canvas import finish, legend_beside, need, new_figure
from .labels import label
from .style import DARK, OKABE_ITO

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from ..studies.optimum import Optimum
    from ..studies.tolerance import Tolerance

STEPS, RASTER, BINS = 241, 121, 60


def plot_optimum(optimum: Optimum, picture: str | Path | None = None) -> Figure:
    """The surrogate with its error, the points it rests on, the best and what is as good.

    One variable: a curve. Two: a map with a line around what is as good. More: one curve for each, through the best.

    Parameters
    ----------
    optimum : Optimum
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.

    Returns
    -------
    matplotlib.figure.Figure
    """
    names = list(optimum.location)
    if len(names) == 2:
        figure, axes = new_figure(1, (7.2, 4.8))
        _draw_map(axes[0], optimum, names)
        return finish(figure, picture)
    figure, axes = new_figure(len(names), (7.2, 0.9 + 2.9 * len(names)), shared=False)
    for ax, name in zip(axes, names, strict=True):
        _draw_curve(ax, optimum, name, alone=len(names) == 1)
        ax.set_xlabel(label(name))
    legend_beside(axes[0])
    return finish(figure, picture)


def _draw_curve(ax: Axes, optimum: Optimum, name: str, alone: bool) -> None:
    scales = optimum.goal.region.scales
    k = scales.names.index(name)
    ends = (scales.lowest[k], scales.highest[k])
    space = np.geomspace if ends[0] > 0 else np.linspace
    at = space(*ends, STEPS)
    others = {n: np.full(STEPS, v) for n, v in optimum.location.items()}
    value, bar = optimum.predicted(others | {name: at})
    low, high = optimum.ranges[name]
    unit = split_name(name)[1]
    text = f"loses at most {optimum.within:g}:\n{low:.4g} to {high:.4g} {unit}".rstrip()
    ax.axvspan(low, high, color=OKABE_ITO[4], alpha=0.22, linewidth=0, label=text)
    ax.fill_between(at, value - bar, value + bar, color=OKABE_ITO[0], alpha=0.25, linewidth=0)
    ax.plot(at, value, color=OKABE_ITO[0], label="surrogate and its error")
    if alone:
        table = optimum.table.dropna(subset=[optimum.quantity])
        bars = np.nan_to_num(bars_of(table, optimum.quantity))
        ax.errorbar(table[name], table[optimum.quantity], yerr=bars, fmt="o", color=DARK, markersize=4, capsize=2,
                    label="computed points")  # fmt: skip
    place = f"{place_text(optimum.location[name], optimum.location_bar[name])} {unit}".rstrip()
    ax.plot(optimum.location[name], optimum.value, "D", color=OKABE_ITO[5], markersize=8, label=f"best: {place}")
    ax.set_ylabel(label(optimum.quantity))
    ax.margins(x=0.01)


def _draw_map(ax: Axes, optimum: Optimum, names: list[str]) -> None:
    scales = optimum.goal.region.scales
    line = np.linspace(0, 1, RASTER)
    points = np.stack(np.meshgrid(line, line), axis=-1).reshape(-1, 2)
    x, y = (c.reshape(RASTER, RASTER) for c in scales.columns(points).values())
    allowed = optimum.goal.region.allowed(points)
    value = np.where(allowed, optimum.predicted(scales.columns(points))[0], np.nan).reshape(RASTER, RASTER)
    sign = 1 if optimum.maximized else -1
    shown = np.maximum(sign * value, sign * optimum.value - 30 * optimum.within) * sign
    filled = ax.contourf(x, y, shown, levels=24, cmap="viridis")
    level = optimum.value - sign * optimum.within
    if np.nanmin(value) < level < np.nanmax(value):
        ax.contour(x, y, value, levels=[level], colors="white", linewidths=1.8)
    ax.plot(optimum.table[names[0]], optimum.table[names[1]], "o", color=DARK, markersize=4, label="computed points")
    (x_best, y_best), (x_bar, y_bar) = ([of[n] for n in names] for of in (optimum.location, optimum.location_bar))
    ax.errorbar(x_best, y_best, xerr=x_bar, yerr=y_bar, fmt="D", color=OKABE_ITO[5], markersize=8, label="best")
    ax.plot([], [], color="#bbbbbb", linewidth=1.8, label=f"white line: loses {optimum.within:g}")
    for k, (axis, set_scale) in enumerate(((ax.xaxis, ax.set_xscale), (ax.yaxis, ax.set_yscale))):
        if scales.lowest[k] > 0:
            set_scale("log")
            _plain_ticks(axis, scales.lowest[k], scales.highest[k])
        axis.set_label_text(label(names[k]))
    ax.grid(visible=False)
    assert ax.figure is not None
    ax.figure.colorbar(filled, ax=ax, label=label(optimum.quantity), format="%.5g")
    ax.legend(loc="upper center", bbox_to_anchor=(0.5, -0.16), ncols=3, frameon=False)


def _plain_ticks(axis: Any, low: float, high: float) -> None:
    """A few round numbers on a logarithmic axis, written out."""
    from matplotlib.ticker import FixedLocator, FuncFormatter, NullLocator

    decades = 10.0 ** np.arange(np.floor(np.log10(low)), np.ceil(np.log10(high)) + 1)
    steps = (1, 2, 5) if high / low > 8 else (1, 1.5, 2, 3, 4, 5, 7)
    ticks = [t for d in decades for t in np.array(steps) * d if low * 0.999 <= t <= high * 1.001]
    axis.set_major_locator(FixedLocator(ticks))
    axis.set_major_formatter(FuncFormatter(lambda v, _: f"{v:g}"))
    axis.set_minor_locator(NullLocator())


def plot_tolerance(tolerance: Tolerance, picture: str | Path | None = None) -> Figure:
    """How the quantity scatters, and which input makes how much of its variance.

    Parameters
    ----------
    tolerance : Tolerance
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.

    Returns
    -------
    matplotlib.figure.Figure
    """
    ratios = (1.0, 0.3 + 0.16 * len(tolerance.shares))
    figure, axes = new_figure(2, (7.2, 3.0 * sum(ratios) + 0.6), ratios=ratios, shared=False)
    _draw_scatter(axes[0], tolerance)
    _draw_shares(axes[1], tolerance)
    return finish(figure, picture)


def plot_designs(tolerance: Tolerance, picture: str | Path | None = None) -> Figure:
    """Average, nominal value and percentiles against a design variable, with the best on average and at nominal inputs.

    Parameters
    ----------
    tolerance : Tolerance
        With one design variable.
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        No design variable, or several.
    """
    need(
        "plot_designs", tolerance.by_design is not None, "a tolerance over no or several designs", "one design variable"
    )
    figure, axes = new_figure(1, (7.2, 3.9))
    _draw_designs(axes[0], tolerance)
    return finish(figure, picture)


def _draw_scatter(ax: Axes, tolerance: Tolerance) -> None:
    values = tolerance.sample(2**13)
    ax.hist(values, bins=BINS, density=True, color=OKABE_ITO[4], alpha=0.6, label="samples of the surrogate")
    rows = tolerance.percentiles
    shown = rows[rows["percentile"].isin((5, 50, 95))]
    for p, v in zip(shown["percentile"], shown[tolerance.quantity], strict=True):
        ax.axvline(v, color=DARK, linewidth=1.0, linestyle="-" if p == 50 else "--")
        ax.annotate(f"{p:g} %", (v, 0.98), xycoords=("data", "axes fraction"), xytext=(3, 0),
                    textcoords="offset points", va="top", fontsize=9)  # fmt: skip
    ax.axvline(tolerance.nominal, color=OKABE_ITO[5], linewidth=1.6, label="nominal inputs")
    ax.set_xlabel(label(tolerance.quantity))
    ax.set_yticks([])
    ax.set_ylabel("frequency")
    legend_beside(ax)


def _draw_shares(ax: Axes, tolerance: Tolerance) -> None:
    rows = tolerance.shares.iloc[::-1]
    at = np.arange(len(rows))
    ax.barh(at, rows["total_percent"], color=OKABE_ITO[4], height=0.7, label="with other inputs")
    ax.barh(at, rows["alone_percent"], color=OKABE_ITO[0], height=0.7, label="alone")
    ax.set_yticks(at, [fill(label(n), 20) for n in rows["input"]])
    ax.set_xlabel("share of the variance (%)")
    ax.set_xlim(0, None)
    ax.grid(axis="y", visible=False)
    ax.legend(loc="lower right", frameon=False)


def _draw_designs(ax: Axes, tolerance: Tolerance) -> None:
    table, q = tolerance.by_design, tolerance.quantity
    assert table is not None
    assert tolerance.best_nominal is not None
    assert tolerance.best_on_average is not None
    name = next(iter(tolerance.design))
    ax.fill_between(table[name], table[f"percentile_5_{q}"], table[f"percentile_95_{q}"], color=OKABE_ITO[4],
                    alpha=0.35, linewidth=0, label="5 % to 95 %")  # fmt: skip
    ax.plot(table[name], table[f"nominal_{q}"], color=OKABE_ITO[5], linestyle="--", label="nominal inputs")
    ax.plot(table[name], table[f"mean_{q}"], color=OKABE_ITO[0], label="average")
    for best, color, text in (
        (tolerance.best_nominal, OKABE_ITO[5], "best, nominal"),
        (tolerance.best_on_average, OKABE_ITO[0], "best, average"),
    ):  # fmt: skip
        unit = split_name(name)[1]
        place = f"{with_bar(best.location[name], best.location_bar[name], 4)} {unit}".rstrip()
        ax.plot(best.location[name], best.value, "D", color=color, markersize=7, label=f"{text}:\n{place}")
    ax.set_xlabel(label(name))
    ax.set_ylabel(label(q))
    legend_beside(ax)
