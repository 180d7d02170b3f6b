"""Metal lines: resistance per length, mass, shading."""

from __future__ import annotations

import math
from dataclasses import dataclass

from ..cell import checks
from ..errors import Complaints
from ..units import UM


@dataclass(frozen=True, repr=False)
class MetalLine:
    """Cross-section and metal of a finger, busbar or wire.

    The line resistance is ρ / (width · height · shape factor), or given.

    Parameters
    ----------
    width_um : float
        Width that touches the cell.
    height_um : float, optional
        Greatest height of the cross-section.
    shape_factor : float
        Area of the cross-section over width × height, at most 1: 2/3 for a parabola, π/4 for a round wire.
    resistivity_ohm_cm : float, optional
        Of the metal as it is, pores included.
    line_resistance_ohm_per_cm : float, optional
        Instead of height and resistivity; 0 is an ideal conductor.
    density_g_per_cm3 : float
        For the metal mass, pores included. Default: silver (CRC Handbook of Chemistry and Physics [from memory]).
    shading_width_um : float, optional
        Width of the light that is lost; default is the width. Less for round wires, whose flanks reflect onto the cell.
    """

    width_um: float
    height_um: float | None = None
    shape_factor: float = 1.0
    resistivity_ohm_cm: float | None = None
    line_resistance_ohm_per_cm: float | None = None
    density_g_per_cm3: float = 10.49
    shading_width_um: float | None = None

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("MetalLine")
        checks.positive(problems, "width_um", self.width_um)
        checks.positive(problems, "shape_factor", self.shape_factor)
        checks.positive(problems, "density_g_per_cm3", self.density_g_per_cm3)
        for name in ("height_um", "resistivity_ohm_cm"):
            if getattr(self, name) is not None:
                checks.positive(problems, name, getattr(self, name))
        for name in ("line_resistance_ohm_per_cm", "shading_width_um"):
            if getattr(self, name) is not None:
                checks.positive(problems, name, getattr(self, name), zero=True)
        if checks.is_number(self.shape_factor):
            problems.unless(
                self.shape_factor <= 1, f"shape_factor = {self.shape_factor}", "at most 1, a full rectangle"
            )
        given = {
            "line_resistance_ohm_per_cm": self.line_resistance_ohm_per_cm,
            "resistivity_ohm_cm with height_um": None if self.height_um is None else self.resistivity_ohm_cm,
        }
        checks.exactly_one(problems, "line resistance", given)
        problems.raise_if_any()

    @classmethod
    def round_wire(
        cls,
        diameter_um: float,
        resistivity_ohm_cm: float,
        density_g_per_cm3: float = 8.96,
        shading_width_um: float | None = None,
    ) -> MetalLine:
        """A round wire; density by default that of copper (CRC Handbook of Chemistry and Physics [from memory]).

        Parameters
        ----------
        diameter_um : float
        resistivity_ohm_cm : float
        density_g_per_cm3 : float
        shading_width_um : float, optional
        """
        return cls(
            diameter_um, diameter_um, math.pi / 4, resistivity_ohm_cm,
            density_g_per_cm3=density_g_per_cm3, shading_width_um=shading_width_um,
        )  # fmt: skip

    @property
    def resistance_ohm_per_cm(self) -> float:
        """Resistance per length."""
        if self.line_resistance_ohm_per_cm is not None:
            return float(self.line_resistance_ohm_per_cm)
        assert self.resistivity_ohm_cm is not None
        return self.resistivity_ohm_cm / self.section_cm2

    @property
    def section_cm2(self) -> float:
        """Area of the cross-section; 0 without a height."""
        return self.width_um * (self.height_um or 0.0) * self.shape_factor * UM**2

    @property
    def mass_mg_per_cm(self) -> float:
        """Metal per length; 0 without a height."""
        return 1e3 * self.density_g_per_cm3 * self.section_cm2

    @property
    def shaded_um(self) -> float:
        """Width of the light lost."""
        return self.width_um if self.shading_width_um is None else self.shading_width_um
