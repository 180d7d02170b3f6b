"""From a unit cell to a problem on its mesh."""

from __future__ import annotations

from ..cell.terminal_check import check_terminals
from ..cell.unit_cell import UnitCell
from ..errors import Complaints
from ..meshing.unit_cell_mesh import mesh_unit_cell
from .problem import Problem


def problem(
    cell: UnitCell, *, first_step_um: float | None = None, growth: float | None = None, order: int = 2
) -> Problem:
    """Mesh a unit cell and put its description on the mesh.

    Parameters
    ----------
    cell : UnitCell
    first_step_um : float, optional
        Step of the mesh beside singular edges (edges of junctions, bare metal, contacts); default from the smallest
        feature.
    growth : float, optional
        Ratio of neighbouring steps away from them; default 2.2, or 2 for tets.
    order : {1, 2}
        Order of the elements.

    Returns
    -------
    Problem

    Raises
    ------
    InputError, MeshError
    """
    problems = Complaints("problem")
    problems.unless(order in (1, 2), f"order = {order!r}", "1 or 2")
    problems.unless(
        isinstance(cell, UnitCell), f"cell = {cell!r}", "a UnitCell", "fc.UnitCell(wafer, pitch_um=1300, ...)"
    )
    problems.raise_if_any()
    mesh = mesh_unit_cell(cell, first_step_um, growth)
    surfaces = {r.name: r.surface for side in ("front", "rear") for r in cell.layout(side).regions}
    surfaces |= dict(cell.sides)
    return Problem(
        mesh, {"base": cell.base}, surfaces, light=cell.light, cell_area_cm2=cell.area_cm2, order=order, cell=cell
    )


def checked_problem(given: Problem | UnitCell) -> Problem:
    """A problem as it is; a unit cell on its default mesh, after its terminals have been checked.

    Parameters
    ----------
    given : Problem or UnitCell

    Returns
    -------
    Problem

    Raises
    ------
    InputError
        Neither of the two, or a cell whose terminals cannot carry a finite current; refused before any mesh is made.
    """
    if isinstance(given, UnitCell):
        check_terminals(given)
        return problem(given)
    problems = Complaints("problem")
    problems.unless(isinstance(given, Problem), f"{given!r}", "a Problem or a UnitCell", "fc.problem(cell)")
    problems.raise_if_any()
    return given
