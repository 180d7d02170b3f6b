"""Plans of a cell with its grid: the whole cell, and one repeat unit enlarged."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from ..units import split_name
from .canvas import finish, new_figure
from .plan_data import (
    FIELDS,
    PLURALS,
    PlanMap,
    check_solution,
    gaps_mm,
    metal_kinds,
    metal_polygons_mm,
    outline_mm,
    plan_map,
    rows_mm,
    terminals_mm,
)  # fmt: skip
from .style import DARK, OKABE_ITO, linear_range

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from numpy.typing import NDArray

    from ..grid.grid_solution import GridSolution

THINNEST_PT = {"finger": 0.3, "perimeter": 0.6, "busbar": 0.6, "wire": 0.7}
"""Least drawn width of metal in points, so that it shows on a whole wafer."""
METAL = {"finger": "#d8d8d8", "perimeter": "#d8d8d8", "busbar": "#d8d8d8", "wire": "#c8763c"}
OTHER_METAL = "#d8d8d8"
POINTS_PER_INCH = 72.0


def plot_plan(
    solution: GridSolution,
    picture: str | Path | None = None,
    *,
    field: str = "above_terminal_mV",
    grid: str | None = None,
) -> Figure:
    """The whole cell: a map of the local voltage or current, and the metal to scale.

    Metal that would be too thin to see is drawn with a least line width, which the legend states. Collection points,
    wire ends at the terminal, gaps in fingers and the worst place are marked.

    Parameters
    ----------
    solution : GridSolution
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.
    field : {"above_terminal_mV", "current_mA_per_cm2"}
    grid : str, optional
        Whose metal is drawn: "front", "rear", …; default is the first.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        Something else than a solved cell, an unknown field or grid.
    """
    check_solution("plot_plan", solution, field)
    grid = _grid(solution, grid)
    corners = outline_mm(solution)
    width, height = np.ptp(corners, axis=0)
    figure, ax = _sheet(width, height)
    mapped = _draw_map(ax, plan_map(solution, field), corners)
    ax.set_xlim(corners[:, 0].min() - 0.02 * width, corners[:, 0].max() + 0.02 * width)
    ax.set_ylim(corners[:, 1].min() - 0.02 * height, corners[:, 1].max() + 0.02 * height)
    figure.colorbar(mapped, cax=ax.inset_axes((1.02, 0.0, 0.022, 1.0)), label=FIELDS[field])
    ax.set_xlabel("x (mm)")
    ax.set_ylabel("y (mm)")
    ax.set_title(_title(solution), fontsize=10.5, loc="left")
    figure.draw_without_rendering()
    scale = POINTS_PER_INCH * ax.get_window_extent().width / figure.dpi / float(np.ptp(ax.get_xlim()))
    handles = [_draw_metal(ax, solution, grid, kind, scale) for kind in metal_kinds(solution, grid)]
    handles += _draw_marks(ax, solution, grid)
    _legend_below(figure, handles)
    return finish(figure, picture)


def plot_repeat_unit(
    solution: GridSolution,
    picture: str | Path | None = None,
    *,
    at_mm: tuple[float, float] | None = None,
    field: str = "above_terminal_mV",
    grid: str | None = None,
) -> Figure:
    """One finger pitch by one busbar or wire spacing, enlarged, everything to scale; the finger lies horizontally.

    Parameters
    ----------
    solution : GridSolution
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.
    at_mm : (x, y), optional
        The unit around the finger and the busbar or wire nearest to it; default is the middle of the cell.
    field, grid
        As for `plot_plan`.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        As `plot_plan`; a place outside the cell, or a grid without fingers.
    """
    check_solution("plot_repeat_unit", solution, field)
    grid = _grid(solution, grid)
    x, y = _unit_mm(solution, grid, at_mm)
    long, short = float(np.ptp(y)), float(np.ptp(x))
    figure, axes = new_figure(1, (9.6, float(np.clip(1.35 + 8.0 * short / long, 2.2, 9.0))))
    figure.set_layout_engine("compressed")
    ax = axes[0]
    ax.grid(visible=False)
    ax.set_aspect("equal")
    mapped = _draw_map(ax, _cut(plan_map(solution, field), x, y), None, turned=True)
    ax.set_xlim(*y)
    ax.set_ylim(*x)
    handles = [_draw_metal(ax, solution, grid, kind, None, turned=True) for kind in metal_kinds(solution, grid)]
    figure.colorbar(mapped, cax=ax.inset_axes((1.012, 0.0, 0.014, 1.0)), label=split_name(field)[1])
    ax.set_xlabel("y, along the finger (mm)")
    ax.set_ylabel("x (mm)")
    _legend_below(figure, handles)
    ax.set_title(f"{FIELDS[field]}; the terminals are at {1e3 * solution.voltage_V:.1f} mV", fontsize=10.5, loc="left")
    return finish(figure, picture)


def _grid(solution: GridSolution, grid: str | None) -> str:
    known = list(dict.fromkeys(solution.metal["grid"]))
    problems = Complaints("plan")
    problems.unless(grid is None or grid in known, f"grid {grid!r}", f"one of {', '.join(known)}")
    problems.raise_if_any()
    return known[0] if grid is None else grid


def _sheet(width_mm: float, height_mm: float) -> tuple[Figure, Axes]:
    """A figure whose size follows the cell's."""
    across = 9.6 if width_mm >= height_mm else 7.2
    figure, axes = new_figure(1, (across, float(np.clip(1.5 + 0.82 * across * height_mm / width_mm, 3.2, 9.6))))
    figure.set_layout_engine("compressed")
    axes[0].set_aspect("equal")
    axes[0].grid(visible=False)
    return figure, axes[0]


