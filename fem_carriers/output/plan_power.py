"""Power of a cell with its grid: the loss budget as stacked bars, and power against metal."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from ..grid.losses import GridLosses
from ..studies.grid_choice import LayoutChoice
from ..units import split_name
from .canvas import finish, new_figure
from .labels import words
from .style import DARK, OKABE_ITO

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from numpy.typing import NDArray

COLORS = {
    "shading": OKABE_ITO[7], "sheet": OKABE_ITO[1], "contact": OKABE_ITO[5], "finger": OKABE_ITO[0],
    "busbar": OKABE_ITO[4], "wire": OKABE_ITO[4], "joint": "#004b75", "terminal": "#004b75",
    "recombination": OKABE_ITO[2], "transport": OKABE_ITO[3], "away": OKABE_ITO[6],
}  # fmt: skip
"""Colours by a word of the loss's name."""
SMALL = 2e-3
"""Losses below this share of all are left out of the picture."""
CROWDED = 0.052
"""Least distance of labels, as a share of the axis."""
MARKED = 5
"""Layouts named along a trade curve."""


def plot_grid_losses(
    losses: GridLosses | Mapping[str, GridLosses], picture: str | Path | None = None
) -> Figure:  # fmt: skip
    """Loss budget of one cell, or of several side by side, as stacked bars in mW and % absolute.

    Hatched parts are losses that the unit cell's curve contains already.

    Parameters
    ----------
    losses : GridLosses, or mapping of names to GridLosses
        Cells of one area and one light.
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        Something else than budgets; budgets without losses.
    """
    budgets = dict(losses) if isinstance(losses, Mapping) else {"": losses}
    problems = Complaints("plot_grid_losses")
    for name, one in budgets.items():
        problems.unless(isinstance(one, GridLosses), f"{name or 'losses'} = {one!r}", "GridLosses", "curve.losses")
    problems.unless(len(budgets) > 0, "no budget", "one or more")
    problems.raise_if_any()
    rows = _rows(budgets)
    problems.unless(bool(rows), "budgets without losses", "a lit cell under bias")
    problems.raise_if_any()
    across = 4.8 + 1.25 * len(budgets)
    figure, axes = new_figure(1, (across, 5.4))
    figure.set_layout_engine("none")  # texts beside the axes are placed here
    axes[0].set_position((1.45 / across, 0.13, 1.25 * len(budgets) / across, 0.8))
    _draw_stack(axes[0], rows, budgets)
    return finish(figure, picture)


def _rows(budgets: Mapping[str, GridLosses]) -> list[tuple[str, bool, NDArray[np.float64]]]:
    """Name, whether inside the unit cell, and the loss of every budget in mW; the largest last."""
    names: dict[tuple[str, bool], None] = {}
    for one in budgets.values():
        names |= {(name, False): None for (kind, name), _ in one.rows.items() if kind != "output"}
        names |= {(name, True): None for name in one.inside_unit_cell}

    def value(one: GridLosses, name: str, inside: bool) -> float:
        if inside:
            return one.inside_unit_cell.get(name, 0.0)
        return sum(v for (kind, n), v in one.rows.items() if n == name and kind != "output")

    rows = [(name, inside, np.array([value(b, name, inside) for b in budgets.values()])) for name, inside in names]
    total = max((float(sum(values[k] for *_, values in rows)) for k in range(len(budgets))), default=0.0)
    kept = [row for row in rows if row[2].max() > SMALL * total]
    return sorted(kept, key=lambda row: (row[1], -row[2].mean()))


def _draw_stack(ax: Axes, rows: list[Any], budgets: Mapping[str, GridLosses]) -> None:
    names, first = list(budgets), next(iter(budgets.values()))
    bottoms, x = np.zeros(len(names)), np.arange(len(names))
    middles = []
    for name, inside, values in rows:
        ax.bar(x, values, 0.6, bottom=bottoms, color=_color(name), edgecolor="white", linewidth=0.8,
               hatch="///" if inside else None)  # fmt: skip
        middles.append(float(bottoms[-1] + 0.5 * values[-1]))
        bottoms = bottoms + values
    top = 1.04 * float(bottoms.max())
    ax.set_ylim(0, top)
    ax.set_xlim(-0.5, len(names) - 0.5)
    ax.set_xticks(x, [f"{name}\n{one.output_mW:.5g} mW\ndelivered".strip() for name, one in budgets.items()])
    ax.tick_params(axis="x", length=0)
    ax.grid(axis="x", visible=False)
    ax.set_ylabel("power lost (mW)")
    to_percent = 100 / first.incident_mW_per_cm2 / first.area_cm2 if first.incident_mW_per_cm2 > 0 else 0.0
    single = len(names) == 1
    texts = [_loss_text(name, inside, values, to_percent if single else 0.0) for name, inside, values in rows]
    _label_beside(ax, middles, texts, top)
    if not single:
        _numbers_inside(ax, rows, top)
    if to_percent > 0:
        both = (lambda v: np.asarray(v) * to_percent, lambda v: np.asarray(v) / to_percent)
        second = ax.secondary_yaxis("left", functions=both)
        second.spines["left"].set_position(("outward", 52))
        second.set_ylabel("power lost (% absolute)")


def _loss_text(name: str, inside: bool, values: NDArray[np.float64], to_percent: float) -> str:
    text = name.split(": ", 1)[1] + f" ({name.split(': ', 1)[0]})" if ": " in name else name
    text += ", in the unit cell" if inside else ""
    if to_percent > 0:
        text += f"\n{values[0]:.3g} mW, {values[0] * to_percent:.2g} % absolute"
    return text


