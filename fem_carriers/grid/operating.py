"""A cell at its maximum power alone, in a few solutions instead of a whole curve's."""

from __future__ import annotations

from typing import TYPE_CHECKING

from ..errors import Complaints
from .cell_curve import CellSolver
from .grid_curve import maximum_of

if TYPE_CHECKING:
    from .cell_current import CellCurrent
    from .grid_solution import GridSolution
    from .layout import GridLayout

BELOW_V = 0.02
"""Distance of a second starting voltage from the local law's own maximum power."""


def grid_maximum_power(layout: GridLayout, current: CellCurrent, **options: object) -> GridSolution:
    """The cell with its grid at maximum power.

    Parameters
    ----------
    layout, current
        As for `cell_curve`.
    **options
        ``mode``, ``under_metal``, ``regions``, ``light``, ``edge``, ``symmetry``, ``fineness`` of `cell_curve`.

    Returns
    -------
    GridSolution

    Raises
    ------
    InputError
        As `cell_curve`; a dark cell.
    SolverError
        No convergence.
    """
    solver = CellSolver(layout, current, **options)  # type: ignore[arg-type]
    start = current.maximum_power_voltage_V
    problems = Complaints("grid_maximum_power")
    problems.unless(start > 0, f"a cell with {current.jsc_mA_per_cm2:.4g} mA/cm² at 0 V", "a lit cell")
    problems.raise_if_any()
    return maximum_of(solver.at, (start, start - min(BELOW_V, start / 2)))