def _draw_map(ax: Axes, shown: PlanMap, corners: NDArray[np.float64] | None, turned: bool = False) -> Any:
    """The field, clipped at the outline; the outline as a line."""
    from matplotlib.patches import Polygon
    from matplotlib.tri import Triangulation

    x, y = shown.points_mm.T[::-1] if turned else shown.points_mm.T
    low, high = linear_range(shown.values)
    mapped = ax.tripcolor(
        Triangulation(x, y, shown.triangles), shown.values, shading="gouraud", cmap="viridis", vmin=low, vmax=high,
        rasterized=True,
    )  # fmt: skip
    if corners is not None:
        edge = ax.add_patch(Polygon(corners, closed=True, fill=False, edgecolor=DARK, linewidth=0.9))
        mapped.set_clip_path(edge)
    return mapped


def _cut(shown: PlanMap, x: tuple[float, float], y: tuple[float, float]) -> PlanMap:
    """Triangles that reach into a rectangle, so that the colours span what is seen."""
    corners = shown.points_mm[shown.triangles]
    low, high = corners.min(axis=1), corners.max(axis=1)
    on = (high[:, 0] > x[0]) & (low[:, 0] < x[1]) & (high[:, 1] > y[0]) & (low[:, 1] < y[1])
    used, triangles = np.unique(shown.triangles[on], return_inverse=True)
    return PlanMap(shown.points_mm[used], triangles.reshape(-1, 3), shown.values[used])


def _draw_metal(
    ax: Axes, solution: GridSolution, grid: str, kind: str, pt_per_mm: float | None, turned: bool = False
) -> Any:
    """Metal of one kind; its entry in the legend."""
    from matplotlib.collections import PolyCollection
    from matplotlib.patches import Patch

    polygons = metal_polygons_mm(solution, grid, kind)
    rows = solution.metal[(solution.metal["grid"] == grid) & (solution.metal["kind"] == kind)]
    widths = rows[["width_start_um", "width_end_um"]].to_numpy()
    least, order = THINNEST_PT.get(kind, 0.4), 2.0 + 0.1 * (list(METAL).index(kind) if kind in METAL else 0)
    color = METAL.get(kind, OTHER_METAL)
    thin = pt_per_mm is not None and 1e-3 * float(widths.max()) * pt_per_mm < least
    drawn = polygons[:, :, ::-1] if turned else polygons
    if thin:
        _add_lines(ax, [np.stack([(p[0] + p[3]) / 2, (p[1] + p[2]) / 2]) for p in drawn], color, least, order)
    else:
        ax.add_collection(
            PolyCollection(list(drawn), facecolors=color, edgecolors="none", linewidths=0, snap=False, zorder=order)
        )
        if pt_per_mm is None:
            _add_lines(ax, [np.stack([p[i], p[j]]) for p in drawn for i, j in ((0, 1), (3, 2))], DARK, 0.5, order)
    text = f"{PLURALS.get(kind, kind)}, {_range_um(widths)} µm wide"
    if thin and pt_per_mm is not None:
        text += f" (drawn {float(f'{1e3 * least / pt_per_mm:.2g}'):g} µm wide)"
    return Patch(facecolor=color, edgecolor=DARK, linewidth=0.6, label=text)


