"""From a solution to the columns of a table."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from ..errors import Complaints

if TYPE_CHECKING:
    import pandas as pd

    from ..analysis.curve import CurrentVoltage
    from ..analysis.ledger import Ledger
    from ..analysis.solution import Solution
    from ..cell.unit_cell import UnitCell

TERMINAL_VALUES = ("cell_current_mA_per_cm2", "cell_voltage_V", "power_mW_per_cm2")


def collected_current(
    cell: UnitCell,
    first_step_um: float | None = None,
    growth: float | None = None,
    target_error_percent: float | None = None,
) -> dict[str, float]:
    """Solve the excess-carrier form of a cell at 0 V, and say where photons and carriers went.

    Parameters
    ----------
    cell : UnitCell
    first_step_um, growth, target_error_percent : float, optional
        As for `solve_excess`.

    Returns
    -------
    dict of str to float
        See `solution_columns`.

    Raises
    ------
    InputError, MeshError, SolverError
    """
    from ..analysis.solve import solve_excess

    options = {"first_step_um": first_step_um, "growth": growth, "target_error_percent": target_error_percent}
    return solution_columns(solve_excess(cell, **options, progress=False))  # type: ignore[arg-type]


def solution_columns(solution: Solution) -> dict[str, float]:
    """Headline numbers of a solution by column name.

    incident = shaded + reflected + escaped + parasitic + generated, generated = Σ collected + Σ lost; all in mA/cm² of
    cell area.

    Parameters
    ----------
    solution : Solution

    Returns
    -------
    dict of str to float
        Light; collected per terminal; lost per bulk channel (``lost_base_Auger_mA_per_cm2``) and surface
        (``lost_front_finger_mA_per_cm2``); collection efficiency, error bars, injection ratio, unknowns, ledger
        residual.
    """
    ledger, optics = solution.ledger, solution.optics
    columns = {
        f"{name}_mA_per_cm2": getattr(optics, name)
        for name in ("incident", "shaded", "reflected", "escaped", "parasitic")
    }
    columns |= {"generated_mA_per_cm2": ledger.generated_mA_per_cm2} | _ledger_columns(ledger)
    collected = sum(v for (kind, _), v in ledger.rows.items() if kind == "terminal")
    generated = ledger.generated_mA_per_cm2
    columns["collection_efficiency_percent"] = 100 * collected / generated if generated > 0 else math.nan
    columns |= {name: getattr(solution, name) for name in TERMINAL_VALUES if hasattr(solution, name)}
    columns |= {f"error_bar_{name}": bar for name, bar in (solution.uncertainty or {}).items()}
    return columns | {
        "injection_ratio": solution.injection_ratio,
        "unknowns": solution.problem.space.size,
        "ledger_residual": ledger.relative_residual,
    }


def _ledger_columns(ledger: Ledger) -> dict[str, float]:
    order = {"terminal": 0, "bulk": 1, "surface": 2}
    columns: dict[str, float] = {}
    for (kind, name), value in sorted(ledger.rows.items(), key=lambda row: order.get(row[0][0], 3)):
        column = f"{'collected' if kind == 'terminal' else 'lost'}_{_plain(name)}_mA_per_cm2"
        columns[column] = columns.get(column, 0.0) + value
    return columns


def _plain(name: str) -> str:
    """A name fit for a column: "base: Auger" → "base_Auger"."""
    return re.sub(r"\W+", "_", name).strip("_")


def curve_columns(curve: CurrentVoltage) -> dict[str, float]:
    """Headline numbers of a current-voltage curve, and the loss budget at maximum power.

    delivered = output + Σ lost; shaded, reflected, escaped and lost in layers are what that light would have delivered;
    all in mW/cm² of cell area.

    Parameters
    ----------
    curve : CurrentVoltage

    Returns
    -------
    dict of str to float
    """
    columns = {str(name): float(value) for name, value in curve.summary.items()}
    if curve.maximum_power is None:
        return columns
    solution = curve.maximum_power.solution
    losses = solution.losses
    columns |= {"delivered_mW_per_cm2": losses.delivered_mW_per_cm2}
    columns |= {f"{name}_mW_per_cm2": value for name, value in losses.optical.items()}
    for (kind, name), value in losses.rows.items():
        if kind != "output":
            columns[f"lost_{_plain(name)}_mW_per_cm2"] = value
    return columns | {
        "misclosure_mW_per_cm2": losses.misclosure_mW_per_cm2,
        "unknowns": 2 * solution.problem.space.size,
        "ledger_residual": solution.ledger.relative_residual,
    }


def result_columns(result: Any) -> dict[str, float]:
    """Numbers of whatever a computation returned.

    Parameters
    ----------
    result : mapping of str to number, Solution, or anything with a ``summary``

    Returns
    -------
    dict of str to float

    Raises
    ------
    InputError
        Nothing of these, or an entry that is not a number.
    """
    if hasattr(result, "ledger") and hasattr(result, "optics"):
        return solution_columns(result)
    if hasattr(result, "maximum_power"):
        return curve_columns(result)
    numbers = result if isinstance(result, Mapping) else getattr(result, "summary", None)
    problems = Complaints("compute")
    if not problems.unless(hasattr(numbers, "items"), f"a result of type {type(result).__name__}", _ALLOWED):
        problems.raise_if_any()
    columns = {str(name): _number(value) for name, value in numbers.items()}  # type: ignore[union-attr]
    for name, value in columns.items():
        problems.unless(value is not None, f"a result {name!r} that is not a number", _ALLOWED)
    problems.raise_if_any()
    return columns  # type: ignore[return-value]


def with_bars(table: pd.DataFrame, columns: Mapping[str, str]) -> pd.DataFrame:
    """Columns of a table under new headings for print, as "value ± bar" where the table has an error bar.

    Parameters
    ----------
    table : pandas.DataFrame
        Of a sweep.
    columns : mapping of column to heading

    Returns
    -------
    pandas.DataFrame
        Texts where there are error bars, else the values.

    Raises
    ------
    InputError
        A column that is not there.
    """
    import pandas as pd

    from ..analysis.uncertainty import with_bar

    problems = Complaints("with_bars")
    for name in columns:
        problems.unless(name in table, f"column {name!r}", f"one of {', '.join(map(str, table.columns))}")
    problems.raise_if_any()
    shown = {}
    for name, heading in columns.items():
        bars = table.get(f"error_bar_{name}")
        shown[heading] = (
            table[name] if bars is None else [with_bar(*row) for row in zip(table[name], bars, strict=True)]
        )
    return pd.DataFrame(shown, index=table.index)


_ALLOWED = "a mapping of names to numbers, a solution, or an object with a summary"


def _number(value: Any) -> float | None:
    try:
        return value if isinstance(value, int | float) else float(value)
    except (TypeError, ValueError):
        return None
