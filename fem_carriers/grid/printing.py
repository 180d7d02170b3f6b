"""What a printing process can make: the least width, and how high a line of a given width becomes."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from ..cell import checks
from ..errors import Complaints
from .metal import MetalLine


@dataclass(frozen=True, repr=False)
class Printing:
    """A printing (or plating) process.

    Parameters
    ----------
    least_width_um : float
        Narrower lines are refused.
    height_um : float, sequence of (width_um, height_um), or function of width_um
        Greatest height of a printed line; between the rows of a table by straight lines, beyond its ends the last one.
    resistivity_ohm_cm : float
        Of the metal as it is, pores included.
    shape_factor, density_g_per_cm3
        As for `MetalLine`.
    """

    least_width_um: float
    height_um: float | Sequence[tuple[float, float]] | Callable[[float], float]
    resistivity_ohm_cm: float
    shape_factor: float = 2 / 3
    density_g_per_cm3: float = 10.49

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Printing")
        checks.positive(problems, "least_width_um", self.least_width_um)
        checks.positive(problems, "resistivity_ohm_cm", self.resistivity_ohm_cm)
        if checks.is_number(self.height_um):
            checks.positive(problems, "height_um", self.height_um)
        elif not callable(self.height_um):
            allowed = "a number, rows (width_um, height_um) with rising widths, or a function"
            problems.unless(_is_table(self.height_um), f"height_um = {self.height_um!r}", allowed)
        problems.raise_if_any()

    def height_at_um(self, width_um: float) -> float:
        """Height of a line of this width."""
        if callable(self.height_um):
            return float(self.height_um(width_um))
        if isinstance(self.height_um, int | float):
            return float(self.height_um)
        widths, heights = np.asarray(self.height_um, dtype=float).T
        return float(np.interp(width_um, widths, heights))

    def line(self, width_um: float) -> MetalLine:
        """A printed line of this width.

        Parameters
        ----------
        width_um : float

        Returns
        -------
        MetalLine

        Raises
        ------
        InputError
            Narrower than the process allows.
        """
        problems = Complaints("Printing")
        if checks.positive(problems, "width_um", width_um):
            least = self.least_width_um
            good = width_um >= least * (1 - 1e-9)
            problems.unless(good, f"width_um = {width_um:g}", f"at least {least:g}, the least printable width")
        problems.raise_if_any()
        return MetalLine(
            width_um, self.height_at_um(width_um), self.shape_factor, self.resistivity_ohm_cm,
            density_g_per_cm3=self.density_g_per_cm3,
        )  # fmt: skip


def _is_table(rows: Any) -> bool:
    try:
        table = np.asarray(rows, dtype=float)
    except (TypeError, ValueError):
        return False
    sound = table.ndim == 2 and table.shape[1] == 2 and len(table) >= 1 and bool(np.isfinite(table).all())
    return sound and bool((table > 0).all() and (np.diff(table[:, 0]) > 0).all())
