"""Drawn grids to current-voltage curves."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from ..errors import Complaints
from ..units import MM
from .cell_current import CellCurrent
from .drawing import PlanDrawing
from .drawn_circuit import DrawnLine, drawn_circuit, lengths_cm
from .grid_curve import GridCurve, traced
from .grid_solution import GridSolution
from .local_laws import LocalLaws
from .placing import Window
from .sheet_mesh import sheet_space
from .solve import GridSolver

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, eq=False, repr=False)
class DrawnSolution(GridSolution):
    """A solved drawing; see `GridSolution`.

    Parameters
    ----------
    drawn : tuple of DrawnLine
    """

    drawn: tuple[DrawnLine, ...] = ()

    @cached_property
    def metal(self) -> pd.DataFrame:
        """Every piece of metal; columns as in `GridSolution.metal`, with the line's name as kind and name."""
        import pandas as pd

        return pd.concat([self._drawn_pieces(line) for line in self.drawn], ignore_index=True)

    def _drawn_pieces(self, line: DrawnLine) -> pd.DataFrame:
        import pandas as pd

        (x0, y0), (x1, y1) = (self.state.circuit.places[:, nodes] / MM for nodes in line.nodes[:2])
        v = self.state.potentials[line.nodes[:2]]
        length, resistance = np.hypot(x1 - x0, y1 - y0) * MM, line.metal.resistance_ohm_per_cm
        current = (v[0] - v[1]) / length / resistance if resistance > 0 else np.full(length.size, np.nan)
        return pd.DataFrame({
            "grid": "drawing", "kind": line.name, "name": line.name,
            "x_start_mm": x0, "y_start_mm": y0, "x_end_mm": x1, "y_end_mm": y1,
            "width_start_um": line.metal.width_um, "width_end_um": line.metal.width_um,
            "potential_start_mV": 1e3 * v[0], "potential_end_mV": 1e3 * v[1], "current_mA": 1e3 * current,
        })  # fmt: skip

    @cached_property
    def metal_mass_mg(self) -> dict[str, float]:
        """Mass of the metal by name of the line."""
        cells = self.layout.mesh.cells
        return {d.name: float(lengths_cm(cells, d.facets).sum()) * d.metal.mass_mg_per_cm for d in self.drawn}


class DrawingSolver:
    """A drawing, solved at any voltage.

    Parameters
    ----------
    drawing : PlanDrawing
    current : CellCurrent
        Of the cell without lateral transport and shading.
    under_metal : CellCurrent, optional
        Its dark part counts under the lines.
    """

    def __init__(self, drawing: PlanDrawing, current: CellCurrent, under_metal: CellCurrent | None = None) -> None:
        problems = Complaints("drawing")
        given = "a unit cell's curve, which contains the lateral losses already"
        problems.unless(not current.lateral, given, "a curve without lateral losses")
        problems.raise_if_any()
        self.drawing, self.laws = drawing, LocalLaws(current, under_metal)
        self.space = sheet_space(drawing.mesh)
        circuit, self.drawn = drawn_circuit(drawing, self.laws, self.space)
        self.solver = GridSolver(circuit)
        low, high = drawing.mesh.cells.p.min(axis=1), drawing.mesh.cells.p.max(axis=1)
        self.window = Window((float(low[0]), float(high[0])), (float(low[1]), float(high[1])))

    def at(self, voltage_V: float) -> DrawnSolution:
        """The solution at a terminal voltage."""
        state = self.solver.at(float(voltage_V))
        area = self.drawing.area_cm2
        return DrawnSolution(self.drawing, self.laws, self.window, state, self.space, area, self.drawn)


def drawing_curve(
    drawing: PlanDrawing,
    current: CellCurrent,
    *,
    under_metal: CellCurrent | None = None,
    voltages_V: Sequence[float] | None = None,
) -> GridCurve:
    """Current-voltage curve of a drawn grid; see `cell_curve`.

    Parameters
    ----------
    drawing : PlanDrawing
    current, under_metal : CellCurrent
    voltages_V : sequence of float, optional
    """
    return traced(DrawingSolver(drawing, current, under_metal).at, current, voltages_V)


def drawing_at(
    drawing: PlanDrawing, current: CellCurrent, voltage_V: float, *, under_metal: CellCurrent | None = None
) -> GridSolution:
    """A drawn grid at one terminal voltage.

    Parameters
    ----------
    drawing : PlanDrawing
    current, under_metal : CellCurrent
    voltage_V : float
    """
    return DrawingSolver(drawing, current, under_metal).at(voltage_V)
