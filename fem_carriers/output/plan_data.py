"""What a plan of a cell shows: triangles with values, metal to scale, terminals, gaps; in mm, of the whole cell."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from ..grid.grid_solution import GridSolution
from ..grid.joints import pads_on
from ..grid.layout import GridLayout
from ..grid.placing import placed_lines
from ..units import MM, UM

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

FIELDS = {
    "above_terminal_mV": "local voltage above that of the terminals (mV)",
    "current_mA_per_cm2": "local current density (mA/cm²)",
}
"""Fields of a plan and their labels."""
PLURALS = {"finger": "fingers", "busbar": "busbars", "wire": "wires", "perimeter": "perimeter busbar"}
SUBDIVIDED = {
    6: ([0, 3, 5], [3, 1, 4], [5, 4, 2], [3, 4, 5]),
    9: ([0, 4, 8], [0, 8, 7], [4, 1, 5], [4, 5, 8], [8, 5, 2], [8, 2, 6], [7, 8, 6], [7, 6, 3]),
}
"""Triangles between the nodes of a quadratic element, by their number."""


@dataclass(frozen=True, eq=False)
class PlanMap:
    """A field over the cell.

    Parameters
    ----------
    points_mm : (n, 2) float array
    triangles : (m, 3) int array
    values : (n,) float array
    """

    points_mm: NDArray[np.float64]
    triangles: NDArray[np.int64]
    values: NDArray[np.float64]


def check_solution(what: str, solution: object, field: str = "above_terminal_mV") -> None:
    """Refuse what is no solved cell, and unknown fields."""
    problems = Complaints(what)
    given = f"a {type(solution).__name__}"
    problems.unless(
        isinstance(solution, GridSolution), given, "a GridSolution", "cell_curve(…).maximum_power or cell_at(…)"
    )
    problems.unless(field in FIELDS, f"field {field!r}", f"one of {', '.join(FIELDS)}")
    problems.raise_if_any()


def plan_map(solution: GridSolution, field: str) -> PlanMap:
    """A field of a solved cell: voltages between the sheet's nodes where there are any, else one value per place.

    Parameters
    ----------
    solution : GridSolution
    field : str
        One of `FIELDS`.
    """
    if solution.space is None:
        return _of_boxes(solution, field)
    return _of_nodes(solution) if field == "above_terminal_mV" else _of_cells(solution, field)


def _averages(solution: GridSolution, field: str) -> pd.DataFrame:
    """Mean values of the places that share a rectangle."""
    part = solution.samples["part"]
    hidden = part.str.contains("under ") if field != "above_terminal_mV" else False
    areas = solution.samples[(part != "edge") & ~np.asarray(hidden)]
    values = areas["current_mA_per_cm2"]
    if field == "above_terminal_mV":
        values = 1e3 * (areas["local_voltage_V"] - solution.voltage_V)
    box = ["x_min_mm", "x_max_mm", "y_min_mm", "y_max_mm"]
    table = areas[box].round(7).assign(area=areas["area_cm2"], value=values * areas["area_cm2"])
    sums = table.groupby(box, as_index=False, sort=False).sum()
    return sums.assign(value=sums["value"] / sums["area"])


def _of_boxes(solution: GridSolution, field: str) -> PlanMap:
    table = _averages(solution, field)
    x0, x1, y0, y1 = (table[c].to_numpy() for c in ("x_min_mm", "x_max_mm", "y_min_mm", "y_max_mm"))
    points = np.stack([np.stack([x0, y0], 1), np.stack([x1, y0], 1), np.stack([x1, y1], 1), np.stack([x0, y1], 1)], 1)
    return _flat(points, table["value"].to_numpy())


def _of_cells(solution: GridSolution, field: str) -> PlanMap:
    """One value per cell of the sheet's mesh, found by its bounding box."""
    assert solution.space is not None
    cells = solution.space.mesh.cells
    table = _averages(solution, field)
    known = dict(zip(map(tuple, table.iloc[:, :4].to_numpy()), table["value"], strict=True))
    points, values = [], []
    for image in solution._images:
        corners = _moved(cells.p[:, cells.t].transpose(2, 1, 0) / MM, image)
        low, high = corners.min(axis=1), corners.max(axis=1)
        boxes = np.round(np.stack([low[:, 0], high[:, 0], low[:, 1], high[:, 1]], axis=1), 7)
        points.append(corners)
        values.append([known.get(tuple(box), np.nan) for box in boxes])
    found = np.concatenate(values)
    on = np.isfinite(found)
    return _flat(np.concatenate(points)[on], found[on])


def _flat(corners: NDArray[np.float64], values: NDArray[np.float64]) -> PlanMap:
    """Polygons (n, k, 2) of one value each."""
    n, k = corners.shape[:2]
    fan = np.array([[0, i, i + 1] for i in range(1, k - 1)])
    triangles = (np.arange(n)[:, None, None] * k + fan).reshape(-1, 3)
    return PlanMap(corners.reshape(-1, 2), triangles, np.repeat(values, k))


