"""A solution: fields and the numbers drawn from them."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C
from ..errors import Complaints
from ..units import MA
from .ledger import Ledger, make_ledger

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from ..transport.generation import Optics
    from ..transport.newton import Outcome
    from ..transport.problem import Problem
    from ..transport.state import SolvedState
    from .uncertainty import Uncertainty


@dataclass(frozen=True, eq=False)
class Solution:
    """A solved excess-carrier problem.

    Parameters
    ----------
    state : SolvedState
    ledger : Ledger
        Where the generated carriers went, mA/cm² of cell area.
    warnings : tuple of str
        Where the model's assumptions are strained.
    uncertainty : Uncertainty, optional
        Half widths of the error bars by name; None where no target was asked for.
    """

    state: SolvedState
    ledger: Ledger
    warnings: tuple[str, ...] = ()
    uncertainty: Uncertainty | None = None

    @property
    def problem(self) -> Problem:
        """The problem solved."""
        return self.state.system.problem

    @property
    def main_field(self) -> str:
        """The nodal field that a picture shows by default."""
        return "excess_density_per_cm3"

    @property
    def outcome(self) -> Outcome:
        """How the solution was reached."""
        return self.state.outcome

    @property
    def voltage_V(self) -> Mapping[str, float]:
        """Forward bias of every collecting terminal."""
        return self.state.voltages_V

    @property
    def optics(self) -> Optics:
        """Where the photons went, mA/cm²; incident is the sum of the other currents."""
        return self.state.system.optics

    @property
    def collected_mA_per_cm2(self) -> Mapping[str, float]:
        """Carriers collected by every terminal on a junction, positive; mA/cm² of cell area."""
        return {name: v for (kind, name), v in self.ledger.rows.items() if kind == "terminal"}

    @property
    def collection_efficiency_percent(self) -> float:
        """Minority carriers collected at all terminals over generated; NaN without generation."""
        generated = self.ledger.generated_mA_per_cm2
        collected = sum(v for (kind, _), v in self.ledger.rows.items() if kind == "terminal")
        return 100 * collected / generated if generated != 0 else math.nan

    @property
    def excess_density_per_cm3(self) -> NDArray[np.float64]:
        """Δn at the nodes (`problem.space.points_cm`), shape (n,)."""
        return self.state.dn

    @cached_property
    def nodal_fields(self) -> dict[str, NDArray[np.float64]]:
        """Fields at the nodes, by name with unit, each of shape (n,).

        Excess, electron and hole density, recombination and generation rate (the rates averaged over the cells at a
        node), and the splitting of the quasi-Fermi potentials (NaN where np ≤ 0).
        """
        from .fields import nodal_fields

        return nodal_fields(self.state)

    @cached_property
    def carrier_flux_mA_per_cm2(self) -> NDArray[np.float64]:
        """−q Γ, the current equivalent of the carrier flux towards sinks, cell averages, shape (dimension, n_cells)."""
        dx = self.problem.space.bulk.dx
        mean = (self.state.minority_flux() * dx).sum(axis=-1) / dx.sum(axis=-1)
        return np.asarray(-ELEMENTARY_CHARGE_C * mean / MA)

    @cached_property
    def diffusion_length_um(self) -> NDArray[np.float64]:
        """√(D Δn / R) as cell averages at the solved density, shape (n_cells,); infinite without recombination."""
        from .fields import diffusion_length_um

        return diffusion_length_um(self.state)

    def at(self, points_um: Any, field: str = "excess_density_per_cm3") -> NDArray[np.float64]:
        """A nodal field at points.

        Parameters
        ----------
        points_um : array (dimension,) or (dimension, n)
            (x, z) in 2-D, (x, y, z) in 3-D; z from the rear.
        field : str
            One of `nodal_fields`.

        Returns
        -------
        (n,) array

        Raises
        ------
        InputError
            A point outside of the mesh, or an unknown field.
        """
        from .fields import values_at

        return values_at(self.problem, self._field(field), np.asarray(points_um, dtype=float))

    def along_line(
        self,
        start_um: Sequence[float],
        end_um: Sequence[float],
        points: int = 101,
        field: str = "excess_density_per_cm3",
    ) -> pd.DataFrame:
        """A nodal field along a straight line.

        Parameters
        ----------
        start_um, end_um : (x, z) or (x, y, z)
        points : int
        field : str

        Returns
        -------
        pandas.DataFrame
            Columns distance_um, the coordinates, and the field.
        """
        import pandas as pd

        a, b = np.asarray(start_um, dtype=float), np.asarray(end_um, dtype=float)
        share = np.linspace(0, 1, points)
        where = a[:, None] + (b - a)[:, None] * share
        names = ["x_um", "z_um"] if a.size == 2 else ["x_um", "y_um", "z_um"]
        columns = {"distance_um": share * np.linalg.norm(b - a)} | dict(zip(names, where, strict=True))
        return pd.DataFrame(columns | {field: self.at(where, field)})

    def _field(self, name: str) -> NDArray[np.float64]:
        problems = Complaints("field")
        problems.unless(name in self.nodal_fields, f"field {name!r}", f"one of {', '.join(self.nodal_fields)}")
        problems.raise_if_any()
        return self.nodal_fields[name]

    @property
    def injection_ratio(self) -> float:
        """Largest Δn over the equilibrium majority density."""
        eq = self.problem.equilibrium
        return float(np.abs(self.state.dn).max() / max(eq.n0, eq.p0))

    @property
    def summary(self) -> pd.Series:
        """Headline numbers as one row."""
        import pandas as pd

        o = self.optics
        values = {"generated_mA_per_cm2": self.ledger.generated_mA_per_cm2, "shaded_mA_per_cm2": o.shaded}
        values |= {f"collected_{t}_mA_per_cm2": v for t, v in self.collected_mA_per_cm2.items()}
        values |= {"unknowns": self.problem.space.size, "ledger_residual": self.ledger.relative_residual}
        values |= {f"error_bar_{name}": bar for name, bar in (self.uncertainty or {}).items()}
        return pd.Series(values, name="solution")

    def __repr__(self) -> str:
        bias = ", ".join(f"{t} at {v:g} V" for t, v in self.voltage_V.items())
        head = f"Solution: {self.outcome}; {self.problem.space.size} unknowns" + (f"; {bias}" if bias else "")
        bars = str(self.uncertainty) if self.uncertainty else "(no error bars: state target_error_percent)"
        return "\n".join([head, str(self.ledger), bars, *(f"note: {w}" for w in self.warnings)])

    @property
    def headline(self) -> dict[str, float]:
        """The numbers that carry error bars: collected currents; without a terminal the mean excess density."""
        collected = {f"collected_{t}_mA_per_cm2": v for t, v in self.collected_mA_per_cm2.items()}
        if collected:
            return collected
        bulk = self.problem.space.bulk
        mean = (bulk.values(self.state.dn) * bulk.dx).sum() / bulk.dx.sum()
        return {"mean_excess_density_per_cm3": float(mean)}

    def _repr_html_(self) -> str:
        notes = "".join(f"<p><em>{w}</em></p>" for w in self.warnings)
        return f"<p>{self.outcome}; {self.problem.space.size} unknowns</p>{self.ledger._repr_html_()}{notes}"


def finish(state: SolvedState, warnings: tuple[str, ...]) -> Solution:
    """Close the ledger of a state and wrap it up.

    Raises
    ------
    BalanceError
        The ledger does not close.
    """
    return Solution(state, make_ledger(state), warnings)
