"""A window on a solution, or a picture of it."""

from __future__ import annotations

import math
import os
import sys
import warnings
from collections.abc import Iterator
from contextlib import contextmanager, nullcontext
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from ..files.atomic import target, write_atomically
from ..grid.grid_solution import GridSolution
from .drawing import Drawing
from .images import images, most_copies
from .plan_window import view_plan
from .scene import Scene

if TYPE_CHECKING:
    from ..analysis.collection import CollectionProbability
    from ..analysis.solution import Solution

HELP = "n / b  field    l  log scale    m  copies    o  outlines and names    s  save picture    q  close"
HELP_CUT = "    , / .  or drag  cut"
PUSH = 0.05
"""What a key press moves the cut by, of the size of the whole."""
PICTURES = (".png", ".jpg", ".tif")


def view(
    solution: Solution | CollectionProbability | GridSolution,
    field: str | None = None,
    *,
    picture: str | Path | None = None,
    copies: tuple[int, int] = (1, 1),
    log: bool | None = None,
    clip: bool | None = None,
    arrows: bool = False,
    stretch_z: float = 1.0,
    size: tuple[int, int] = (1280, 800),
) -> Path | None:
    """Look at the fields of a solution in a window, or save a picture.

    A cross section is shown from the front (−y) with its named surfaces as coloured lines; a 3-D solution with a cut
    plane that the mouse moves, outlines of the named surfaces, and the names of those in sight. Coordinates are in µm.

    Keys: ``n`` / ``b`` next and previous field, ``l`` logarithmic scale, ``m`` copies on and off, ``o`` outlines and
    names, ``,`` / ``.`` move the cut (or drag it: the section pushes, the arrow tilts), ``s`` save a picture into the
    current folder, ``q`` close.

    Parameters
    ----------
    solution : Solution, CollectionProbability or GridSolution
        A cell with its grid is shown in plan, in mm, with its metal to scale; ``copies`` to ``stretch_z`` are then
        without meaning, and the key ``g`` takes the metal away, a click tells the value.
    field : str, optional
        One of `nodal_fields`, ``diffusion_length_um`` or ``carrier_flux_mA_per_cm2`` (its magnitude); default is the
        excess density, or the collection probability of what `collection_probability` returns. Of a GridSolution
        ``above_terminal_mV`` or ``current_mA_per_cm2``.
    picture : str or Path, optional
        Draw off screen and save here (.png, .jpg or .tif) instead of opening a window. Without a display a picture
        named after the field is saved in the current folder.
    copies : (int, int)
        Pieces shown along x and y: mirror images of a modelled piece, translated whole periods. ``(2, 1)`` of a
        modelled piece shows one whole unit cell in x. Only for unit cells.
    log : bool, optional
        Logarithmic colours; default for densities and rates that span more than two decades.
    clip : bool, optional
        Cut a 3-D solution open, at half its y at first; default is cut in a window, whole in a picture.
    arrows : bool
        Arrows along the carrier flux; their length grows with its square root.
    stretch_z : float
        Factor by which depth is drawn larger; coordinates stay true.
    size : (int, int)
        Width and height in pixels.

    Returns
    -------
    Path or None
        The picture, or None after a window.

    Raises
    ------
    InputError
        Unknown field, copies that do not exist, or a picture that cannot be written.
    """
    if isinstance(solution, GridSolution):
        return _view_plan(solution, field, picture, size)
    scene = Scene(solution, stretch_z)
    field = solution.main_field if field is None else field
    _check(scene, field, stretch_z, size)
    shown = images(scene.problem, copies)
    if picture is None and not has_display():
        picture = Path(f"{field}.png")
        warnings.warn(f"no display, so the picture is saved as {picture.resolve()}", UserWarning, stacklevel=2)
    path = None if picture is None else target("picture", picture, PICTURES)
    clip = path is None if clip is None else clip
    with nullcontext() if has_display() else no_display_warnings():
        return _drawn(scene, field, path, shown, copies=copies, log=log, clip=clip, arrows=arrows, size=size)


def _view_plan(solution: GridSolution, field: str | None, picture: Any, size: tuple[int, int]) -> Path | None:
    if picture is None and not has_display():
        picture = Path("plan.png")
        warnings.warn(f"no display, so the picture is saved as {picture.resolve()}", UserWarning, stacklevel=3)
    path = None if picture is None else target("picture", picture, PICTURES)
    with nullcontext() if has_display() else no_display_warnings():
        plotter = new_plotter(path is not None, size)
        try:
            view_plan(solution, plotter, field, path, size)
        finally:
            plotter.close()
    return path


def _drawn(
    scene: Scene, field: str, path: Path | None, shown: Any, *, copies: tuple[int, int], size: tuple[int, int],
    **look: Any,
) -> Path | None:  # fmt: skip
    plotter = new_plotter(path is not None, size)
    try:
        drawing = Drawing(scene, plotter, field, shown, **look)
        if path is not None:
            drawing.draw()
            return write_atomically(path, lambda p: plotter.screenshot(p, window_size=list(size)))
        Window(drawing, copies).show()
        return None
    finally:
        plotter.close()


def _check(scene: Scene, field: str, stretch_z: float, size: tuple[int, int]) -> None:
    problems = Complaints("view")
    problems.unless(field in scene.names, f"field {field!r}", f"one of {', '.join(scene.names)}")
    good = isinstance(stretch_z, int | float) and 0 < stretch_z < math.inf
    problems.unless(good, f"stretch_z = {stretch_z!r}", "a factor above 0")
    good = len(size) == 2 and all(isinstance(n, int | np.integer) and 200 <= n <= 10000 for n in size)
    problems.unless(good, f"size = {size!r}", "width and height from 200 to 10000 pixels")
    problems.raise_if_any()