def _of_nodes(solution: GridSolution) -> PlanMap:
    """Local voltages at the sheet's nodes."""
    assert solution.space is not None
    nodes = solution.sheet_nodes
    assert nodes is not None
    places, sheets = nodes
    grids = list(solution.layout.grids.values()) if isinstance(solution.layout, GridLayout) else []
    signs = [grid.sign for grid in grids] or [1]
    above = 1e3 * np.sum([sign * sheet for sign, sheet in zip(signs, sheets, strict=True)], axis=0)
    local = solution.space.basis.element_dofs
    triangles = np.concatenate([local[part].T for part in SUBDIVIDED[local.shape[0]]])
    n, images = places.shape[1], solution._images
    points = np.concatenate([_moved(places.T, image) for image in images])
    return PlanMap(points, np.concatenate([triangles + k * n for k in range(len(images))]), np.tile(above, len(images)))


def _moved(points_mm: NDArray[np.float64], image: tuple[float, float, float, float]) -> NDArray[np.float64]:
    a, b, c, d = image
    return np.asarray(points_mm * np.array([b, d]) + np.array([a, c]) / MM)


def outline_mm(solution: GridSolution) -> NDArray[np.float64]:
    """Corners of the outline, (n, 2); of a drawing its bounding box."""
    if isinstance(solution.layout, GridLayout):
        return np.asarray(solution.layout.outline.corners / MM)
    (x0, x1), (y0, y1) = solution.window.spans
    return np.array([[x0, y0], [x1, y0], [x1, y1], [x0, y1]]) / MM


def metal_kinds(solution: GridSolution, grid: str) -> list[str]:
    """Kinds of metal of one grid, the uppermost last."""
    kinds = list(dict.fromkeys(solution.metal["kind"][solution.metal["grid"] == grid]))
    order = ["finger", "perimeter", "busbar", "wire"]
    return sorted(kinds, key=lambda kind: order.index(kind) if kind in order else -1)


def metal_polygons_mm(solution: GridSolution, grid: str, kind: str) -> NDArray[np.float64]:
    """Metal of one kind to scale, as quadrilaterals (n, 4, 2); pieces of one width that follow each other are one."""
    rows = solution.metal[(solution.metal["grid"] == grid) & (solution.metal["kind"] == kind)]
    names = ["x_start_mm", "y_start_mm", "width_start_um", "x_end_mm", "y_end_mm", "width_end_um"]
    start, end = np.split(np.array(_joined(rows[names].to_numpy())), 2, axis=1)
    along = end[:, :2] - start[:, :2]
    along /= np.maximum(np.linalg.norm(along, axis=1), 1e-12)[:, None]
    across = np.stack([-along[:, 1], along[:, 0]], axis=1)
    first, last = (ends[:, 2:] * UM / MM / 2 * across for ends in (start, end))
    corner = start[:, 2:] * UM / MM / 2 * along if kind == "perimeter" else 0.0  # its sides meet on their centre lines
    a, b = start[:, :2] - corner, end[:, :2] + corner
    return np.asarray(np.stack([a - first, b - last, b + last, a + first], axis=1))


def _joined(pieces: NDArray[np.float64]) -> list[NDArray[np.float64]]:
    """Rows (x, y, width, x, y, width) of which those that continue the last one straight on are added to it."""
    found: list[NDArray[np.float64]] = []
    for piece in pieces:
        last = found[-1] if found else None
        same = last is not None and np.ptp([last[2], *piece[[2, 5]], last[5]]) < 1e-9 * piece[2]
        straight = last is not None and bool((np.abs(last[[0, 1]] - piece[[3, 4]]) < 1e-7).any())
        if last is not None and same and straight and np.allclose(last[3:5], piece[:2], atol=1e-7):
            found[-1] = np.concatenate([last[:3], piece[3:]])
        else:
            found.append(piece)
    return found


def terminals_mm(solution: GridSolution, grid: str) -> NDArray[np.float64]:
    """Collection points and the wire ends that lead to the terminal, (n, 2)."""
    if not isinstance(solution.layout, GridLayout):
        return np.zeros((0, 2))
    own = solution.layout.grids[grid]
    found: list[tuple[float, float]] = []
    for line in placed_lines(solution.layout.outline, grid, own):
        places = list(pads_on(line, own))
        if line.kind == "wire" and own.wires is not None:
            ends = {"low": [line.low], "high": [line.high], "both": [line.low, line.high]}
            places += ends[own.wires.ends]
        found += [(s, line.at) if line.axis == 0 else (line.at, s) for s in places]
    return np.array(found, dtype=float).reshape(-1, 2) / MM


def gaps_mm(solution: GridSolution, grid: str) -> NDArray[np.float64]:
    """Middles of the gaps in broken fingers, (n, 2)."""
    metal = solution.metal
    fingers = metal[(metal["grid"] == grid) & (metal["kind"] == "finger")]
    found = []
    for _, pieces in fingers.groupby(fingers["x_start_mm"].round(6), sort=False):
        low = np.sort(pieces[["y_start_mm", "y_end_mm"]].to_numpy(), axis=1)
        low = low[np.argsort(low[:, 0])]
        apart = low[1:, 0] - low[:-1, 1] > 1e-6
        x = float(pieces["x_start_mm"].iloc[0])
        found += [(x, float(y)) for y in 0.5 * (low[1:, 0] + low[:-1, 1])[apart]]
    return np.array(found, dtype=float).reshape(-1, 2)


def rows_mm(solution: GridSolution, grid: str) -> NDArray[Any]:
    """Centre lines, in y, of busbars and wires."""
    metal = solution.metal
    across = metal[(metal["grid"] == grid) & metal["kind"].isin(["busbar", "wire"])]
    return np.asarray(np.unique(np.round(across["y_start_mm"].to_numpy(dtype=float), 6)))
