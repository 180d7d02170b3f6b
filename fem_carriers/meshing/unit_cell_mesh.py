"""Mesh of a unit cell: graded quads and hexahedra for rectangular patterns, extruded triangles for all others."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell.masks import Spot
from ..errors import ModelWarning
from .extrude import extrude, extrude_quads, periodic_rank, tensor_mesh
from .fineness import FIRST_STEP_PER_LEVEL, Fineness, choose_fineness, singular_groups
from .grading import graded_axis
from .inner import inner_depths, inner_lines, name_inner
from .islands import find_dots, fit_islands, island_positions, on_dots
from .mesh import Mesh
from .plan_view import QuadPlan, triangulate
from .stretched_plan import stretched_plan

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..cell.plan import Layout
    from ..cell.unit_cell import UnitCell
    from .islands import Island
    from .plan_view import PlanMesh


LARGEST_DEFAULT_POINTS = 25_000
"""Mesh points above which the default first step is raised; quadratic elements have about eight unknowns a point."""


@dataclass(frozen=True)
class Outlines:
    """Lines of both faces that cell edges must follow, as shapely geometry in µm.

    Parameters
    ----------
    singular, mild, plain : list
        Graded to the first step; to the mild step; not graded (shading and light masks).
    """

    singular: list[Any]
    mild: list[Any]
    plain: list[Any]

    @property
    def all(self) -> list[Any]:
        """Every line."""
        return self.singular + self.mild + self.plain


def mesh_unit_cell(
    cell: UnitCell, first_step_um: float | None = None, growth: float | None = None, level: float = 0.0
) -> Mesh:
    """Mesh the modelled piece.

    Parameters
    ----------
    cell : UnitCell
    first_step_um : float, optional
        Step beside singular edges.
    growth : float, optional
        Ratio of neighbouring steps away from them.
    level : float
        Place in the family of meshes around these steps; see `Fineness.at_level`.

    Returns
    -------
    Mesh
        Surfaces "front", "front.<patch>", "rear", …, "x_min", …; one volume "base".

    Warns
    -----
    ModelWarning
        The default first step was raised to keep the mesh below `LARGEST_DEFAULT_POINTS`.
    """
    fineness = choose_fineness(cell, first_step_um, growth, level)
    mesh = _mesh(cell, fineness)
    limited = first_step_um is None and level == (0 if cell.dimension == 2 else -1)
    while limited and mesh.cells.p.shape[1] > LARGEST_DEFAULT_POINTS and fineness.can_be_coarser:
        fineness = choose_fineness(cell, 2 * fineness.first_step_um * FIRST_STEP_PER_LEVEL**level, growth, level)
        mesh = _mesh(cell, fineness)
    if limited and fineness.first_step_um > choose_fineness(cell, None, growth, level).first_step_um:
        warnings.warn(
            f"many patches: the first step of the mesh was raised to {fineness.first_step_um:.3g} µm to keep it small; "
            "state first_step_um for a finer mesh, or model a smaller piece.",
            ModelWarning,
            stacklevel=3,
        )
    return mesh


def _mesh(cell: UnitCell, fineness: Fineness) -> Mesh:
    layouts = {side: cell.layout(side, fineness.circle_corners) for side in ("front", "rear")}
    lines = collect_outlines(cell, layouts)
    depths = depth_axis(cell, layouts, fineness)
    if all(map(_is_rectilinear, lines.all)):
        axes = [plan_axis(cell, axis, lines, fineness) for axis in ("x", "y")[: cell.dimension - 1]]
        cells = tensor_mesh(*axes, depths)
    else:
        cells = _extruded(cell, layouts, lines, depths, fineness)
    surfaces = name_surfaces(cells, cell, layouts) | name_inner(cells, cell)
    return Mesh(cells, surfaces, {"base": np.arange(cells.t.shape[1])})


def collect_outlines(cell: UnitCell, layouts: dict[str, Layout]) -> Outlines:
    """Outlines of patches, shading and light masks inside the piece."""
    singular: list[Any] = []
    mild: list[Any] = []
    plain: list[Any] = []
    for layout in layouts.values():
        singular += [_inner_lines(g, cell) for g in singular_groups(layout, cell.base.doping_type)]
        mild += [_inner_lines(r.shape, cell) for r in layout.regions]
        plain.append(_inner_lines(layout.opaque, cell))
    mild += inner_lines(cell)
    for source in cell.light.sources if cell.light is not None else ():
        fitted = [m for m in source.mask if cell.dimension == 2 or not isinstance(m, Spot)]
        plain += [_inner_lines(m.outline(cell.dimension), cell) for m in fitted]
    return Outlines(*([line for line in lines if not line.is_empty] for lines in (singular, mild, plain)))


def _inner_lines(shape: Any, cell: UnitCell) -> Any:
    """Outline of a shape without what lies on the sides of the piece."""
    from shapely import LineString

    box = cell.frame.box
    inside = shape.intersection(box)
    if inside.area == 0:
        return LineString()
    line = inside.boundary.difference(box.boundary.buffer(1e-7))
    return line if line.length > 1e-6 else LineString()


def _segments(lines: list[Any]) -> NDArray[np.float64]:
    """End points of all straight pieces, shape (n, 2 ends, 2 coordinates)."""
    pieces = [np.asarray(part.coords) for line in lines for part in getattr(line, "geoms", [line])]
    return np.concatenate([np.stack([p[:-1], p[1:]], axis=1) for p in pieces] or [np.zeros((0, 2, 2))])


def _is_rectilinear(line: Any) -> bool:
    extent = np.abs(np.diff(_segments([line]), axis=1))[:, 0]
    return bool((extent.min(axis=1) < 1e-9).all())


def plan_axis(
    cell: UnitCell,
    axis: str,
    lines: Outlines,
    fineness: Fineness,
    more: tuple[list[tuple[float, float]], list[float]] = ([], []),
) -> NDArray[np.float64]:
    """Graded grid along x or y, µm; `more` adds positions with first steps, and positions that are nodes."""
    low, high = cell.frame.x if axis == "x" else cell.frame.y
    fine = [(p, fineness.first_step_um) for p in _positions(lines.singular, axis)] + more[0]
    fine += [(p, fineness.mild_step_um) for p in _positions(lines.mild, axis)]
    for side, position in ((f"{axis}_min", low), (f"{axis}_max", high)):
        if side in cell.sides:
            fine.append((position, fineness.plain_step_um))
    fine = [(p, s) for p, s in fine if low <= p <= high]
    if axis in cell.periodic_axes:
        fine = _also_across(fine, low, high)
    fixed = [p for p in _positions(lines.plain, axis) + more[1] if low < p < high]
    return graded_axis(low, high, fine, fineness.growth, fineness.largest_um, fixed, fineness.largest_share)


def _also_across(fine: list[tuple[float, float]], low: float, high: float) -> list[tuple[float, float]]:
    """Edges on one periodic side are edges on the other too."""
    ends = [s for p, s in fine if p in (low, high)]
    return fine + [(p, min(ends)) for p in (low, high) if ends]


def _positions(lines: list[Any], axis: str) -> list[float]:
    """Coordinates of the lines at right angles to an axis."""
    ends = _segments(lines)
    i = "xy".index(axis)
    across = np.abs(ends[:, 0, i] - ends[:, 1, i]) < 1e-9
    return [float(v) for v in np.unique(np.round(ends[across, 0, i], 9))]


def depth_axis(cell: UnitCell, layouts: dict[str, Layout], fineness: Fineness) -> NDArray[np.float64]:
    """Graded grid along z from rear to front, µm."""
    fine = inner_depths(cell, fineness)
    for side, position in (("rear", 0.0), ("front", cell.thickness_um)):
        layout = layouts[side]
        if len(singular_groups(layout, cell.base.doping_type)) > 1:
            step = fineness.first_step_um
        elif len(layout.regions) > 1:
            step = min(fineness.mild_step_um, fineness.plain_step_um)
        else:
            step = fineness.plain_step_um
        fine.append((position, step))
    return graded_axis(0.0, cell.thickness_um, fine, fineness.growth, fineness.largest_depth_um)


def _extruded(
    cell: UnitCell, layouts: dict[str, Layout], lines: Outlines, depths: NDArray[np.float64], fineness: Fineness
) -> Any:
    """A plan-view mesh fitted to both faces' outlines, through the graded depths."""
    periodic = "x" in cell.periodic_axes, "y" in cell.periodic_axes
    plan = _stretched(cell, lines, fineness, periodic) or _isotropic(cell, layouts, lines, fineness, periodic)
    if isinstance(plan, QuadPlan):
        return extrude_quads(plan, depths)
    return extrude(plan, depths, periodic_rank(plan, *periodic) if any(periodic) else None)


