"""A window on a field file, or a picture of it."""

from __future__ import annotations

from contextlib import nullcontext
from pathlib import Path
from typing import Any

import numpy as np

from ..errors import Complaints, MeshError
from ..files.atomic import target, write_atomically
from .labels import label
from .style import DARK, font_file, linear_range, log_by_default, log_range
from .window import PICTURES, has_display, new_plotter, no_display_warnings

FIRST = ("excess_density_per_cm3",)
KEYS = "n / b  field    l  log scale    q  close"


def view_field_file(
    path: str | Path,
    field: str | None = None,
    *,
    picture: str | Path | None = None,
    size: tuple[int, int] = (1280, 800),
) -> Path | None:
    """Look at the fields of a file that `write_fields` made, in a window, or save a picture.

    The file is checked before it is drawn. Keys: ``n`` / ``b`` next and previous field, ``l`` logarithmic scale,
    ``q`` close.

    Parameters
    ----------
    path : str or Path
        A .vtu file.
    field : str, optional
        Default is the excess density.
    picture : str or Path, optional
        Save a picture (.png, .jpg or .tif) instead; without a display one is saved beside the file.
    size : (int, int)
        Width and height in pixels.

    Returns
    -------
    Path or None
        The picture, or None after a window.

    Raises
    ------
    InputError
        No such file or field, or a picture that cannot be written.
    MeshError
        A file that is damaged.
    """
    path = Path(path)
    grid = _read(path)
    names = [n for n in [*grid.point_data, *grid.cell_data] if n != "volume_number"]
    field = next((n for n in FIRST if n in names), names[0]) if field is None else field
    problems = Complaints("view")
    problems.unless(field in names, f"field {field!r}", f"one of {', '.join(names)}")
    problems.raise_if_any()
    if picture is None and not has_display():
        picture = path.with_suffix(".png")
    out = None if picture is None else target("picture", picture, PICTURES)
    with nullcontext() if has_display() else no_display_warnings():
        plotter = new_plotter(out is not None, size)
        try:
            shown = _Shown(plotter, grid, names, field)
            shown.draw()
            if out is not None:
                return write_atomically(out, lambda p: plotter.screenshot(p, window_size=list(size)))
            for key, action in {"n": lambda: shown.step(1), "b": lambda: shown.step(-1), "l": shown.toggle_log}.items():
                plotter.add_key_event(key, action)
            plotter.add_text(KEYS, position="lower_left", font_size=9, color=DARK)
            plotter.show(title=path.name, auto_close=False)
            return None
        finally:
            plotter.close()


def _read(path: Path) -> Any:
    """The grid of a file, after a strict check: a damaged one can end the whole process."""
    import meshio
    import pyvista as pv

    problems = Complaints("view")
    problems.unless(path.is_file() and path.suffix == ".vtu", f"file {str(path)!r}", "an existing .vtu file")
    problems.raise_if_any()
    try:
        mesh = meshio.read(path)
        for block in mesh.cells:
            data = np.asarray(block.data)
            if data.size and (data.min() < 0 or data.max() >= len(mesh.points)):
                raise ValueError("a cell refers to a point that is not there")
        if not len(mesh.points) or not np.isfinite(mesh.points).all():
            raise ValueError("no points, or points that are not finite")
    except (Exception, SystemExit) as error:  # the reader raises whatever it meets, SystemExit included
        raise MeshError(f"{path} is no sound field file ({error}); write it again") from error
    return pv.read(path)


class _Shown:
    """What is drawn now."""

    def __init__(self, plotter: Any, grid: Any, names: list[str], field: str) -> None:
        self.plotter, self.grid, self.names, self.field = plotter, grid, names, field
        self.log: bool | None = None

    def draw(self) -> None:
        """The field in colours, with a scale; of a vector its magnitude."""
        values = np.asarray(self.grid[self.field])
        vector = values.ndim > 1
        values = np.linalg.norm(values, axis=1) if vector else values
        log = log_by_default(self.field, values, np.ones(values.shape)) if self.log is None else self.log
        low, high = log_range(values) if log else linear_range(values)
        self.log = bool(log)
        for title in list(self.plotter.scalar_bars.keys()):
            self.plotter.remove_scalar_bar(title, render=False)
        self.plotter.add_mesh(
            self.grid.copy(deep=False), scalars=np.maximum(values, low) if log else values, name="field",
            clim=(low, high), log_scale=self.log, cmap="viridis", show_scalar_bar=False, nan_color="#d9d9d9",
            lighting=not self.flat,
        )  # fmt: skip
        self._bar(label(self.field) + (", magnitude" if vector else ""))
        self.plotter.view_xz() if self.flat else self.plotter.view_isometric()

    @property
    def flat(self) -> bool:
        """True for a cross section."""
        return float(np.ptp(self.grid.bounds[2:4])) == 0

    def _bar(self, title: str) -> None:
        self.plotter.add_scalar_bar(
            title=" ", vertical=False, width=0.5, height=0.06, position_x=0.25, position_y=0.055, n_labels=5,
            fmt="%.3g", color=DARK, label_font_size=15, unconstrained_font_size=True,
        )  # fmt: skip
        shown = self.plotter.add_text(
            title, position=(0.5, 0.125), viewport=True, font_size=12, color=DARK, name="title", font_file=font_file()
        )
        shown.prop.justification_horizontal = "center"

    def step(self, by: int) -> None:
        """Next or previous field."""
        self.field = self.names[(self.names.index(self.field) + by) % len(self.names)]
        self.log = None
        self.draw()

    def toggle_log(self) -> None:
        """Logarithmic scale on and off."""
        self.log = not self.log
        self.draw()
