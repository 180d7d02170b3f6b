"""Plots of power: the current-voltage curve and the loss budget."""

from __future__ import annotations

import math
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from ..analysis.uncertainty import with_bar
from ..errors import Complaints
from .canvas import finish, new_figure
from .style import DARK, OKABE_ITO

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from ..analysis.curve import CurrentVoltage
    from ..analysis.losses import Losses

KIND_COLORS = {
    "optical": OKABE_ITO[7],
    "bulk": OKABE_ITO[0],
    "surface": OKABE_ITO[2],
    "transport": OKABE_ITO[3],
    "sheet": OKABE_ITO[1],
    "contact": OKABE_ITO[5],
}
KIND_WORDS = {
    "optical": "light not used",
    "bulk": "recombination in the bulk",
    "surface": "recombination at surfaces",
    "transport": "transport in the base",
    "sheet": "transport in layers",
    "contact": "contact resistance",
}


def plot_curve(curve: CurrentVoltage, picture: str | Path | None = None) -> Figure:
    """Current density and power density against voltage, with the point of maximum power.

    Parameters
    ----------
    curve : CurrentVoltage
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.

    Returns
    -------
    matplotlib.figure.Figure
    """
    table = curve.table
    figure, axes = new_figure(2, (6.4, 6.0), ratios=(1.0, 1.0))
    for ax, name, color in zip(axes, ("current_mA_per_cm2", "power_mW_per_cm2"), OKABE_ITO, strict=False):
        ax.plot(table["voltage_V"], table[name], "-o", color=color, markersize=3.5)
        ax.axhline(0, color=DARK, linewidth=0.8)
    axes[0].set_ylabel("current (mA/cm²)")
    axes[1].set_ylabel("power (mW/cm²)")
    axes[1].set_xlabel("voltage (V)")
    if curve.maximum_power is not None:
        _mark_maximum(axes, curve)
    return finish(figure, picture)


def _mark_maximum(axes: list[Axes], curve: CurrentVoltage) -> None:
    best = curve.maximum_power
    assert best is not None
    for ax, value in zip(axes, (best.current_mA_per_cm2, best.power_mW_per_cm2), strict=True):
        ax.plot(best.voltage_V, value, "D", color=OKABE_ITO[5], markersize=8)
        ax.axvline(best.voltage_V, color=OKABE_ITO[5], linewidth=0.8, linestyle="--")
        ax.set_ylim(bottom=min(0.0, -0.06 * value), top=1.15 * max(value, 1e-12))
    bars: Mapping[str, float] = curve.uncertainty or {}

    def shown(name: str, value: float, factor: float = 1.0) -> str:
        return with_bar(factor * value, factor * bars.get(name, math.inf), 4)

    lines = [
        f"short circuit {shown('jsc_mA_per_cm2', curve.jsc_mA_per_cm2)} mA/cm²",
        f"open circuit {shown('voc_V', curve.voc_V, 1e3)} mV",
        f"fill factor {shown('fill_factor_percent', curve.fill_factor_percent)} %",
    ]
    axes[0].text(0.03, 0.1, "\n".join(lines), transform=axes[0].transAxes, va="bottom")
    power = shown("maximum_power_mW_per_cm2", best.power_mW_per_cm2)
    text = f"maximum power {power} mW/cm²\nat {1e3 * best.voltage_V:.1f} mV"
    if curve.incident_power_mW_per_cm2 > 0:
        text += f"\nefficiency {shown('efficiency_percent', curve.efficiency_percent)} %"
    axes[1].text(0.03, 0.95, text, transform=axes[1].transAxes, va="top")


def plot_losses(losses: Losses, picture: str | Path | None = None) -> Figure:
    """Loss bars in mW/cm², largest first, coloured by kind; what light not used would have delivered is included.

    Parameters
    ----------
    losses : Losses
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        Nothing is lost.
    """
    bars = [(kind, name, value) for (kind, name), value in losses.rows.items() if kind != "output"]
    bars += [("optical", name.replace("_", " "), value) for name, value in losses.optical.items()]
    top = max((v for *_, v in bars), default=0.0)
    problems = Complaints("plot_losses")
    problems.unless(top > 0, "a budget without losses", "a solution under light or bias")
    problems.raise_if_any()
    bars = sorted((b for b in bars if b[2] > 1e-4 * top), key=lambda b: b[2])
    figure, axes = new_figure(1, (7.2, 1.4 + 0.32 * len(bars)))
    ax = axes[0]
    values = np.array([b[2] for b in bars])
    ax.barh(np.arange(len(bars)), values, color=[KIND_COLORS[b[0]] for b in bars], height=0.72)
    ax.set_yticks(np.arange(len(bars)), [b[1] for b in bars])
    for i, value in enumerate(values):
        ax.annotate(f"{value:.3g}", (value, i), xytext=(4, 0), textcoords="offset points", va="center", fontsize=9)
    ax.set_xlim(0, 1.12 * top)
    ax.set_xlabel("loss (mW/cm²)")
    ax.grid(axis="y", visible=False)
    _legend_of_kinds(ax, [b[0] for b in bars])
    ax.set_title(f"{losses.output_mW_per_cm2:.2f} mW/cm² delivered to the terminals", fontsize=10.5, loc="left")
    return finish(figure, picture)


def _legend_of_kinds(ax: Axes, kinds: list[str]) -> None:
    from matplotlib.patches import Patch

    handles = [Patch(color=c, label=KIND_WORDS[k]) for k, c in KIND_COLORS.items() if k in kinds]
    ax.legend(handles=handles, loc="lower right", frameon=False, fontsize=9)
