"""Plots of the response to light: quantum efficiency with its losses, light-beam scans."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from .canvas import check_columns, finish, legend_beside, need, new_figure
from .labels import label, words
from .style import DARK, OKABE_ITO

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.figure import Figure

EXTERNAL, INTERNAL = "external_quantum_efficiency_percent", "internal_quantum_efficiency_percent"
OPTICAL = {"shaded_percent": "#4d4d4d", "reflected_percent": "#858585", "escaped_percent": "#bdbdbd"}
"""Light not used is grey; `lost in layers` and carriers have colours."""
LEAST_PERCENT = 0.05
"""Losses that stay below this are left out of the plot."""
HATCHES = ("", "//", "..", "xx")


def plot_quantum_efficiency(table: pd.DataFrame, picture: str | Path | None = None) -> Figure:
    """External and internal quantum efficiency against wavelength, with the missing carriers stacked on the external.

    Parameters
    ----------
    table : pandas.DataFrame
        From `quantum_efficiency`, with at least two wavelengths (or absorption coefficients).
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        A missing column, too few rows, or a picture that cannot be written.
    """
    x = "wavelength_nm" if "wavelength_nm" in table else "absorption_per_cm"
    check_columns("plot_quantum_efficiency", table, [x, EXTERNAL, INTERNAL])
    need("plot_quantum_efficiency", len(table) > 1, "a single row", "two or more wavelengths")
    table = table.sort_values(x)
    at = table[x].to_numpy(dtype=float)
    figure, axes = new_figure(1, (8.4, 4.8))
    ax = axes[0]
    floor = table[EXTERNAL].to_numpy(dtype=float)
    for name, color, hatch in _losses(table):
        top = floor + table[name].to_numpy(dtype=float)
        ax.fill_between(at, floor, top, facecolor=color, hatch=hatch, edgecolor="white", linewidth=0.4, alpha=0.9,
                        label=words(name.removeprefix("lost_").replace("_percent", "")))  # fmt: skip
        floor = top
    ax.plot(at, table[EXTERNAL], color=DARK, linewidth=2.2, label="external")
    ax.plot(at, table[INTERNAL], color=DARK, linewidth=1.6, linestyle="--", label="internal")
    ax.set_xlim(at[0], at[-1])
    ax.set_ylim(0, max(102.0, 1.02 * float(np.nanmax(table[INTERNAL]))))
    ax.set_xscale("linear" if x == "wavelength_nm" else "log")
    ax.set_xlabel(label(x))
    ax.set_ylabel("quantum efficiency and losses (%)")
    legend_beside(ax)
    return finish(figure, picture)


def _losses(table: pd.DataFrame) -> list[tuple[str, str, str]]:
    """(Column, colour, hatching) of the losses that can be seen: carriers first, then light."""
    carriers = [str(c) for c in table if str(c).startswith("lost_")]
    carriers += ["parasitic_percent"] if "parasitic_percent" in table else []
    shown = [c for c in carriers if float(table[c].max()) > LEAST_PERCENT]
    styled = [(c, OKABE_ITO[i % 7], HATCHES[i // 7 % len(HATCHES)]) for i, c in enumerate(shown)]
    return styled + [(c, g, "") for c, g in OPTICAL.items() if c in table and float(table[c].max()) > LEAST_PERCENT]


def plot_scan_line(
    tables: pd.DataFrame | dict[str, pd.DataFrame], picture: str | Path | None = None, *, value: str = EXTERNAL
) -> Figure:
    """A light-beam scan along a line; several scans by name for comparison.

    Parameters
    ----------
    tables : pandas.DataFrame, or mapping of name to it
        From `scan_line`.
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.
    value : str
        Column to show.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        A missing column, or a picture that cannot be written.
    """
    named = tables if isinstance(tables, dict) else {"": tables}
    need("plot_scan_line", bool(named), "no table", "one or more scans")
    for table in named.values():
        check_columns("plot_scan_line", table, ["x_um", value])
    x = "x_um" if all(np.ptp(t["x_um"]) > 0 for t in named.values()) else "y_um"
    figure, axes = new_figure(1, (7.2, 3.9))
    for i, (name, table) in enumerate(named.items()):
        axes[0].plot(table[x], table[value], color=OKABE_ITO[i % 7], linestyle=("-", "--", ":")[i // 7 % 3], label=name)
    axes[0].set_xlabel(label(x))
    axes[0].set_ylabel(label(value))
    axes[0].margins(x=0)
    if len(named) > 1:
        legend_beside(axes[0])
    return finish(figure, picture)


def plot_scan_map(table: pd.DataFrame, picture: str | Path | None = None, *, value: str = EXTERNAL) -> Figure:
    """A light-beam scan over a map, in true proportions.

    Parameters
    ----------
    table : pandas.DataFrame
        From `scan_map`, with two or more positions on either axis.
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.
    value : str
        Column to show.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        A missing column, a single row of positions, or a picture that cannot be written.
    """
    check_columns("plot_scan_map", table, ["x_um", "y_um", value])
    grid: Any = table.pivot_table(index="y_um", columns="x_um", values=value, dropna=False)
    need("plot_scan_map", min(grid.shape) > 1, f"{grid.shape[1]} × {grid.shape[0]} positions", "two or more each way")
    x, y = (np.asarray(a, dtype=float) for a in (grid.columns, grid.index))
    tall = float(np.clip(6.0 * np.ptp(y) / np.ptp(x), 1.5, 8.0))
    figure, axes = new_figure(1, (7.6, tall + 1.2))
    image = axes[0].pcolormesh(x, y, grid.to_numpy(dtype=float), cmap="cividis", shading="nearest", rasterized=True)
    axes[0].set_aspect("equal")
    axes[0].grid(visible=False)
    axes[0].set_xlabel(label("x_um"))
    axes[0].set_ylabel(label("y_um"))
    figure.colorbar(image, ax=axes[0], label=label(value))
    return finish(figure, picture)
