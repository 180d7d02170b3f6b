"""A cell with its grid at one voltage: current, power, budget, maps."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..units import MA, MM
from .layout import GridLayout
from .local_laws import LocalLaws
from .losses import GridLosses, grid_losses
from .placing import Window
from .solve import GridState
from .symmetry import images

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from .circuit import Line
    from .sheet_mesh import SheetSpace


@dataclass(frozen=True, eq=False, repr=False)
class GridSolution:
    """A solved cell.

    Parameters
    ----------
    layout : GridLayout or PlanDrawing
    laws : LocalLaws
    window : Window
        The modelled piece; currents, powers and the tables below are of the whole cell.
    state : GridState
    space : SheetSpace, optional
        Of the sheets, in the resolved mode.
    area_cm2 : float
        Of the whole cell.
    """

    layout: Any
    laws: LocalLaws
    window: Window
    state: GridState
    space: SheetSpace | None
    area_cm2: float

    @property
    def voltage_V(self) -> float:
        """Of the terminals."""
        return self.state.voltage_V

    @property
    def current_A(self) -> float:
        """Terminal current, photocurrent positive."""
        return self.state.current_A * self.window.repeats

    @property
    def current_mA_per_cm2(self) -> float:
        """Terminal current per cell area."""
        return self.current_A / self.area_cm2 / MA

    @property
    def slope_mA_per_cm2_V(self) -> float:
        """dJ/dV, from the linearised equations."""
        return self.state.slope_S * self.window.repeats / self.area_cm2 / MA

    @property
    def power_mW(self) -> float:
        """V I."""
        return 1e3 * self.voltage_V * self.current_A

    @property
    def power_mW_per_cm2(self) -> float:
        """V J."""
        return self.power_mW / self.area_cm2

    @cached_property
    def losses(self) -> GridLosses:
        """Power by component."""
        return grid_losses(self.state, self.laws.current, self.area_cm2, self.window.repeats)

    @property
    def series_resistance_ohm_cm2(self) -> dict[str, float]:
        """By component: power lost over the square of the current, times the area."""
        return self.losses.series_resistance_ohm_cm2

    @property
    def _images(self) -> list[tuple[float, float, float, float]]:
        return images(self.window, self.layout) if isinstance(self.layout, GridLayout) else [(0.0, 1.0, 0.0, 1.0)]

    @cached_property
    def samples(self) -> pd.DataFrame:
        """The local state of the whole cell, one row per place where current is fed.

        Columns: part ("lit", "under busbar", …), x_min_mm, x_max_mm, y_min_mm, y_max_mm (the rectangle a place stands
        for; several places of the resolved mode share a mesh cell), area_cm2 (length in cm for "edge"),
        local_voltage_V, current_mA_per_cm2 (mA/cm for "edge").
        """
        import pandas as pd

        tables = []
        for source, u in zip(self.state.circuit.sources, self.state.local_voltages, strict=True):
            current = source.law(u)[0] / MA
            for a, b, c, d in self._images:
                x = np.sort(a + b * source.boxes[:2], axis=0) / MM
                y = np.sort(c + d * source.boxes[2:], axis=0) / MM
                columns = {
                    "part": source.name, "x_min_mm": x[0], "x_max_mm": x[1], "y_min_mm": y[0], "y_max_mm": y[1],
                    "area_cm2": source.weight, "local_voltage_V": u, "current_mA_per_cm2": current,
                }  # fmt: skip
                tables.append(pd.DataFrame(columns))
        return pd.concat(tables, ignore_index=True)

    @cached_property
    def metal(self) -> pd.DataFrame:
        """Every piece of metal of the whole cell.

        Columns: grid, kind, name, x_start_mm, y_start_mm, x_end_mm, y_end_mm, width_start_um, width_end_um,
        potential_start_mV, potential_end_mV (relative to the terminal, in the direction that raises the local voltage),
        current_mA (mean of the piece, towards its end; half of it in each half of a line on a mirror plane).
        """
        import pandas as pd

        tables = [self._pieces(line, *image) for line in self.state.circuit.lines for image in self._images]
        return pd.concat(tables, ignore_index=True) if tables else pd.DataFrame()

    def _pieces(self, line: Line, a: float, b: float, c: float, d: float) -> pd.DataFrame:
        import pandas as pd

        placed, s = line.placed, line.s
        along = (a + b * s if placed.axis == 0 else c + d * s) / MM
        across = np.full(s.size - 1, (c + d * placed.at if placed.axis == 0 else a + b * placed.at) / MM)
        x = (along[:-1], along[1:]) if placed.axis == 0 else (across, across)
        y = (across, across) if placed.axis == 0 else (along[:-1], along[1:])
        v = self._sign(placed.grid) * self.state.potentials[line.vertices]
        mean = 0.5 * (line.width_um[1:] + line.width_um[:-1]) / placed.metal.width_um
        resistance = placed.metal.resistance_ohm_per_cm
        current = (v[:-1] - v[1:]) / np.diff(s) * mean / resistance if resistance > 0 else np.full(s.size - 1, np.nan)
        return pd.DataFrame({
            "grid": placed.grid, "kind": placed.kind, "name": placed.name,
            "x_start_mm": x[0], "y_start_mm": y[0], "x_end_mm": x[1], "y_end_mm": y[1],
            "width_start_um": line.width_um[:-1], "width_end_um": line.width_um[1:],
            "potential_start_mV": 1e3 * v[:-1], "potential_end_mV": 1e3 * v[1:],
            "current_mA": 1e3 * current * placed.share,
        })  # fmt: skip

    def _sign(self, grid: str) -> int:
        return int(self.layout.grids[grid].sign) if isinstance(self.layout, GridLayout) else 1

    @cached_property
    def metal_mass_mg(self) -> dict[str, float]:
        """Mass of the metal by kind, from the printed volume; metal without a height counts nothing."""
        found: dict[str, float] = {}
        for line in self.state.circuit.lines:
            placed = line.placed
            mean = 0.5 * (line.width_um[1:] + line.width_um[:-1]) / placed.metal.width_um
            length = float(np.diff(line.s) @ mean) * placed.share * self.window.repeats
            found[placed.kind] = found.get(placed.kind, 0.0) + length * placed.metal.mass_mg_per_cm
        return found

    @property
    def sheet_nodes(self) -> tuple[NDArray[np.float64], list[NDArray[np.float64]]] | None:
        """Places of the sheet's nodes, (2, n) in mm, and the potentials (n,) in V of each sheet; None if smeared.

        Potentials are relative to the sheet's own terminal; only of the modelled piece.
        """
        if self.space is None:
            return None
        n = self.space.places.shape[1]
        sheets = len(self.layout.grids) if isinstance(self.layout, GridLayout) else 1
        grids = list(self.layout.grids.values()) if isinstance(self.layout, GridLayout) else []
        starts = [k * n for k in range(sheets)]
        assert not grids or len(grids) == sheets
        return self.space.places / MM, [self.state.potentials[a : a + n] for a in starts]

    @property
    def worst_place(self) -> pd.Series:
        """Where the local voltage exceeds that of the terminal most: the longest way out of the cell."""
        import pandas as pd

        areas = self.samples[self.samples["part"] != "edge"]
        row = areas.iloc[int(np.argmax(areas["local_voltage_V"].to_numpy()))]
        return pd.Series({
            "part": row["part"],
            "x_mm": 0.5 * (row["x_min_mm"] + row["x_max_mm"]),
            "y_mm": 0.5 * (row["y_min_mm"] + row["y_max_mm"]),
            "local_voltage_V": row["local_voltage_V"],
            "above_terminal_mV": 1e3 * (row["local_voltage_V"] - self.voltage_V),
        }, name="worst place")  # fmt: skip

    def __str__(self) -> str:
        return (
            f"{self.voltage_V:.5g} V, {self.current_A:.5g} A ({self.current_mA_per_cm2:.5g} mA/cm²), "
            f"{self.power_mW:.5g} mW ({self.power_mW_per_cm2:.5g} mW/cm²)"
        )

    __repr__ = __str__
