"""A window on the plan of a cell with its grid, or a picture of it."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..files.atomic import write_atomically
from .plan_data import FIELDS, check_solution, metal_kinds, metal_polygons_mm, outline_mm, plan_map, terminals_mm
from .scene import segments
from .style import DARK, OKABE_ITO, font_file, linear_range

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..grid.grid_solution import GridSolution

HELP = "n / b  field    g  metal    left click  value    mouse wheel  zoom    s  save picture    q  close"
METAL = {"finger": "#d8d8d8", "perimeter": "#d8d8d8", "busbar": "#d8d8d8", "wire": "#c8763c"}
FREE_BELOW, FREE_ABOVE = 0.19, 0.07
"""Shares of the window's height that the colour bar and the title take."""
LIFT = 1e-3
"""Height of the metal above the map, as a share of the cell's size, so that it is not hidden."""


class PlanWindow:
    """The plan of a solved cell in a plotter, and what its keys do.

    Parameters
    ----------
    solution : GridSolution
    plotter : pyvista.Plotter
    field : str
        One of `plan_data.FIELDS`.
    """

    def __init__(self, solution: GridSolution, plotter: Any, field: str) -> None:
        self.solution, self.plotter, self.field = solution, plotter, field
        self.with_metal = True
        self.size = float(np.ptp(outline_mm(solution), axis=0).max())

    def show(self) -> None:
        """Open, and return when the user closes the window."""
        for key, action in self.keys().items():
            self.plotter.add_key_event(key, action)
        self.plotter.enable_image_style()
        self.plotter.track_click_position(self.tell, side="left")
        self.draw(HELP)
        self.plotter.show(title="fem_carriers", auto_close=False)

    def keys(self) -> dict[str, Any]:
        """What every key does."""
        return {"n": lambda: self._step(1), "b": lambda: self._step(-1), "g": self._toggle_metal, "s": self.save}

    def draw(self, help_line: str = "") -> None:
        """Everything anew."""
        first = not self.plotter.actors
        self.plotter.clear()
        self._draw_map()
        if self.with_metal:
            for grid in dict.fromkeys(self.solution.metal["grid"]):
                self._draw_metal(grid)
        self._draw_outline()
        self.message(help_line)
        if first:
            self._look_down()

    def _look_down(self) -> None:
        """The whole cell between the title and the colour bar."""
        self.plotter.view_xy()
        self.plotter.enable_parallel_projection()
        low, high = (f(outline_mm(self.solution), axis=0) for f in (np.min, np.max))
        width, height = high - low
        across, up = self.plotter.window_size
        scale = 0.5 * max(height / (1 - FREE_BELOW - FREE_ABOVE), width / 0.94 * up / across)
        x, y = 0.5 * (low + high) - np.array([0.0, (FREE_BELOW - FREE_ABOVE) * scale])
        self.plotter.camera.focal_point, self.plotter.camera.position = (x, y, 0.0), (x, y, self.size)
        self.plotter.camera.parallel_scale = scale

    def _draw_map(self) -> None:
        import pyvista as pv

        shown = plan_map(self.solution, self.field)
        self.map = pv.PolyData(_flat(shown.points_mm, 0.0), faces=np.insert(shown.triangles, 0, 3, axis=1).ravel())
        self.map.point_data[self.field] = shown.values
        title = f"{FIELDS[self.field]}\n"
        self.plotter.add_mesh(
            self.map, scalars=self.field, cmap="viridis", clim=linear_range(shown.values), lighting=False, name="map",
            scalar_bar_args={
                "title": title, "color": DARK, "vertical": False, "position_x": 0.2, "position_y": 0.06, "width": 0.6,
                "height": 0.06, "title_font_size": 17, "label_font_size": 14, "fmt": "%.3g", "n_labels": 5,
            },
        )  # fmt: skip

    def _draw_metal(self, grid: str) -> None:
        import pyvista as pv

        for k, kind in enumerate(metal_kinds(self.solution, grid)):
            polygons = metal_polygons_mm(self.solution, grid, kind)
            numbers = np.arange(4 * len(polygons)).reshape(-1, 4)
            points = _flat(polygons.reshape(-1, 2), (k + 1) * LIFT * self.size)
            metal = pv.PolyData(points, faces=np.insert(numbers, 0, 4, axis=1).ravel())
            color = METAL.get(kind, METAL["finger"])
            middles = 0.5 * (points[numbers[:, [0, 1]]] + points[numbers[:, [3, 2]]])  # one pixel wide at any zoom
            self.plotter.add_mesh(segments(middles), color=color, line_width=1, name=f"{grid} {kind} lines",
                                  pickable=False)  # fmt: skip
            self.plotter.add_mesh(metal, color=color, lighting=False, name=f"{grid} {kind}", pickable=False)
        places = terminals_mm(self.solution, grid)
        if len(places):
            points = pv.PolyData(_flat(places, 6 * LIFT * self.size))
            self.plotter.add_mesh(points, color=OKABE_ITO[5], point_size=9, name=f"{grid} terminals", pickable=False)

    def _draw_outline(self) -> None:
        import pyvista as pv

        corners = _flat(outline_mm(self.solution), 5 * LIFT * self.size)
        line = pv.lines_from_points(np.vstack([corners, corners[:1]]))
        self.plotter.add_mesh(line, color=DARK, line_width=1.5, name="outline", pickable=False)
        (x0, y0), (x1, y1) = corners[:, :2].min(axis=0), corners[:, :2].max(axis=0)
        text = f"{x1 - x0:g} × {y1 - y0:g} mm, {self.solution}"
        self.plotter.add_text(
            text, position="upper_left", font_size=10, color=DARK, font_file=font_file(), name="title"
        )

    def message(self, text: str) -> None:
        """A line at the lower edge."""
        self.plotter.add_text(
            text or " ", position=(12, 8), font_size=9, color=DARK, font_file=font_file(), name="message"
        )

    def tell(self, place_mm: Any) -> None:
        """Write the value at a place."""
        found = np.asarray(place_mm, dtype=float)[:2]
        nearest = int(self.map.find_closest_point((*found, 0.0)))
        value = float(self.map.point_data[self.field][nearest])
        self.message(f"({found[0]:.4g}, {found[1]:.4g}) mm: {value:.5g}, {FIELDS[self.field]}")

    def _step(self, by: int) -> None:
        names = list(FIELDS)
        self.field = names[(names.index(self.field) + by) % len(names)]
        self.draw(HELP)

    def _toggle_metal(self) -> None:
        self.with_metal = not self.with_metal
        self.draw(HELP)

    def save(self) -> Path:
        """Save what is seen under a new name in the current folder."""
        number = 1
        while Path(f"plan-{number}.png").exists():
            number += 1
        path = Path(f"plan-{number}.png")
        self.message("")
        write_atomically(path, lambda p: self.plotter.screenshot(p))
        self.message(f"saved {path}")
        return path


def view_plan(
    solution: GridSolution, plotter: Any, field: str | None, path: Path | None, size: tuple[int, int]
) -> None:
    """Show the plan in a window, or draw it off screen and save it.

    Parameters
    ----------
    solution : GridSolution
    plotter : pyvista.Plotter
    field : str, optional
        One of `plan_data.FIELDS`.
    path : Path, optional
        Where to save; None opens a window.
    size : (int, int)
        In pixels.
    """
    field = next(iter(FIELDS)) if field is None else field
    check_solution("view", solution, field)
    window = PlanWindow(solution, plotter, field)
    if path is None:
        window.show()
        return
    window.draw()
    write_atomically(path, lambda p: plotter.screenshot(p, window_size=list(size)))


def _flat(points_mm: NDArray[np.float64], z: float) -> NDArray[np.float64]:
    """Points (n, 3) at one height."""
    return np.column_stack([points_mm, np.full(len(points_mm), z)])
