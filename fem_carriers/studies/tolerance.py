"""What scatter of the inputs does to a design: percentiles, shares of the variance, and the best design on average."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.curve import current_voltage
from ..analysis.uncertainty import with_bar
from ..cell import checks
from ..errors import Complaints
from ..units import split_name
from .sampling import Distribution
from .scales import scales_of
from .search import evaluator
from .spread import DRAWS, SCRAMBLES, Learned, Scatter, learn, learned_from
from .tolerance_tables import percentile_table, share_table

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from ..cell.unit_cell import UnitCell

PERCENTILES = (1.0, 5.0, 25.0, 50.0, 75.0, 95.0, 99.0)


@dataclass(frozen=True, eq=False, repr=False)
class BestDesign:
    """Where a design is best, at nominal inputs or on average.

    Parameters
    ----------
    location, location_bar : mapping of str to float
    value, value_bar : float
    """

    location: Mapping[str, float]
    location_bar: Mapping[str, float]
    value: float
    value_bar: float

    def __str__(self) -> str:
        places = []
        for path, at in self.location.items():
            name, unit = split_name(path)
            places.append(f"{name.replace('_', ' ')} {with_bar(at, self.location_bar[path], 4)} {unit}".rstrip())
        return f"{', '.join(places)}: {with_bar(self.value, self.value_bar, 4)}"

    def __repr__(self) -> str:
        return f"BestDesign({self})"


@dataclass(frozen=True, eq=False, repr=False)
class Tolerance:
    """How a quantity scatters.

    Parameters
    ----------
    quantity : str
    percentiles : pandas.DataFrame
        By ``percentile``: the quantity, its ``error_bar_…``, and the parts of the bar by source.
    shares : pandas.DataFrame
        By ``input``: share of the variance in percent that it makes alone and together with others, and their bar.
    mean, standard_deviation, nominal : float
        Nominal: with every input at its median.
    surrogate_bar, discretisation_bar : float
        Half widths of single values; the second is NaN where the points have no error bars.
    reached : bool
        Whether the surrogate's error is below the discretisation bar, or below 1 % of the standard deviation.
    design : mapping of str to float
        The design that percentiles and shares refer to; empty without designs.
    by_design : pandas.DataFrame or None
        Over the range of one design variable: nominal value, mean, 5th, 50th and 95th percentile.
    best_nominal, best_on_average : BestDesign or None
    table : pandas.DataFrame
        All evaluations.
    scatter, learned
        What scatters, and the surrogate.
    """

    quantity: str
    percentiles: pd.DataFrame
    shares: pd.DataFrame
    mean: float
    standard_deviation: float
    nominal: float
    surrogate_bar: float
    discretisation_bar: float
    reached: bool
    design: Mapping[str, float]
    by_design: pd.DataFrame | None
    best_nominal: BestDesign | None
    best_on_average: BestDesign | None
    table: pd.DataFrame
    scatter: Scatter
    learned: Learned

    def sample(self, count: int = DRAWS, seed: int = 0) -> NDArray[np.float64]:
        """Values of the surrogate for so many samples of the inputs."""
        points = self.scatter.with_design(self.scatter.drawn(count, seed), list(self.design.values()))
        return self.learned.surrogate.mean(points)

    @property
    def outcome(self) -> str:
        """How well the surrogate did, in words."""
        failed = int(self.table[self.quantity].isna().sum())
        unit = split_name(self.quantity)[1]
        text = f"{len(self.table)} evaluations" + (f", {failed} without a result" if failed else "")
        text += f"; the surrogate's error is {self.surrogate_bar:.2g} {unit}".rstrip()
        if math.isfinite(self.discretisation_bar):
            text += f", the error bar of the points {self.discretisation_bar:.2g}"
        wanted = f", above the {self.learned.limit:.2g} aimed at: allow more points"
        return text if self.reached else text + wanted

    def __str__(self) -> str:
        name, unit = split_name(self.quantity)
        rows = self.percentiles
        bars = rows[f"error_bar_{self.quantity}"]
        lines = [f"{name.replace('_', ' ')} {self.mean:.4g} {unit} on average, standard deviation "
                 f"{self.standard_deviation:.2g} {unit}; {self.nominal:.4g} {unit} at nominal inputs"]  # fmt: skip
        lines += [f"  {p:g} % are below {with_bar(v, bar, 4)} {unit}" for p, v, bar in
                  zip(rows["percentile"], rows[self.quantity], bars, strict=True)]  # fmt: skip
        lines += [f"  {row.input}: {row.alone_percent:.0f} % of the variance alone, {row.total_percent:.0f} % in all"
                  for row in self.shares.itertuples()]  # fmt: skip
        if self.best_nominal is not None:
            lines += [f"  best at nominal inputs: {self.best_nominal} {unit}",
                      f"  best on average: {self.best_on_average} {unit}"]  # fmt: skip
        return "\n".join([*lines, f"  {self.outcome}"])

    def __repr__(self) -> str:
        return f"Tolerance\n{self}"


def tolerance(
    source: UnitCell | Callable[..., UnitCell] | pd.DataFrame,
    inputs: Mapping[str, Distribution],
    *,
    quantity: str = "efficiency_percent",
    designs: Mapping[str, Sequence[float]] | None = None,
    compute: Callable[..., Any] = current_voltage,
    percentiles: Sequence[float] = PERCENTILES,
    most_points: int | None = None,
    seed: int = 0,
    processes: int | None = None,
    first_step_um: float | None = None,
    growth: float | None = None,
    target_error_percent: float | None = None,
    progress: bool = True,
    store: str | Path | None = None,
    scheduler: str | None = None,
) -> Tolerance:
    """How a result scatters when the inputs do.

    Quasi-random (Sobol) samples are computed, a smooth surrogate is fitted and refined until its error, estimated by
    leaving points out and by predicting every new round before it counts, is below the error bars of the points (or
    below 1 % of the standard deviation); percentiles and shares of the variance come from many samples of the
    surrogate. Misalignment is the centre of a patch, e.g. ``front.finger.center_um``, in a cell with
    ``symmetry="periodic"``.

    Parameters
    ----------
    source : UnitCell, function that returns one, or table
        As for `sweep`; of a table the points that are there are used.
    inputs : mapping of str to Distribution
        Independent inputs by path or argument: `Uniform`, `LogUniform`, `Normal`, `LogNormal`, `Triangular`, or
        `Measured` values.
    quantity : str
    designs : mapping of str to (lowest, highest), optional
        Inputs to choose, e.g. ``{"pitch_um": (500, 3000)}``: where the quantity is best on average and at nominal
        inputs. Percentiles and shares then hold at the design that is best on average.
    compute : callable
        As for `sweep`; default is `current_voltage`.
    percentiles : sequence of float
    most_points : int, optional
        Most evaluations; default is 64, or 16 per variable from five on.
    seed : int
        Of the samples.
    processes, first_step_um, growth, target_error_percent, progress, store, scheduler
        As for `sweep`. With a store an interrupted run goes on where it ended.

    Returns
    -------
    Tolerance

    Raises
    ------
    InputError
        Inputs that the cell does not have, no distributions, or percentiles outside of 0 to 100.
    SolverError
        Too few points have a result.
    StoreError, SweepInterrupted
        As for `sweep`.
    """
    import pandas as pd

    scatter = scatter_of(inputs, quantity, designs, most_points, seed)
    check_percentiles(percentiles)
    if isinstance(source, pd.DataFrame):
        _check_columns(source, (*scatter.names, quantity))
        return tolerance_of(scatter, source.reset_index(drop=True), percentiles)
    options: dict[str, Any] = {
        "compute": compute, "processes": processes, "first_step_um": first_step_um, "growth": growth,
        "target_error_percent": target_error_percent, "progress": progress, "store": store, "scheduler": scheduler,
    }  # fmt: skip
    return tolerance_of(scatter, learn(scatter, evaluator(source, scatter.names, options)), percentiles)


def scatter_of(inputs: Any, quantity: Any, designs: Any, most_points: Any, seed: Any = 0) -> Scatter:
    """What scatters, checked.

    Raises
    ------
    InputError
    """
    problems = Complaints("tolerance")
    example = '{"front.finger.width_um": fc.Normal(30, 2)}'
    if not problems.unless(isinstance(inputs, Mapping) and bool(inputs), f"inputs = {inputs!r}", f"e.g. {example}"):
        problems.raise_if_any()
    for name, distribution in inputs.items():
        allowed = "a distribution: Uniform, LogUniform, Normal, LogNormal, Triangular or Measured"
        problems.unless(hasattr(distribution, "quantile"), f"{name} = {distribution!r}", allowed)
    problems.unless(isinstance(quantity, str), f"quantity = {quantity!r}", "the name of a result")
    problems.unless(isinstance(seed, int) and seed >= 0, f"seed = {seed!r}", "a whole number from 0")
    twice = set(inputs) & set(designs) if isinstance(designs, Mapping) else set()
    problems.unless(not twice, f"{', '.join(sorted(twice))} among inputs and designs", "each once")
    count = len(inputs) + (len(designs) if isinstance(designs, Mapping) else 0)
    most = max(64, 16 * count) if most_points is None else most_points
    whole = isinstance(most, int) and not isinstance(most, bool) and most >= 8
    problems.unless(whole, f"most_points = {most!r}", "a whole number from 8")
    problems.raise_if_any()
    scales = None if designs is None else scales_of("tolerance: designs", designs)
    return Scatter(quantity, tuple(inputs), tuple(inputs.values()), scales, most, seed)


def tolerance_of(scatter: Scatter, table: pd.DataFrame, percentiles: Sequence[float] = PERCENTILES) -> Tolerance:
    """What the points of a table say.

    Parameters
    ----------
    scatter : Scatter
    table : pandas.DataFrame
        With the variables, the quantity and, where known, its error bars.
    percentiles : sequence of float

    Returns
    -------
    Tolerance
    """
    from .robust import best_designs

    learned = learned_from(scatter, table)
    nominal_best, average_best, by_design = best_designs(scatter, learned) if scatter.designs else (None, None, None)
    design = dict(average_best.location) if average_best else {}
    place = list(design.values())
    draws = [
        learned.surrogate.mean(scatter.with_design(scatter.drawn(DRAWS, scatter.seed + 1 + k), place))
        for k in range(SCRAMBLES)
    ]
    nominal = learned.surrogate.mean(scatter.with_design(scatter.medians[None], place))[0]
    return Tolerance(
        scatter.quantity, percentile_table(scatter, learned, draws, percentiles),
        share_table(scatter, learned, place), float(np.mean(draws)), float(np.std(draws)), float(nominal),
        learned.miss, learned.bar, learned.reached, design, by_design, nominal_best, average_best, table, scatter,
        learned,
    )  # fmt: skip


def check_percentiles(percentiles: Any) -> None:
    """Refuse anything but numbers between 0 and 100."""
    problems = Complaints("tolerance")
    listed = isinstance(percentiles, Sequence) and not isinstance(percentiles, str) and len(percentiles) > 0
    good = listed and all(checks.is_number(p) and 0 < p < 100 for p in percentiles)
    problems.unless(bool(good), f"percentiles = {percentiles!r}", "numbers between 0 and 100", "[5, 50, 95]")
    problems.raise_if_any()


def _check_columns(table: pd.DataFrame, names: Sequence[str]) -> None:
    problems = Complaints("tolerance")
    for name in names:
        problems.unless(name in table, f"column {name!r}", f"one of {', '.join(map(str, table.columns))}")
    problems.raise_if_any()
