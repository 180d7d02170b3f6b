"""A grid drawn elsewhere: a plan mesh whose named lines are metal."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property

from ..cell import checks
from ..errors import Complaints
from ..meshing.mesh import Mesh, cell_sizes
from .cell_current import CellCurrent
from .metal import MetalLine


@dataclass(frozen=True, repr=False)
class PlanDrawing:
    """A plan mesh with named lines.

    Parameters
    ----------
    mesh : Mesh
        Two-dimensional, from `read_mesh`; named surfaces are lines, named volumes are areas.
    lines : mapping of str to MetalLine
        Metal by the name of its line. Lines that share a node are joined. The mesh does not show their width: the
        contact resistance per length is √(ρc R_sh)/2 · coth(w/(2 L_T)) (Berger 1972, current from both sides; on the
        outline, from one side, √(ρc R_sh) coth(w/L_T)), and width times J is taken away as shading.
    sheet_resistance_ohm_per_sq, contact_resistivity_mohm_cm2 : float
    terminals : mapping of str to float
        Lines (metal or not) that lead to the terminal, with a resistance in mΩ; 0 holds them at the terminal.
    points_mm : sequence of (x, y)
        Further places at the terminal: the nearest node of metal to each.
    currents : mapping of str to CellCurrent
        Laws of named areas that differ from the cell's.
    """

    mesh: Mesh
    lines: Mapping[str, MetalLine]
    sheet_resistance_ohm_per_sq: float
    contact_resistivity_mohm_cm2: float
    terminals: Mapping[str, float] = field(default_factory=dict)
    points_mm: Sequence[tuple[float, float]] = ()
    currents: Mapping[str, CellCurrent] = field(default_factory=dict)

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("PlanDrawing")
        flat = isinstance(self.mesh, Mesh) and self.mesh.dimension == 2
        problems.unless(flat, f"mesh = {self.mesh!r}", "a two-dimensional Mesh", "read_mesh of a plan drawing")
        problems.raise_if_any()
        for what, names, known in (
            ("line", [*self.lines, *self.terminals], self.mesh.surfaces), ("area", self.currents, self.mesh.volumes),
        ):  # fmt: skip
            for name in names:
                problems.unless(name in known, f"{what} {name!r}", f"one of the mesh's: {', '.join(known) or 'none'}")
        for name, metal in self.lines.items():
            problems.unless(isinstance(metal, MetalLine), f"lines[{name!r}] = {metal!r}", "a MetalLine")
        for name, resistance in self.terminals.items():
            checks.positive(problems, f"terminals[{name!r}]", resistance, zero=True)
        if not self.terminals and not self.points_mm:
            problems.add("a drawing without terminals", "terminals or points_mm", 'terminals={"pad": 0}')
        problems.unless(bool(self.lines) or not self.points_mm, "points_mm without lines", "points on metal lines")
        checks.positive(problems, "sheet_resistance_ohm_per_sq", self.sheet_resistance_ohm_per_sq)
        checks.positive(problems, "contact_resistivity_mohm_cm2", self.contact_resistivity_mohm_cm2, zero=True)
        problems.raise_if_any()

    @cached_property
    def area_cm2(self) -> float:
        """Of all cells."""
        return float(cell_sizes(self.mesh.cells).sum())
