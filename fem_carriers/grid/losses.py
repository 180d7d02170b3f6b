"""The power budget of a cell with its grid.

Every place could deliver the unshaded cell's largest power. From that are lost: what the local voltage misses of the
maximum (``away from maximum power``), shading, recombination under metal and at edges and other laws of parts at the
local voltage, and xᵀ K x in every conductor. What is left is V I; the equations make the sum exact.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..errors import Complaints

if TYPE_CHECKING:
    import pandas as pd

    from .cell_current import CellCurrent
    from .solve import GridState

RESISTIVE = ("sheet", "contact", "finger", "busbar", "joint", "wire", "terminal")


@dataclass(frozen=True, eq=False)
class GridLosses:
    """Power by component, of the whole cell.

    Parameters
    ----------
    rows : dict of (kind, name) to float
        mW. Kinds: "output"; "resistance" with names like "front: finger"; "optical"; "recombination"; "operation".
    available_mW : float
        Cell area × the largest power of the unshaded cell.
    inside_unit_cell : dict of str to float
        mW: losses that the unit cell's curve contains already, where it tells them; no part of the sum.
    area_cm2, incident_mW_per_cm2, current_A : float
    """

    rows: dict[tuple[str, str], float]
    available_mW: float
    inside_unit_cell: dict[str, float]
    area_cm2: float
    incident_mW_per_cm2: float
    current_A: float

    @property
    def misclosure_mW(self) -> float:
        """Available less everything accounted for."""
        return self.available_mW - sum(self.rows.values())

    @property
    def output_mW(self) -> float:
        """V I."""
        return self.rows["output", "terminal"]

    def sum_of(self, kind: str) -> float:
        """Sum over a kind, mW."""
        return sum(v for (k, _), v in self.rows.items() if k == kind)

    @property
    def series_resistance_ohm_cm2(self) -> dict[str, float]:
        """Power in each conductor over the square of the terminal current, times the cell's area.

        Raises
        ------
        InputError
            At open circuit there is no current to refer to.
        """
        problems = Complaints("series resistance")
        small = 1e-6 * self.available_mW * 1e-3
        problems.unless(abs(self.current_A) > small, f"a current of {self.current_A:g} A", "a voltage with current")
        problems.raise_if_any()
        parts = {name: value for (kind, name), value in self.rows.items() if kind == "resistance"}
        return {name: 1e-3 * value / self.current_A**2 * self.area_cm2 for name, value in parts.items()}

    @property
    def table(self) -> pd.DataFrame:
        """power_mW, power_mW_per_cm2 and, where the incident power is known, percent_absolute."""
        import pandas as pd

        lines = [("available", "unshaded cell at its maximum power", self.available_mW)]
        lines += [(kind, name, value) for (kind, name), value in self.rows.items()]
        lines += [("misclosure", "", self.misclosure_mW)]
        lines += [("inside the unit cell", name, value) for name, value in self.inside_unit_cell.items()]
        table = pd.DataFrame(lines, columns=["kind", "name", "power_mW"]).set_index(["kind", "name"])
        table["power_mW_per_cm2"] = table["power_mW"] / self.area_cm2
        if self.incident_mW_per_cm2 > 0:
            table["percent_absolute"] = 100 * table["power_mW_per_cm2"] / self.incident_mW_per_cm2
        return table

    def __str__(self) -> str:
        return str(self.table.to_string(float_format="{:.5g}".format))

    def _repr_html_(self) -> str:
        return str(self.table.to_html(float_format="{:.5g}".format))


def grid_losses(state: GridState, current: CellCurrent, area_cm2: float, repeats: int) -> GridLosses:
    """Budget of a solved grid.

    Parameters
    ----------
    state : GridState
    current : CellCurrent
        The law of the unshaded cell.
    area_cm2 : float
        Of the whole cell.
    repeats : int
        How often the solved piece makes up the cell.
    """
    to_mW = 1e3 * repeats
    rows = {("output", "terminal"): state.voltage_V * state.current_A * to_mW}
    for part in sorted(state.circuit.parts, key=lambda p: RESISTIVE.index(p.kind)):
        x = state.potentials
        label = f"{part.name}: {part.kind}" if part.kind not in ("joint", "terminal") else f"{part.kind}: {part.name}"
        rows["resistance", label] = float(x @ (part.K @ x)) * to_mW
    feeding = 0.0
    for source, u in zip(state.circuit.sources, state.local_voltages, strict=True):
        powers = [float(source.weight @ (law(u)[0] * u)) * to_mW for _, law in source.laws]
        feeding += powers[0]
        for (name, _), before, after in zip(source.laws[1:], powers[:-1], powers[1:], strict=True):
            key = _kind(name), name
            rows[key] = rows.get(key, 0.0) + before - after
    available = area_cm2 * current.maximum_power_mW_per_cm2
    rows["operation", "away from maximum power"] = available - feeding
    inside = _inside_unit_cell(state, current, to_mW)
    return GridLosses(rows, available, inside, area_cm2, current.incident_power_mW_per_cm2, state.current_A * repeats)


def _kind(name: str) -> str:
    if name.startswith("shading"):
        return "optical"
    return "recombination" if "recombination" in name else "region"


def _inside_unit_cell(state: GridState, current: CellCurrent, to_mW: float) -> dict[str, float]:
    """The unit cell's own losses at the local voltages, over the lit parts."""
    found = dict.fromkeys(current.parts, 0.0)
    for source, u in zip(state.circuit.sources, state.local_voltages, strict=True):
        if source.name == "lit":
            for name, (voltage, power) in current.parts.items():
                found[name] += float(source.weight @ np.interp(u, voltage, power)) * 1e-3 * to_mW
    return found
