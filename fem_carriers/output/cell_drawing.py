"""A drawing of a unit cell: cross section of a two-dimensional one, plans of both faces of a three-dimensional one."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from .canvas import finish
from .style import DARK, OKABE_ITO

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from ..cell.plan import Region
    from ..cell.surface import Surface
    from ..cell.unit_cell import UnitCell

BASE, METAL, NONE = "#e8e6df", "#5f5f5f", "#f6f5f1"
LAYER = {"n": OKABE_ITO[0], "p": OKABE_ITO[1]}
WIDTH_IN, LEAST_SHARE = 7.2, 0.09
"""Width of the figure; a section thinner than this share of its width is stretched in height, and says so."""
LINE_IN = 0.19


@dataclass(frozen=True)
class Part:
    """A region of a face with its number, outline of the whole period (µm), and description."""

    number: int
    side: str
    region: Region
    shape: Any
    text: str


def draw_cell(cell: UnitCell, picture: str | Path | None = None) -> Figure:
    """Draw one period of a cell to scale, with numbered surfaces and what they are.

    Parameters
    ----------
    cell : UnitCell
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.

    Returns
    -------
    matplotlib.figure.Figure
    """
    parts = cell_parts(cell)
    lines = [base_text(cell), *(f"{p.number}  {p.text}" for p in parts), *side_texts(cell)]
    figure, axes = _canvas(cell, len(lines))
    if cell.dimension == 2:
        _draw_section(axes[0], cell, parts)
    else:
        for ax, side in zip(axes, ("front", "rear"), strict=True):
            _draw_plan(ax, cell, [p for p in parts if p.side == side], side)
    y = LINE_IN * len(lines) / figure.get_figheight()
    figure.text(0.02, y, "\n".join(lines), va="top", fontsize=9, linespacing=1.35)
    return finish(figure, picture)


def cell_parts(cell: UnitCell) -> list[Part]:
    """Surfaces of both faces, numbered, in words.

    Parameters
    ----------
    cell : UnitCell

    Returns
    -------
    list of Part
    """
    parts: list[Part] = []
    for side in ("front", "rear"):
        for region in cell.layout(side).regions:
            text = f"{region.name}: {_size(cell, region.name)}{surface_text(region.surface)}"
            parts.append(Part(len(parts) + 1, side, region, _whole(cell, region.shape), text))
    return parts


def base_text(cell: UnitCell) -> str:
    """The base in words."""
    base = cell.base
    stated = [("doping", base.doping_per_cm3, "cm⁻³"), ("", base.resistivity_ohm_cm, "Ω cm")]
    words = [f"{name} {value:g} {unit}".strip() for name, value, unit in stated if isinstance(value, int | float)]
    lifetime = base.lifetime_us
    words += [f"lifetime {lifetime:g} µs"] if isinstance(lifetime, int | float) else []
    pitch = f"pitch {cell.pitch_um:.4g} µm" + (f" × {cell.pitch_y_um:.4g} µm" if cell.pitch_y_um else "")
    return f"{base.doping_type}-type base, {cell.thickness_um:g} µm, {', '.join(words)}; {pitch}"


def side_texts(cell: UnitCell) -> list[str]:
    """Real edges and inner surfaces in words."""
    texts = [f"side {name}: {surface_text(surface)}" for name, surface in cell.sides.items()]
    return texts + [f"inner surface {name}" for name in cell.inner]


def surface_text(surface: Surface) -> str:
    """A surface in words."""
    words = []
    if surface.layer is not None:
        words.append(f"{surface.layer.doping_type}-layer {surface.layer.sheet_resistance_ohm_per_sq:g} Ω/sq")
    for value, name, unit in ((surface.J0_fA_per_cm2, "J0", "fA/cm²"), (surface.srv_cm_per_s, "S", "cm/s")):
        if value is not None:
            words.append(f"{name} {value:g} {unit}" if isinstance(value, int | float) else f"{name} varies")
    if surface.contact is not None:
        rho = surface.contact.contact_resistivity_mohm_cm2
        words.append(f"contact {surface.contact.terminal!r}" + (f" {rho:g} mΩ cm²" if rho else ", ideal"))
    return ", ".join(words) or "no recombination"


def _size(cell: UnitCell, name: str) -> str:
    """Size of a patch in words."""
    side, _, patch_name = name.partition(".")
    patch = next((p for p in getattr(cell, side).patches if p.name == patch_name), None)
    for field, word in (("diameter_um", "diameter"), ("width_um", "width")):
        if patch is not None and hasattr(patch, field):
            length = getattr(patch, "length_um", None)
            return f"{word} {getattr(patch, field):.4g} µm" + (f" × {length:g} µm, " if length else ", ")
    return ""


def _whole(cell: UnitCell, shape: Any) -> Any:
    """An outline and its mirror images about x = 0 and y = 0, where these are mirror planes."""
    from shapely import union_all
    from shapely.affinity import scale

    for plane, factors in (("x_min", (-1, 1)), ("y_min", (1, -1))):
        if plane in cell.frame.mirrors:
            shape = union_all([shape, scale(shape, *factors, origin=(0, 0))])
    return shape


def _canvas(cell: UnitCell, lines: int) -> tuple[Figure, list[Axes]]:
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    low, _, high, _ = _whole(cell, cell.frame.box).bounds
    if cell.dimension == 2:
        height = WIDTH_IN * 0.9 * max(cell.thickness_um / (high - low), LEAST_SHARE) * 1.9 + 0.5
        number = 1
    else:
        _, bottom, _, top = _whole(cell, cell.frame.box).bounds
        height, number = min(WIDTH_IN * 0.41 * (top - bottom) / (high - low), 6.0) + 0.85, 2
    text = LINE_IN * (lines + 1)
    figure = Figure(figsize=(WIDTH_IN, height + text))
    FigureCanvasAgg(figure)
    bottom_share = text / (height + text)
    axes = [
        figure.add_axes((0.06 + i * 0.94 / number, bottom_share, 0.94 / number - 0.09, 0.93 - bottom_share))
        for i in range(number)
    ]
    for ax in axes:
        ax.set_axis_off()
    return figure, axes


def _draw_section(ax: Axes, cell: UnitCell, parts: list[Part]) -> None:
    """Base, layers as bands along its faces, metal outside, all over one period."""
    from matplotlib.patches import Rectangle

    low, _, high, _ = _whole(cell, cell.frame.box).bounds
    width, thick = high - low, cell.thickness_um
    stretch = max(1.0, LEAST_SHARE * width / thick)
    tall = thick * stretch
    band = 0.07 * tall
    ax.add_patch(Rectangle((low, 0), width, tall, facecolor=BASE, edgecolor=DARK, linewidth=0.8))
    for part in parts:
        at, outward = (tall, 1) if part.side == "front" else (0.0, -1)
        spans = _spans(part.shape)
        for left, right in spans:
            _surface(ax, part.region.surface, (left, right), at, outward, band)
        left, right = max(spans, key=lambda s: s[1] - s[0])
        _number(ax, part.number, (left + right) / 2, at + outward * band * 3.2)
    note = "to scale; layers and metal: heights not to scale"
    if stretch > 1.01:
        note = f"height stretched {stretch:.2g} times; layers and metal: heights not to scale"
    _dimension(ax, (low, high), -6.6 * band, f"{width:.4g} µm")
    ax.text(high, tall + 5.2 * band, note, ha="right", va="bottom", fontsize=8, color="#555555")
    ax.text(low + 0.01 * width, tall / 2, f"{cell.base.doping_type}-type base", va="center", fontsize=9.5)
    ax.text(high + 0.008 * width, tall / 2, f"{thick:.4g} µm", rotation=90, ha="left", va="center", fontsize=9)
    ax.set_xlim(low - 0.005 * width, high + 0.03 * width)
    ax.set_ylim(-8.5 * band, tall + 7 * band)
    ax.set_aspect("equal", adjustable="box", anchor="S")


def _spans(shape: Any) -> list[tuple[float, float]]:
    """Pieces of an outline along x."""
    pieces = getattr(shape, "geoms", [shape])
    return [(p.bounds[0], p.bounds[2]) for p in pieces]


def _surface(ax: Axes, surface: Surface, span: tuple[float, float], at: float, outward: int, band: float) -> None:
    from matplotlib.patches import Rectangle

    left, width = span[0], span[1] - span[0]
    if surface.layer is not None:
        bottom = at - band if outward > 0 else at
        ax.add_patch(Rectangle((left, bottom), width, band, facecolor=LAYER[surface.layer.doping_type], linewidth=0))
    if surface.contact is not None:
        bottom = at if outward > 0 else at - 1.6 * band
        ax.add_patch(Rectangle((left, bottom), width, 1.6 * band, facecolor=METAL, edgecolor=DARK, linewidth=0.5))


def _draw_plan(ax: Axes, cell: UnitCell, parts: list[Part], side: str) -> None:
    """A face seen from the front, over one period."""
    from matplotlib.patches import PathPatch
    from matplotlib.path import Path as Outline

    for part in parts:
        surface = part.region.surface
        metal = surface.contact is not None and part.region.name != side  # a contact all over the face does not shade
        color = METAL if metal else LAYER[surface.layer.doping_type] if surface.layer else NONE
        for piece in getattr(part.shape, "geoms", [part.shape]):
            rings = [Outline(list(r.coords), closed=True) for r in (piece.exterior, *piece.interiors)]
            alpha = 0.45 if surface.layer and not metal else 1.0
            ax.add_patch(PathPatch(Outline.make_compound_path(*rings), facecolor=color, alpha=alpha, edgecolor=DARK,
                                   linewidth=0.6))  # fmt: skip
        spot = max(getattr(part.shape, "geoms", [part.shape]), key=lambda p: p.area).representative_point()
        _number(ax, part.number, spot.x, spot.y)
    low, bottom, high, top = _whole(cell, cell.frame.box).bounds
    size = high - low
    ax.set_title(f"{side}, seen from above, to scale", fontsize=9.5, loc="left")
    _dimension(ax, (low, high), bottom - 0.06 * size, f"{size:.4g} µm")
    ax.set_xlim(low - 0.01 * size, high + 0.01 * size)
    ax.set_ylim(bottom - 0.14 * size, top + 0.01 * size)
    ax.set_aspect("equal", adjustable="box", anchor="N")


def _number(ax: Axes, number: int, x: float, y: float) -> None:
    style = {"boxstyle": "circle,pad=0.22", "facecolor": "white", "edgecolor": DARK, "linewidth": 0.8}
    ax.text(x, y, str(number), ha="center", va="center", fontsize=8.5, bbox=style)


def _dimension(ax: Axes, span: tuple[float, float], at: float, text: str) -> None:
    arrow = {"arrowstyle": "<->", "color": DARK, "linewidth": 0.8, "shrinkA": 0, "shrinkB": 0}
    ax.annotate("", (span[0], at), (span[1], at), arrowprops=arrow)
    box = {"facecolor": "white", "edgecolor": "none", "pad": 1.5}
    ax.text(sum(span) / 2, at, text, ha="center", va="center", fontsize=9, bbox=box)
