"""Gradients of a result with respect to the numbers of its cell, and what one percent more of each is worth."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.figures import Figures, figures_of
from ..cell import checks
from ..errors import Complaints, FemCarriersError
from ..transport.moved import described_by, with_cell
from .paths import changed, check_paths, known_paths, value_at

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from ..cell.unit_cell import UnitCell

STEP = 3e-4
"""Of an input, relative. Only assemblies at held unknowns are differenced, by a rule of fourth order."""
RULE = ((-2, 1 / 12), (-1, -2 / 3), (1, 2 / 3), (2, -1 / 12))
FORWARD_RULE = ((0, -11 / 6), (1, 3.0), (2, -3 / 2), (3, 1 / 3))
STEPS_AT_ZERO = {
    "J0_fA_per_cm2": 1e-2, "srv_cm_per_s": 1e-2, "J02_nA_per_cm2": 1e-3, "J02_edge_nA_per_cm": 1e-3,
    "reflectance": 1e-4, "absorbing_depth_um": 1e-4, "center_um": 1e-3, "center_x_um": 1e-3, "center_y_um": 1e-3,
    "suns": 1e-4, "flux_per_cm2_s": 1e13, "rate_per_cm3_s": 1e14,
}  # fmt: skip
"""Steps for inputs that are 0 now, by the end of their path."""
STEPWISE = ("lowest_nm", "highest_nm")
"""The spectrum is a table, cut between two of its rows."""


def gradients(result: Any, figure: str, paths: Sequence[str] | None = None) -> pd.DataFrame:
    """Derivatives of a figure with respect to the numbers of the cell, from one adjoint solve.

    The derivative is that of the discrete figure: on one mesh, whose lines move with the outlines they follow.

    Parameters
    ----------
    result : CurrentVoltage, BipolarSolution or Solution
        Of a problem made from a unit cell.
    figure : str
        A curve has jsc_mA_per_cm2, voc_V, fill_factor_percent, maximum_power_mW_per_cm2 and efficiency_percent (three
        solves for the fill factor); a solution collected_<terminal>_mA_per_cm2.
    paths : sequence of str, optional
        Inputs as for `changed`; default are all that hold a number other than 0.

    Returns
    -------
    pandas.DataFrame
        One row per input: input (its path), value, derivative_<figure> (per unit of the input, the unit at the end of
        its path), change_<figure> (for 1 % more of it), note (why there is no derivative).

    Raises
    ------
    InputError
        Unknown figure or path; a result without a unit cell.
    """
    import pandas as pd

    figures, cell = _prepared(result, [figure])
    rows = []
    for path in _chosen(cell, paths):
        value, slopes, note = _row(figures, cell, path, [figure])
        rows.append((path, value, slopes[figure], 0.01 * value * slopes[figure], note))
    return pd.DataFrame(rows, columns=["input", "value", f"derivative_{figure}", f"change_{figure}", "note"])


def sensitivity_table(result: Any, paths: Sequence[str] | None = None, sort_by: str | None = None) -> pd.DataFrame:
    """What 1 % more of every number of the cell changes, the most important one first.

    Parameters
    ----------
    result : CurrentVoltage, BipolarSolution or Solution
    paths : sequence of str, optional
        As for `gradients`.
    sort_by : str, optional
        A figure; default is the efficiency of a curve, or the first figure there is.

    Returns
    -------
    pandas.DataFrame
        input, value, change_<figure> of every figure in its own unit (percent of an efficiency are absolute), in_words
        (of the figure sorted by), note. Inputs without a derivative come last.

    Raises
    ------
    InputError
    """
    import pandas as pd

    figures, cell = _prepared(result, [] if sort_by is None else [sort_by])
    names = list(figures.combine)
    leading = sort_by or ("efficiency_percent" if "efficiency_percent" in names else names[-1])
    rows = []
    for path in _chosen(cell, paths):
        value, slopes, note = _row(figures, cell, path, names)
        changes = {f"change_{name}": 0.01 * value * slopes[name] for name in names}
        words = in_words(path, leading, changes[f"change_{leading}"])
        rows.append({"input": path, "value": value} | changes | {"in_words": words, "note": note})
    table = pd.DataFrame(rows)
    order = table[f"change_{leading}"].abs().sort_values(ascending=False, kind="stable").index
    return table.loc[order].reset_index(drop=True)


def in_words(path: str, figure: str, change: float) -> str:
    """E.g. "1 % more front layer sheet resistance costs 0.012 % absolute of efficiency"."""
    from ..units import split_name

    if not math.isfinite(change):
        return ""
    name, unit = split_name(figure)
    absolute = f"{unit} absolute" if unit == "%" else unit
    verb = "changes nothing" if change == 0 else ("gains" if change > 0 else "costs")
    size = "" if change == 0 else f" {abs(change):.2g} {absolute}"
    return f"1 % more {input_words(path)} {verb}{size} of {name.replace('_', ' ')}"


def input_words(path: str) -> str:
    """A path in words: "front finger contact resistivity"."""
    from ..units import split_name

    text = split_name(path.removeprefix("inner.").removeprefix("light.0."))[0].replace(".contact.contact_", ".contact_")
    text = text.replace("_", " ").replace(".", " ")
    return re.sub(r"\bsrv\b", "surface recombination velocity", text)


def _prepared(result: Any, wanted: list[str]) -> tuple[Figures, UnitCell]:
    figures = figures_of(result)
    problems = Complaints("gradients")
    for name in wanted:
        problems.unless(name in figures.combine, f"figure {name!r}", f"one of {', '.join(figures.combine)}")
    problems.raise_if_any()
    return figures, described_by(figures.problem)


def _chosen(cell: UnitCell, paths: Sequence[str] | None) -> list[str]:
    if paths is not None:
        check_paths(cell, paths)
        return list(paths)
    named = [path for path in known_paths(cell) if not path.endswith(STEPWISE)]
    return [path for path in named if _is_plain(value_at(cell, path)) and value_at(cell, path) != 0]


def _is_plain(value: Any) -> bool:
    return bool(checks.is_number(value) and math.isfinite(value))


def _row(figures: Figures, cell: UnitCell, path: str, names: list[str]) -> tuple[float, Mapping[str, float], str]:
    """Value of an input, derivatives of figures, and why there are none."""
    value, nothing = value_at(cell, path), dict.fromkeys(names, math.nan)
    if not _is_plain(value):
        return math.nan, nothing, "no finite number"
    if path.endswith(STEPWISE):
        return float(value), nothing, "the spectrum is a table with steps"
    chosen = figures.needed(names)
    try:
        parts = _slopes(figures, cell, path, float(value), chosen)
    except FemCarriersError as error:
        return float(value), nothing, f"cannot change alone: {error}".replace("\n", " ")
    return float(value), {name: figures.combine[name](parts[:-1], float(parts[-1])) for name in names}, ""


def _slopes(figures: Figures, cell: UnitCell, path: str, value: float, chosen: list[int]) -> NDArray[np.float64]:
    """Derivatives of the held currents and of the relative incident power by an input."""

    def at(new: float) -> NDArray[np.float64]:
        other = changed(cell, {path: new})
        return figures.parts(with_cell(figures.problem, cell, other), chosen)

    def difference(rule: Any, step: float) -> NDArray[np.float64]:
        return np.asarray(sum(weight * at(value + count * step) for count, weight in rule) / step)

    if value != 0:
        return difference(RULE, STEP * abs(value))
    step = STEPS_AT_ZERO.get(path.rpartition(".")[2], 1e-6)
    return difference(FORWARD_RULE, step)
