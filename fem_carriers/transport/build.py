"""From a unit cell to a problem on its mesh."""

from __future__ import annotations

import dataclasses

from ..cell import checks
from ..cell.terminal_check import check_terminals
from ..cell.unit_cell import UnitCell
from ..errors import Complaints
from ..meshing.unit_cell_mesh import mesh_unit_cell
from .problem import MeshSteps, Problem


def problem(
    cell: UnitCell,
    *,
    first_step_um: float | None = None,
    growth: float | None = None,
    level: float | None = None,
    order: int = 2,
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
    level : float
        Place in a family of meshes in which everything is refined together: one level more lowers the error of a
        current about four times and costs about 2.3 (2-D) to 3.5 times (3-D) as many unknowns. Negative is coarser.
        Default is 0; in 3-D without stated steps -1.
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
    good = level is None or (checks.is_number(level) and -6 <= level <= 6)
    problems.unless(good, f"level = {level!r}", "a number from -6 to 6", "1, or -1")
    problems.unless(
        isinstance(cell, UnitCell), f"cell = {cell!r}", "a UnitCell", "fc.UnitCell(wafer, pitch_um=1300, ...)"
    )
    problems.raise_if_any()
    if level is None:
        level = -1.0 if cell.dimension == 3 and first_step_um is None and growth is None else 0.0
    mesh = mesh_unit_cell(cell, first_step_um, growth, level)
    surfaces = {r.name: r.surface for side in ("front", "rear") for r in cell.layout(side).regions}
    surfaces |= dict(cell.sides) | {name: plane.surface for name, plane in cell.inner.items()}
    steps = MeshSteps(first_step_um, growth, level)
    return Problem(
        mesh, {"base": cell.base}, surfaces, cell.light, None, cell.area_cm2, order=order, cell=cell, steps=steps
    )


def at_level(given: Problem, level: float) -> Problem:
    """The same inputs on another mesh of the family; `given.cell` must be known.

    Parameters
    ----------
    given : Problem
    level : float

    Returns
    -------
    Problem
    """
    assert given.cell is not None
    assert given.steps is not None
    steps = dataclasses.replace(given.steps, level=level)
    mesh = mesh_unit_cell(given.cell, steps.first_step_um, steps.growth, level)
    return dataclasses.replace(given, mesh=mesh, steps=steps)


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
