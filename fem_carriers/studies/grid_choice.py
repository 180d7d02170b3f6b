"""The layout that delivers the most power within limits, how flat the optimum is, and what metal is worth."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.uncertainty import with_bar
from ..errors import Complaints
from ..grid.cell_current import CellCurrent
from ..grid.layout import GridLayout
from ..grid.operating import grid_maximum_power
from ..units import split_name
from .layout_axes import LayoutVariable, layout_variables
from .layout_surface import LayoutSurface

if TYPE_CHECKING:
    import pandas as pd

    from ..grid.grid_solution import GridSolution

PRINTED = ("finger", "busbar", "perimeter")
POWER, BAR = "power_mW", "error_bar_power_mW"
MASSES = ("printed_mass_mg", "wire_mass_mg", "metal_mass_mg")
MORE = 1e-6
"""A limit holds the best layout back if without it there is more power by this share."""


@dataclass(frozen=True, eq=False, repr=False)
class LayoutChoice:
    """The best layout, and what is nearly as good.

    Parameters
    ----------
    best : dict of str to float
        Variables, and the results solved there (columns of `table`).
    solution : GridSolution
        At maximum power of the best layout.
    table : pandas.DataFrame
        Every solved layout: variables, power_mW, power_mW_per_cm2, efficiency_percent, masses in mg, and
        error_bar_power_mW (what the curves of the unit cells leave open, and what interpolation between layouts does).
    flat : pandas.DataFrame
        By variable: best, and the range (from, to) in which a layout within `within_percent` of the best power exists
        when the other variables are chosen for it.
    within_percent : float
    binding : tuple of str
        What holds the best layout back: ends of ranges, limits.
    trade : pandas.DataFrame
        The most power for every mass (see `best_layout`), the layout that gives it, and gain_mW_per_mg, the power that
        one more milligram gives.
    traded : str
        The column of that mass.
    interpolation_percent : float
        Difference between interpolated and solved power at the best layout.
    surface : LayoutSurface
        The interpolated results.
    """

    best: dict[str, float]
    solution: GridSolution
    table: pd.DataFrame
    flat: pd.DataFrame
    within_percent: float
    binding: tuple[str, ...]
    trade: pd.DataFrame
    traded: str
    interpolation_percent: float
    surface: LayoutSurface

    def by(self, variable: str) -> pd.DataFrame:
        """The best layout for every value of one variable, the others chosen for it.

        Parameters
        ----------
        variable : str

        Returns
        -------
        pandas.DataFrame
            Variables, power, masses, below_best_percent, and told_apart: whether its power differs from the best by
            more than both error bars.
        """
        import pandas as pd

        problems = Complaints("by")
        names = [v.name for v in self.surface.variables]
        problems.unless(variable in names, f"variable {variable!r}", f"one of {', '.join(names)}")
        problems.raise_if_any()
        table = pd.DataFrame(self.surface.best_by(variable))
        table["below_best_percent"] = 100 * (1 - table[POWER] / table[POWER].max())
        bar = table[BAR] + table[BAR].iloc[int(table[POWER].argmax())]
        table["told_apart"] = table[POWER].max() - table[POWER] > bar
        return table

    def compared(self, one: Mapping[str, float], other: Mapping[str, float]) -> str:
        """In words, whether two layouts can be told apart within their error bars.

        Parameters
        ----------
        one, other : mapping of str to float
            Rows of `table`, of `by` or of `trade`.
        """
        better, worse = (one, other) if one[POWER] >= other[POWER] else (other, one)
        gap, bar = better[POWER] - worse[POWER], better[BAR] + worse[BAR]
        told = f"deliver {with_bar(better[POWER], better[BAR])} and {with_bar(worse[POWER], worse[BAR])} mW: "
        names = [f"({self.in_words(row)})" for row in (better, worse)]
        if not np.isfinite(bar):
            return f"{names[0]} and {names[1]} {told}{gap:.3g} mW apart; without error bars nobody knows"
        if gap > bar:
            return f"{names[0]} and {names[1]} {told}{gap:.3g} mW apart, more than the error bars"
        return f"{names[0]} and {names[1]} {told}they cannot be told apart within the error bars"

    def in_words(self, row: Mapping[str, float]) -> str:
        """The variables of a row of one of the tables as text."""
        return ", ".join(_in_words(v, row[v.name]) for v in self.surface.variables)

    def __str__(self) -> str:
        best, w = self.best, self.within_percent
        masses = f"{best['printed_mass_mg']:.4g} mg printed"
        masses += f", {best['wire_mass_mg']:.4g} mg of wire" if best["wire_mass_mg"] > 0 else ""
        lines = [f"best: {self.in_words(best)}", f"power {with_bar(best[POWER], best[BAR])} mW, {masses}"]
        for k, v in enumerate(self.surface.variables):
            row = {end: float(self.flat[end].to_numpy()[k]) for end in ("from", "to")}
            ends = " to ".join(f"{v.typed(row[end]):g}" if v.whole else f"{row[end]:.3g}" for end in row)
            lines.append(f"within {w:g} % of that power: {_words(v.name)} {ends} {split_name(v.name)[1]}".rstrip())
        lines.append(f"held back by: {'; '.join(self.binding) or 'nothing but the physics'}")
        return "\n".join(lines)

    def __repr__(self) -> str:
        return f"LayoutChoice among {len(self.table)} solved layouts\n{self}"


def best_layout(
    layout: Callable[..., GridLayout],
    current: CellCurrent | Callable[[float, float], CellCurrent],
    variables: Mapping[str, tuple[float, float] | range | Sequence[float]],
    *,
    limits: Mapping[str, float] | None = None,
    within_percent: float = 0.1,
    trade: str = "printed_mass_mg",
    nodes: int = 5,
    **options: Any,
) -> LayoutChoice:
    """Find the layout with the largest maximum power.

    A few values of every range are solved in all combinations; power and masses between them are interpolated by
    polynomials (in logarithms). Whole numbers are enumerated, continuous variables optimised within their ranges and
    the limits by sequential quadratic programming; the best layout is then solved itself.

    Parameters
    ----------
    layout : function of the variables that returns a GridLayout
    current : CellCurrent, or function (pitch_um, width_um)
        J(u). A function, such as of `unit_cell_laws`, is called with the pitch and the mean width of the fingers.
    variables : mapping of str to (low, high), range or list
        A pair is a continuous range, a range one of whole numbers between which results are smooth, a list stands for
        values that are solved one by one. The low end of a width is the least that can be printed.
    limits : mapping of str to float, optional
        Largest value of columns of the table, e.g. ``{"printed_mass_mg": 80}``.
    within_percent : float
        How much less power counts as equally good.
    trade : {"printed_mass_mg", "wire_mass_mg", "metal_mass_mg"}
        Mass of the trade curve; a limit on it does not apply there.
    nodes : int
        Values of each range that are solved.
    **options
        ``mode``, ``under_metal``, … of `cell_curve`.

    Returns
    -------
    LayoutChoice

    Raises
    ------
    InputError
        Unknown names, no layout within the limits, or a layout that is refused; a note tells which.
    """
    import pandas as pd

    axes = layout_variables(variables, nodes)
    limits = {} if limits is None else dict(limits)
    _check(layout, current, limits, within_percent, trade)
    solve = _Solver(layout, current, options)
    rows = [solve(v, axes)[0] for v in itertools.product(*(axis.nodes for axis in axes))]
    surface = LayoutSurface(tuple(axes), rows, limits)
    place = surface.best()
    problems = Complaints("best_layout")
    given = ", ".join(f"{name} at most {limit:g}" for name, limit in limits.items())
    problems.unless(place is not None, f"no layout with {given}", "wider ranges or looser limits")
    problems.raise_if_any()
    assert place is not None
    best, solution = solve([place[axis.name] for axis in axes], axes)
    gap = best[POWER] - place[POWER]
    best[BAR] += abs(gap)
    return _choice(surface.corrected(gap), best, solution, pd.DataFrame(rows), within_percent, trade)


def _choice(
    surface: LayoutSurface, best: dict[str, float], solution: GridSolution, table: pd.DataFrame, within: float,
    trade: str,
) -> LayoutChoice:  # fmt: skip
    import pandas as pd

    flat = pd.DataFrame(surface.flat(best[POWER] * (1 - within / 100)), index=["from", "to"]).T
    flat.insert(0, "best", [best[axis.name] for axis in surface.variables])
    curve = pd.DataFrame(surface.trade(trade))
    curve["gain_mW_per_mg"] = np.gradient(curve[POWER], curve[trade]) if len(curve) > 1 else np.nan
    gap = 100 * surface.bar_mW / best[POWER]
    return LayoutChoice(best, solution, table, flat, within, _binding(surface, best), curve, trade, gap, surface)


class _Solver:
    """Solves one layout; a refusal tells which it was."""

    def __init__(self, layout: Callable[..., GridLayout], current: Any, options: Mapping[str, Any]) -> None:
        self.layout, self.current, self.options = layout, current, options

    def __call__(self, values: Sequence[float], axes: Sequence[LayoutVariable]) -> tuple[dict[str, float], Any]:
        stated = {axis.name: axis.typed(v) for axis, v in zip(axes, values, strict=True)}
        try:
            built = self.layout(**stated)
            law = self.current if isinstance(self.current, CellCurrent) else self.current(*_fingers(built))
            solution = grid_maximum_power(built, law, **self.options)
        except Exception as error:
            error.add_note("in the layout with " + ", ".join(f"{n} = {v:g}" for n, v in stated.items()))
            raise
        return {**stated, **_numbers(solution, law)}, solution


def _fingers(layout: GridLayout) -> tuple[float, float]:
    """Pitch and mean width of the fingers, of the front grid first."""
    found = [grid.fingers for grid in layout.grids.values() if grid.fingers is not None]
    problems = Complaints("best_layout")
    problems.unless(bool(found), "a layout without fingers", "fingers, or a CellCurrent of its own")
    problems.raise_if_any()
    width, tip = found[0].metal.width_um, found[0].tip_width_um
    return found[0].pitch_um, width if tip is None else 0.5 * (width + tip)


def _numbers(solution: GridSolution, law: CellCurrent) -> dict[str, float]:
    mass = solution.metal_mass_mg
    printed, wire = (sum(mass.get(kind, 0.0) for kind in kinds) for kinds in (PRINTED, ("wire",)))
    share = float(getattr(law, "error_bar_percent", 0.0))
    numbers = {
        POWER: solution.power_mW, "power_mW_per_cm2": solution.power_mW_per_cm2, "printed_mass_mg": printed,
        "wire_mass_mg": wire, "metal_mass_mg": printed + wire, BAR: solution.power_mW * share / 100,
    }  # fmt: skip
    if law.incident_power_mW_per_cm2 > 0:
        numbers["efficiency_percent"] = 100 * solution.power_mW_per_cm2 / law.incident_power_mW_per_cm2
    return numbers


def _binding(surface: LayoutSurface, best: Mapping[str, float]) -> tuple[str, ...]:
    """Ends of ranges at the best layout, and limits without which there would be more power."""
    found = []
    for v in surface.variables:
        for end, word in ((v.places[0], "low"), (v.places[-1], "high")):
            if v.places.size > 1 and abs(np.log(best[v.name] / end)) < 1e-3:
                found.append(f"{_in_words(v, end)}, the {word} end of its range")
    for name, limit in surface.limits.items():
        free = surface.best({other: value for other, value in surface.limits.items() if other != name})
        if free is not None and free[POWER] > best[POWER] * (1 + MORE):
            found.append(f"{_words(name)} of {limit:g} {split_name(name)[1]}, the limit")
    return tuple(found)


def _words(name: str) -> str:
    return split_name(name)[0].replace("_", " ")


def _in_words(variable: LayoutVariable, value: float) -> str:
    name, unit = _words(variable.name), split_name(variable.name)[1]
    return f"{variable.typed(value)} {name}" if variable.whole and not unit else f"{name} {value:.4g} {unit}".rstrip()


def _check(layout: Any, current: Any, limits: Mapping[str, float], within_percent: float, trade: str) -> None:
    problems = Complaints("best_layout")
    problems.unless(callable(layout), f"layout = {layout!r}", "a function of the variables that returns a GridLayout")
    good = isinstance(current, CellCurrent) or callable(current)
    problems.unless(good, f"current = {current!r}", "a CellCurrent or a function (pitch_um, width_um)")
    for name, limit in limits.items():
        problems.unless(name in MASSES, f"a limit on {name!r}", f"one of {', '.join(MASSES)}")
        problems.unless(limit > 0, f"limits[{name!r}] = {limit!r}", "a number above 0")
    problems.unless(within_percent > 0, f"within_percent = {within_percent!r}", "a number above 0")
    problems.unless(trade in MASSES, f"trade = {trade!r}", f"one of {', '.join(MASSES)}")
    problems.raise_if_any()