def _stretched(
    cell: UnitCell, lines: Outlines, fineness: Fineness, periodic: tuple[bool, bool]
) -> QuadPlan | PlanMesh | None:
    """A grid bent onto dots, if every oblique outline is a dot's."""
    dots = find_dots(cell, fineness.circle_corners)
    ends = _segments(lines.all)
    straight = np.abs(np.diff(ends, axis=1))[:, 0].min(axis=1) < 1e-9
    islands = fit_islands(dots, ends[straight], cell.frame.box, periodic) if on_dots(ends[~straight], dots) else None
    if islands is None:
        return None
    axes = [plan_axis(cell, axis, lines, fineness, _round(islands, axis, lines, fineness)) for axis in ("x", "y")]
    return stretched_plan(axes[0], axes[1], islands, periodic)


def _round(
    islands: list[Island], axis: str, lines: Outlines, fineness: Fineness
) -> tuple[list[tuple[float, float]], list[float]]:
    """(Position, first step) where an axis is graded towards circles, and positions of other corners."""
    fine, fixed = [], []
    steps = (lines.singular, fineness.first_step_um), (lines.mild, fineness.mild_step_um)
    for island in islands:
        for radius, sides, corners in island_positions(island, axis):
            step = next((s for group, s in steps if island.dots.follows(group, radius)), None)
            fine += [(p, step) for p in sides if step is not None]
            fixed += corners if step is not None else corners + sides
    return fine, fixed