def _add_lines(ax: Axes, ends: list[NDArray[np.float64]], color: str, width_pt: float, order: float) -> None:
    from matplotlib.collections import LineCollection

    ax.add_collection(
        LineCollection(ends, colors=color, linewidths=width_pt, capstyle="butt", snap=False, zorder=order)
    )


def _range_um(widths: NDArray[np.float64]) -> str:
    low, high = float(widths.min()), float(widths.max())
    return f"{high:g}" if high - low < 1e-6 * high else f"{low:.3g} to {high:.3g}"


def _draw_marks(ax: Axes, solution: GridSolution, grid: str) -> list[Any]:
    """Terminals, gaps, the worst place."""
    found = []
    places = terminals_mm(solution, grid)
    if len(places):
        found += ax.plot(*places.T, "s", color=OKABE_ITO[5], markersize=3.5, markeredgecolor=DARK,
                         markeredgewidth=0.4, label="terminal", clip_on=False, zorder=5)  # fmt: skip
    gaps = gaps_mm(solution, grid)
    if len(gaps):
        label = "gap in a finger" if len(gaps) == 1 else f"{len(gaps)} gaps in fingers"
        found += ax.plot(*gaps.T, "o", markerfacecolor="none", markeredgecolor="white", markersize=7,
                         markeredgewidth=1.2, label=label, zorder=5)  # fmt: skip
        found[-1].set_path_effects(_halo())
    worst = solution.worst_place
    text = f"worst place, {worst['above_terminal_mV']:.3g} mV above the terminals"
    found += ax.plot(worst["x_mm"], worst["y_mm"], "X", color="white", markeredgecolor=DARK, markersize=8,
                     markeredgewidth=0.8, label=text, zorder=5)  # fmt: skip
    return found


def _halo() -> list[Any]:
    from matplotlib.patheffects import Normal, Stroke

    return [Stroke(linewidth=2.2, foreground=DARK), Normal()]


def _legend_below(figure: Figure, handles: list[Any]) -> None:
    figure.legend(
        handles=handles, loc="outside lower left", ncols=min(3, len(handles)), frameon=False, fontsize=9,
        handlelength=1.4, columnspacing=1.4,
    )  # fmt: skip


def _title(solution: GridSolution) -> str:
    return (
        f"{solution.power_mW:.5g} mW ({solution.power_mW_per_cm2:.4g} mW/cm²) at {1e3 * solution.voltage_V:.1f} mV, "
        f"{solution.current_A:.4g} A"
    )


def _unit_mm(
    solution: GridSolution, grid: str, at_mm: tuple[float, float] | None
) -> tuple[tuple[float, float], tuple[float, float]]:
    """Extent in x and y of the unit around a place."""
    metal = solution.metal
    fingers = metal[(metal["grid"] == grid) & (metal["kind"] == "finger")]
    corners = outline_mm(solution)
    (x0, y0), (x1, y1) = corners.min(axis=0), corners.max(axis=0)
    x, y = (0.5 * (x0 + x1), 0.5 * (y0 + y1)) if at_mm is None else map(float, at_mm)
    problems = Complaints("plot_repeat_unit")
    problems.unless(len(fingers) > 0, "a grid without fingers", "a grid with fingers", "plot_plan")
    inside = x0 <= x <= x1 and y0 <= y <= y1
    problems.unless(inside, f"at_mm = ({x:g}, {y:g})", f"a place within {x1 - x0:g} × {y1 - y0:g} mm")
    problems.raise_if_any()
    centres = np.unique(np.round(fingers["x_start_mm"].to_numpy(), 6))
    return _around(centres, x, x0, x1), _around(rows_mm(solution, grid), y, y0, y1)


def _around(lines: NDArray[np.float64], at: float, low: float, high: float) -> tuple[float, float]:
    """From half-way to the line before the one nearest to a place to half-way to the next one, or to the ends."""
    if lines.size == 0:
        return low, high
    k = int(np.argmin(np.abs(lines - at)))
    start = 0.5 * (lines[k - 1] + lines[k]) if k > 0 else low
    end = 0.5 * (lines[k] + lines[k + 1]) if k + 1 < lines.size else high
    return float(start), float(end)
