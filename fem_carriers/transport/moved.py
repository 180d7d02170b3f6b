"""The same problem with other inputs, on the same unknowns: what derivatives and fits are made of."""

from __future__ import annotations

import dataclasses
from typing import TYPE_CHECKING, Any

from ..errors import Complaints
from ..meshing.moved_mesh import moved_mesh
from .problem import Problem

if TYPE_CHECKING:
    from ..cell.unit_cell import UnitCell


def described_by(problem: Problem) -> UnitCell:
    """The unit cell that describes a problem, with the problem's own light.

    Raises
    ------
    InputError
        A problem without one, or one whose surfaces or base were changed since.
    """
    problems = Complaints("inputs of a problem")
    problems.unless(problem.cell is not None, "a problem on an imported mesh", "a problem made from a UnitCell")
    problems.raise_if_any()
    assert problem.cell is not None
    same = dict(problem.volumes) == {"base": problem.cell.base} and dict(problem.surfaces) == surfaces_of(problem.cell)
    allowed = "changes of the UnitCell before it is meshed"
    problems.unless(same, "a problem whose base or surfaces differ from its cell's", allowed, "fc.changed(cell, ...)")
    problems.raise_if_any()
    return dataclasses.replace(problem.cell, light=problem.light)


def surfaces_of(cell: UnitCell) -> dict[str, Any]:
    """Every surface of a cell by its name in the mesh."""
    found = {r.name: r.surface for side in ("front", "rear") for r in cell.layout(side).regions}
    return found | dict(cell.sides) | {name: plane.surface for name, plane in cell.inner.items()}


def with_cell(problem: Problem, old: UnitCell, new: UnitCell) -> Problem:
    """The problem of another cell on the mesh of this one, moved where sizes differ.

    Parameters
    ----------
    problem : Problem
    old : UnitCell
        As from `described_by`.
    new : UnitCell
        With slightly different numbers.

    Raises
    ------
    MeshError
        Outlines that part, meet, appear or vanish.
    """
    inputs: dict[str, Any] = {
        "volumes": {"base": new.base}, "surfaces": surfaces_of(new), "light": new.light,
        "cell_area_cm2": new.area_cm2, "cell": new,
    }  # fmt: skip
    mesh = moved_mesh(problem.mesh, old, new)
    if mesh is problem.mesh:
        return problem.changed(**inputs)
    return dataclasses.replace(problem, mesh=mesh, steps=None, **inputs)
