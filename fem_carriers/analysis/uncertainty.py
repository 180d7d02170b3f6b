"""Error bars of a result, mesh by mesh, and how they are printed."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True)
class Level:
    """The numbers on one mesh.

    Parameters
    ----------
    unknowns : int
        Per carrier.
    values, bars, scales : mapping of str to float
        Numbers by name with unit; half widths of their error bars, infinite on the first mesh; what a percentage of
        them refers to.
    level : float
        Place of the mesh in its family.
    """

    unknowns: int
    values: Mapping[str, float]
    bars: Mapping[str, float]
    scales: Mapping[str, float]
    level: float = 0.0


@dataclass(frozen=True)
class Uncertainty(Mapping[str, float]):
    """Discretisation errors of a result: a mapping of names to half widths of the error bars.

    The truth of the model, not of the cell, lies within value ± bar: bars say what the mesh costs, nothing about inputs
    or neglected physics.

    Parameters
    ----------
    levels : tuple of Level
        From the coarsest mesh to the one of the result.
    reached : bool
        Whether the error asked for was reached.
    """

    levels: tuple[Level, ...]
    reached: bool = True

    def __getitem__(self, name: str) -> float:
        return self.levels[-1].bars[name]

    def __iter__(self) -> Iterator[str]:
        return iter(self.levels[-1].bars)

    def __len__(self) -> int:
        return len(self.levels[-1].bars)

    @property
    def table(self) -> pd.DataFrame:
        """One row per mesh: unknowns, every number and its ``error_bar_…``."""
        import pandas as pd

        bars = [{f"error_bar_{name}": bar for name, bar in level.bars.items()} for level in self.levels]
        return pd.DataFrame([{"unknowns": v.unknowns, **v.values, **b} for v, b in zip(self.levels, bars, strict=True)])

    def __str__(self) -> str:
        last = self.levels[-1]
        return "\n".join(f"{name} = {with_bar(value, last.bars[name])}" for name, value in last.values.items())


def with_bar(value: float, bar: float | None, digits: int = 5) -> str:
    """A number with its bar, rounded up at the bar's first digit (the second after a 1): "0.6868 ± 0.0003".

    At most six digits of the number are given; without a bar as many as asked for.
    """
    if bar is None or not math.isfinite(bar) or not math.isfinite(value):
        return f"{value:.{digits}g}"
    if value and not 1e-3 <= abs(value) < 1e6:
        tens = math.floor(math.log10(abs(value)))
        return f"({with_bar(value / 10.0**tens, bar / 10.0**tens)})e{tens}"
    sixth = 5 - math.floor(math.log10(abs(value))) if value else 12
    power = math.floor(math.log10(bar)) if bar > 0 else -12
    places = min(max((bar < 2 * 10.0**power) - power, 0), max(sixth, 0), 12)
    rounded = math.ceil(bar * 10**places - 1e-9) / 10**places
    return f"{value:.{places}f} ± {rounded:.{places}f}"
