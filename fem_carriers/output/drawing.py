"""Puts a scene on a pyvista plotter."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from .axes import axes, other_edges
from .images import ITSELF
from .labels import label
from .scene import FLUX, segments
from .style import DARK, font_file, linear_range, log_by_default, log_range

if TYPE_CHECKING:
    from .images import Image
    from .scene import Region, Scene

LINE_COLORS = ("#D55E00", "#56B4E9", "#CC79A7", "#E69F00", "#009E73", "#0072B2", "#999999")
"""Okabe–Ito for surfaces in a cross section; contacts come first and get the strongest."""
MOST_NAMES = 12
ENTRY_HEIGHT_PX, LETTER_PX = 34, 12
NOTE = "message"


class Drawing:
    """A scene as it is drawn now; change an attribute and draw again.

    Parameters
    ----------
    scene : Scene
    plotter : pyvista.Plotter
    field : str
    shown : list of Image
    log : bool or None
        None leaves it to the field.
    clip, arrows : bool
    """

    def __init__(
        self, scene: Scene, plotter: Any, field: str, shown: list[Image], *, log: bool | None, clip: bool, arrows: bool
    ) -> None:
        self.scene, self.plotter, self.field, self.log, self.with_arrows = scene, plotter, field, log, arrows
        self.clip, self.named, self.placed = clip and not self.flat, True, False
        self.font, self.rim = font_file(), None
        self.change_images(shown)

    @property
    def flat(self) -> bool:
        """True for a cross section."""
        return self.scene.problem.mesh.dimension == 2

    @property
    def is_log(self) -> bool:
        """Whether colours are logarithmic."""
        return (
            log_by_default(self.field, self.scene.values(self.field), self.scene.weights(self.field))
            if self.log is None
            else self.log
        )

    def change_images(self, shown: list[Image]) -> None:
        """Show other copies; the cut plane goes back to its place and the camera steps back."""
        self.shown, self.grid, self.placed = shown, self.scene.grid(shown), False
        self.plane: tuple[Any, Any] | None = ((0.0, 1.0, 0.0), tuple(self.grid.center)) if self.clip else None

    def draw(self, help_line: str = "") -> None:
        """Draw everything anew; actors of the same name are replaced."""
        for title in list(self.plotter.scalar_bars.keys()):
            self.plotter.remove_scalar_bar(title, render=False)
        self._body()
        self._arrows()
        self._surfaces()
        if not self.placed:
            self._axes()
            self._camera()
            self.placed = True
        if help_line:
            self._text(help_line, (0.012, 0.012), 9, "help")
        self.message("")

    def _body(self) -> None:
        name, log = self.field, self.is_log
        body = self._cut(self.grid)
        values = self.scene.values(name)
        low, high = log_range(values, self.scene.weights(name)) if log else linear_range(values)
        data = body.point_data if name in self.scene.nodal else body.cell_data
        data["shown"] = np.maximum(data[name], low) if log else data[name]
        self.plotter.add_mesh(
            body, scalars="shown", name="body", clim=(low, high), log_scale=log, cmap=_colors(name),
            preference="point" if name in self.scene.nodal else "cell", show_scalar_bar=False, reset_camera=False,
            nan_color="#d9d9d9", lighting=not self.flat, ambient=0.8, diffuse=0.25, specular=0.0, render=False,
            smooth_shading=False, interpolate_before_map=True,
        )  # fmt: skip
        self._bar(label(name) + (", magnitude" if name == FLUX else ""))

    def _bar(self, title: str) -> None:
        bar = self.plotter.add_scalar_bar(
            title=" ", vertical=False, width=0.5, height=0.06, position_x=0.25, position_y=0.055, n_labels=5,
            fmt="%.3g", color=DARK, label_font_size=15, unconstrained_font_size=True,
        )  # fmt: skip
        self._set_font(bar.GetLabelTextProperty())
        self._text(title, (0.5, 0.125), 12, "bar title").prop.justification_horizontal = "center"

    def _set_font(self, text: Any) -> None:
        from vtkmodules.vtkCommonCore import VTK_FONT_FILE

        text.SetFontFamily(VTK_FONT_FILE)
        text.SetFontFile(self.font)

    def _cut(self, data: Any) -> Any:
        """The part of a data set that the plane leaves."""
        if self.plane is None:
            return data.copy(deep=False)
        return data.clip(normal=self.plane[0], origin=self.plane[1], invert=False)

    def _arrows(self) -> None:
        """White arrows with a dark rim, just in front of the section or cut, so that they are seen on any colour."""
        self.plotter.remove_actor("arrows", render=False)
        if self.rim is not None:
            self.plotter.remove_actor(self.rim, render=False)
        found = self.scene.arrows(self.grid, self.plane) if self.with_arrows else None
        if found is None:
            return
        found.points -= 0.004 * self.grid.length * np.array(self.plane[0] if self.plane is not None else (0, 1, 0))
        self.plotter.add_mesh(found, name="arrows", color="white", reset_camera=False, render=False, lighting=False)
        self.rim = self.plotter.add_silhouette(found, color=DARK, line_width=2.0)

    def _surfaces(self) -> None:
        described = [r for r in self.scene.regions if r.described]
        for i, region in enumerate(self.scene.regions):
            self.plotter.remove_actor(f"outline {i}", render=False)
            lines = self.scene.lines(region, self.shown) if self.named else None
            if lines is not None and self.plane is not None:
                lines = self._cut(lines)
            if lines is None or lines.n_points == 0:
                continue
            if self.flat and region.described:
                lines.points[:, 1] -= 0.005 * self.grid.length
            color, width = self._line_style(region, described)
            self.plotter.add_mesh(lines, name=f"outline {i}", color=color, line_width=width, reset_camera=False,
                                  render=False, lighting=False, render_lines_as_tubes=False)  # fmt: skip
        self._legend(described) if self.flat else self._names(described)

    def _line_style(self, region: Region, described: list[Region]) -> tuple[str, float]:
        if not region.described:
            return "#8c8c8c", 1.0
        if self.flat:
            i = min(described.index(region), len(LINE_COLORS) - 1)
            return LINE_COLORS[i], 9.0 if region.terminal else 5.0
        return ("#D55E00", 3.0) if region.terminal else (DARK, 1.2)

    def _legend(self, regions: list[Region]) -> None:
        """One line of text per surface below the upper edge, in columns."""
        for i in range(MOST_NAMES + 1):
            self.plotter.remove_actor(f"key {i}", render=False)
            self.plotter.remove_actor(f"entry {i}", render=False)
        if not self.named:
            return
        width, height = self.plotter.window_size
        columns, step = self._legend_columns, ENTRY_HEIGHT_PX / height
        for i, region in enumerate(regions[:MOST_NAMES]):
            x, y = 0.05 + 0.92 / columns * (i % columns), 1 - step * (1.3 + i // columns)
            color, _ = self._line_style(region, regions)
            self._text("■", (x, y), 13, f"key {i}", color)
            self._text(region.title, (x + 28 / width, y + 2 / height), 11, f"entry {i}")
        if len(regions) > MOST_NAMES:
            more = f"and {len(regions) - MOST_NAMES} more"
            self._text(more, (0.05 + 28 / width, 1 - step * (0.3 + self._legend_rows)), 11, f"entry {MOST_NAMES}")

    @property
    def _legend_columns(self) -> int:
        longest = max((len(r.title) for r in self.scene.regions if r.described), default=1)
        return int(np.clip(0.92 * self.plotter.window_size[0] // (LETTER_PX * longest + 50), 1, 3))

    @property
    def _legend_rows(self) -> int:
        """Lines of the legend, with one for "and … more" where there are too many."""
        entries = sum(r.described for r in self.scene.regions)
        return -(-min(entries, MOST_NAMES) // self._legend_columns) + (entries > MOST_NAMES)

    def _names(self, regions: list[Region]) -> None:
        """Each name once, on its surface; contacts in colour."""
        for kind in ("contacts", "surfaces"):
            self.plotter.remove_actor(f"names of {kind}", render=False)
            self.plotter.remove_actor(f"names of {kind}-points", render=False)
            chosen = [r for r in regions if bool(r.terminal) == (kind == "contacts")] if self.named else []
            anchors = [(r.title, self._anchor(r)) for r in chosen]
            there = [(title, a) for title, a in anchors if a is not None]
            if not there:
                continue
            self._labels(
                np.array([a for _, a in there]), [t for t, _ in there], f"names of {kind}", font_size=16,
                text_color="#A33F00" if kind == "contacts" else DARK, shape="rounded_rect", shape_color="white",
                shape_opacity=0.85, margin=4, tolerance=0.002,
            )  # fmt: skip

    def _anchor(self, region: Region) -> Any:
        """A spot on the region that the plane leaves, a little outside of the body so that it can be seen."""
        spots = self.scene.stretched(ITSELF.points(region.spots_um))
        room = np.full(len(spots), self.grid.length)
        if self.plane is not None:
            room = (spots - np.array(self.plane[1])) @ np.array(self.plane[0])
        anchor = region.anchor_um(room)
        if anchor is None:
            return None
        anchor = self.scene.stretched(anchor)
        middle = np.array(self.grid.center)
        outward = np.where(np.abs(anchor - middle) > 0.499 * np.ptp(np.reshape(self.grid.bounds, (3, 2)), axis=1), 1, 0)
        return anchor + 0.006 * self.grid.length * outward * np.sign(anchor - middle)

    def _axes(self) -> None:
        """Axes and the box of the whole, also where it is cut away."""
        found = axes(self.grid.bounds, self.scene.stretch_z)
        style = {"color": DARK, "reset_camera": False, "render": False, "lighting": False}
        lines = segments(np.concatenate([a.segments for a in found]))
        self.plotter.add_mesh(lines, name="axes", line_width=1.5, **style)
        box = segments(other_edges(self.grid.bounds, found))
        self.plotter.add_mesh(box, name="box", line_width=1.0, **{**style, "color": "#b5b5b5"})
        at, texts = [p for a in found for p in a.at], [t for a in found for t in a.texts]
        self._labels(
            np.array(at),
            texts,
            "numbers",
            always_visible=True,
            shape=None,
            font_size=16,
            text_color=DARK,
            justification_horizontal="center",
            justification_vertical="center",
        )

    def _labels(self, at: Any, texts: list[str], name: str, **style: Any) -> None:
        self.plotter.add_point_labels(
            at, texts, name=name, font_file=self.font, bold=False, show_points=False, reset_camera=False, render=False,
            **style,
        )  # fmt: skip

    def _camera(self) -> None:
        """First view: the box of the whole between the legend above and the colour bar below."""
        if self.flat:
            self.plotter.view_xz(render=False)
            self.plotter.enable_parallel_projection()
        else:
            self.plotter.view_vector((-0.5, -1.0, 0.6), viewup=(0, 0, 1), render=False, bounds=self.grid.bounds)
        self.plotter.reset_camera_clipping_range()
        above = ENTRY_HEIGHT_PX * (1 + self._legend_rows) / self.plotter.window_size[1]
        left, right, bottom, top = (-0.70, 0.80, -0.32, 0.94 - 2 * above) if self.flat else (-0.72, 0.90, -0.46, 0.92)
        top = max(top, bottom + 0.3)
        self.plotter.camera.SetWindowCenter(0.0, 0.0)
        low, high = self._on_screen()
        self.plotter.camera.zoom(float(min((np.array([right - left, top - bottom])) / (high - low))))
        middle = np.mean(self._on_screen(), axis=0) - np.array([left + right, bottom + top]) / 2
        self.plotter.camera.SetWindowCenter(*middle)

    def _on_screen(self) -> tuple[Any, Any]:
        """Least and largest position of the box on the screen, each (2,); the screen goes from −1 to 1."""
        width, height = self.plotter.window_size
        matrix = self.plotter.camera.GetCompositeProjectionTransformMatrix(width / height, -1, 1)
        m = np.array([[matrix.GetElement(i, j) for j in range(4)] for i in range(4)])
        b = self.grid.bounds
        corners = np.array([(x, y, z, 1.0) for x in b[0:2] for y in b[2:4] for z in b[4:6]])
        seen = corners @ m.T
        place = seen[:, :2] / seen[:, 3:]
        return place.min(axis=0), place.max(axis=0)

    def message(self, text: str) -> None:
        """A few words in the lower right corner; empty takes it away."""
        self.plotter.remove_actor(NOTE, render=False)
        if text:
            self._text(text, (0.985, 0.012), 9, NOTE).prop.justification_horizontal = "right"
        self.plotter.render()
        if self.rim is not None:
            self.plotter.render()  # the rim follows the camera one drawing late

    def _text(self, text: str, at: tuple[float, float], size: int, name: str, color: str = DARK) -> Any:
        return self.plotter.add_text(
            text, position=at, viewport=True, font_size=size, color=color, name=name, font_file=self.font, render=False
        )


def _colors(name: str) -> str:
    return "cividis" if name.endswith("_V") else "viridis"