def _isotropic(
    cell: UnitCell, layouts: dict[str, Layout], lines: Outlines, fineness: Fineness, periodic: tuple[bool, bool]
) -> PlanMesh:
    """Nearly equilateral triangles, for any outlines."""
    from shapely import union_all

    groups = [g for layout in layouts.values() for g in singular_groups(layout, cell.base.doping_type)]
    graded = union_all(lines.singular).buffer(1e-6)
    coarse = [rest for line in lines.mild + lines.plain if (rest := line.difference(graded)).length > 1e-3]
    return triangulate(
        groups, cell.frame.box, first_step=fineness.first_step_um, growth=fineness.growth, largest=fineness.largest_um,
        coarse_lines=coarse, periodic_x=periodic[0], periodic_y=periodic[1],
    )  # fmt: skip


def name_surfaces(cells: Any, cell: UnitCell, layouts: dict[str, Layout]) -> dict[str, NDArray[np.int64]]:
    """Boundary facets by name: regions of front and rear, and the sides."""
    from shapely import contains_xy

    facets = cells.boundary_facets()
    centre = cells.p[:, cells.facets[:, facets]].mean(axis=1) * 1e4
    surfaces = {}
    for side, height in (("rear", 0.0), ("front", cell.thickness_um)):
        on = np.abs(centre[-1] - height) < 1e-6 * cell.thickness_um
        y = centre[1] if cell.dimension == 3 else np.full_like(centre[0], np.mean(cell.frame.y))
        for region in layouts[side].regions:
            surfaces[region.name] = facets[on & contains_xy(region.shape, centre[0], y)]
    for i, axis in enumerate("xy"[: cell.dimension - 1]):
        low, high = cell.frame.x if axis == "x" else cell.frame.y
        for name, position in ((f"{axis}_min", low), (f"{axis}_max", high)):
            surfaces[name] = facets[np.abs(centre[i] - position) < 1e-7 * (high - low)]
    return surfaces