def _label_beside(ax: Axes, places: list[float], texts: list[str], top: float) -> None:
    """Texts to the right of the last bar, moved apart, with lines that lead to their parts."""
    lines = max(text.count("\n") + 1 for text in texts)
    heights = _apart(np.array(places), CROWDED * 0.8 * top * lines, top)
    last = ax.get_xlim()[1] - 0.2
    leader = {"arrowstyle": "-", "color": DARK, "linewidth": 0.6, "shrinkB": 0, "relpos": (0, 0.5)}
    for place, height, text in zip(places, heights, texts, strict=True):
        ax.annotate(
            text, (last, place), xytext=(last + 0.35, height), textcoords="data", va="center", ha="left", fontsize=8.5,
            annotation_clip=False, arrowprops=leader,
        )  # fmt: skip


def _apart(places: NDArray[np.float64], least: float, top: float) -> NDArray[np.float64]:
    """Rising places moved to at least a distance from each other, within 0 and the top if there is room."""
    found = places.copy()
    for k in range(1, found.size):
        found[k] = max(found[k], found[k - 1] + least)
    found[-1] = min(found[-1], max(top, least * (found.size - 0.5)))
    for k in range(found.size - 2, -1, -1):
        found[k] = min(found[k], found[k + 1] - least)
    return found


def _numbers_inside(ax: Axes, rows: list[Any], top: float) -> None:
    """mW in every part that is high enough."""
    bottoms = np.zeros(len(rows[0][2]))
    for _, _, values in rows:
        for k, value in enumerate(values):
            if value > 0.035 * top:
                box = {"facecolor": "white", "edgecolor": "none", "alpha": 0.75, "pad": 1.0}
                ax.text(k, bottoms[k] + 0.5 * value, f"{value:.3g}", ha="center", va="center", fontsize=8.5, bbox=box)
        bottoms = bottoms + values


def _color(name: str) -> str:
    return next((color for word, color in COLORS.items() if word in name), OKABE_ITO[3])


def plot_trade(choice: LayoutChoice, picture: str | Path | None = None) -> Figure:
    """The most power against metal mass with some of the layouts that give it, and what one more milligram gives.

    Parameters
    ----------
    choice : LayoutChoice
        Of `best_layout`.
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        Something else than a choice; one whose layouts all have the same mass.
    """
    problems = Complaints("plot_trade")
    if problems.unless(isinstance(choice, LayoutChoice), f"choice = {choice!r}", "the result of best_layout"):
        problems.unless(len(choice.trade) > 1, "layouts of one mass", "layouts that differ in metal")
    problems.raise_if_any()
    table = choice.trade
    mass = choice.traded
    figure, axes = new_figure(2, (7.6, 6.4), ratios=(1.6, 1.0))
    _draw_trade(axes[0], choice, mass)
    axes[1].plot(table[mass], table["gain_mW_per_mg"], color=OKABE_ITO[2])
    axes[1].set_ylim(bottom=0)
    axes[1].set_ylabel("one more mg gives (mW)")
    axes[1].set_xlabel(f"{words(mass)} (mg)")
    figure.align_ylabels(axes)
    return finish(figure, picture)


def _draw_trade(ax: Axes, choice: LayoutChoice, mass: str) -> None:
    table, best = choice.trade, choice.best
    bars = table["error_bar_power_mW"].to_numpy()
    power = table["power_mW"].to_numpy()
    ax.fill_between(table[mass], power - bars, power + bars, color=OKABE_ITO[0], alpha=0.25, linewidth=0)
    ax.plot(table[mass], power, color=OKABE_ITO[0])
    level = best["power_mW"] * (1 - choice.within_percent / 100)
    text = f"within {choice.within_percent:g} % of the best"
    ax.axhspan(level, best["power_mW"], color=OKABE_ITO[4], alpha=0.2, linewidth=0, label=text)
    ax.plot(best[mass], best["power_mW"], "D", color=OKABE_ITO[5], markersize=8, label=f"best: {choice.in_words(best)}")
    limit = choice.surface.limits.get(mass)
    if limit is not None:
        ax.axvline(limit, color=DARK, linewidth=1.0, linestyle="--", label=f"limit, {limit:g} mg")
    ends = float(table[mass].iloc[0]), float(table[mass].iloc[-1])
    wanted = np.linspace(*ends, MARKED + 1)[:-1]
    for k in sorted({int(np.argmin(np.abs(table[mass] - m))) for m in wanted}):
        row = table.iloc[k]
        ax.plot(row[mass], row["power_mW"], "o", color=OKABE_ITO[0], markersize=4.5)
        ax.annotate(_short(choice, row), (row[mass], row["power_mW"]), xytext=(8, -4), textcoords="offset points",
                    va="top", fontsize=8.5)  # fmt: skip
    ax.margins(x=0.03, y=0.2)
    ax.set_ylabel("power (mW)")
    ax.legend(loc="lower right", fontsize=9, frameon=True, framealpha=1.0, edgecolor="none")


def _short(choice: LayoutChoice, row: Any) -> str:
    """A layout on a few short lines."""
    return "\n".join(
        f"{v.typed(row[v.name]):g} {words(v.name)}" if v.whole else f"{row[v.name]:.3g} {split_name(v.name)[1]}"
        for v in choice.surface.variables
    )