def has_display() -> bool:
    """Whether a window can open: always assumed outside Linux; there if a display is named."""
    import pyvista as pv

    if pv.OFF_SCREEN:
        return False
    if not sys.platform.startswith("linux"):
        return True
    return bool(os.environ.get("DISPLAY") or os.environ.get("WAYLAND_DISPLAY"))


@contextmanager
def no_display_warnings() -> Iterator[None]:
    """Keep VTK from printing that there is no X server before it draws without one."""
    from vtkmodules.vtkCommonCore import vtkLogger

    before = vtkLogger.GetCurrentVerbosityCutoff()
    vtkLogger.SetStderrVerbosity(vtkLogger.VERBOSITY_ERROR)
    try:
        yield
    finally:
        vtkLogger.SetStderrVerbosity(before)


def new_plotter(off_screen: bool, size: tuple[int, int]) -> Any:
    import pyvista as pv

    plotter = pv.Plotter(off_screen=off_screen, notebook=False, window_size=list(size), theme=pv.themes.DocumentTheme())
    plotter.set_background("white")
    plotter.enable_anti_aliasing("msaa", multi_samples=8)  # the others spoil the test whether a label is in sight
    return plotter


class Window:
    """Keys and the movable cut plane around a drawing.

    Parameters
    ----------
    drawing : Drawing
    copies : (int, int)
        What the key ``m`` switches to; one step beyond the piece where it is (1, 1).
    """

    def __init__(self, drawing: Drawing, copies: tuple[int, int]) -> None:
        self.drawing, self.plotter = drawing, drawing.plotter
        problem = drawing.scene.problem
        if tuple(copies) == (1, 1):
            copies = (min(2, most_copies(problem, "x")), min(2, most_copies(problem, "y")))
        self.single, self.several = images(problem, (1, 1)), images(problem, copies)
        self.copied = len(drawing.shown) > 1
        self.widget: Any = None
        self.help = HELP if drawing.plane is None else HELP + HELP_CUT

    def show(self) -> None:
        """Open, and return when the user closes the window."""
        for key, action in self.keys().items():
            self.plotter.add_key_event(key, action)
        self.drawing.draw(help_line=self.help)
        self._place_plane()
        self.plotter.show(title="fem_carriers", auto_close=False)

    def keys(self) -> dict[str, Any]:
        """What every key does."""
        return {
            "n": lambda: self._step(1),
            "b": lambda: self._step(-1),
            "l": self._toggle_log,
            "m": self._toggle_copies,
            "o": self._toggle_names,
            "s": self.save,
            "comma": lambda: self._push(-PUSH),
            "period": lambda: self._push(PUSH),
        }

    def _step(self, by: int) -> None:
        names = self.drawing.scene.names
        self.drawing.field = names[(names.index(self.drawing.field) + by) % len(names)]
        self.drawing.log = None
        self.drawing.draw(help_line=self.help)

    def _toggle_log(self) -> None:
        self.drawing.log = not self.drawing.is_log
        self.drawing.draw(help_line=self.help)

    def _toggle_names(self) -> None:
        self.drawing.named = not self.drawing.named
        self.drawing.draw(help_line=self.help)

    def _toggle_copies(self) -> None:
        if len(self.several) == 1:
            return
        self.copied = not self.copied
        self.drawing.change_images(self.several if self.copied else self.single)
        self.plotter.clear_plane_widgets()
        self.drawing.draw(help_line=self.help)
        self._place_plane()

    def _place_plane(self) -> None:
        if self.drawing.plane is None:
            return
        normal, origin = self.drawing.plane
        self.widget = self.plotter.add_plane_widget(
            self._move_plane, normal=normal, origin=origin, bounds=self.drawing.grid.bounds, factor=1.1,
            color="#555555", test_callback=False, outline_opacity=0.0, implicit=True,
        )  # fmt: skip
        self.widget.SetDrawPlane(True)  # hardly visible, but the mouse can take it and push
        for style in (self.widget.GetPlaneProperty(), self.widget.GetSelectedPlaneProperty()):
            style.SetOpacity(0.01)
        self.plotter.render()

    def _push(self, share: float) -> None:
        """Move the cut along its normal by a share of the size of the whole."""
        if self.drawing.plane is None:
            return
        normal, origin = (np.asarray(v) for v in self.drawing.plane)
        b = np.reshape(self.drawing.grid.bounds, (3, 2))
        reach = float(np.abs(normal) @ np.ptp(b, axis=1))
        self.drawing.plane = (tuple(normal), tuple(np.clip(origin + share * reach * normal, b[:, 0], b[:, 1])))
        if self.widget is not None:
            self.widget.SetOrigin(self.drawing.plane[1])
        self.drawing.draw(help_line=self.help)

    def _move_plane(self, normal: Any, origin: Any) -> None:
        self.drawing.plane = (tuple(normal), tuple(origin))
        self.drawing.draw(help_line=self.help)

    def save(self) -> Path:
        """Save what is seen under a new name in the current folder."""
        stem, number = self.drawing.field, 1
        while Path(f"{stem}-{number}.png").exists():
            number += 1
        path = Path(f"{stem}-{number}.png")
        self.drawing.message("")
        write_atomically(path, lambda p: self.plotter.screenshot(p))
        self.drawing.message(f"saved {path}")
        return path
