"""The whole cell: layout and local law to a current-voltage curve."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from ..cell import checks
from ..errors import Complaints
from .cell_current import CellCurrent
from .grid_curve import GridCurve, traced
from .grid_solution import GridSolution
from .joints import check_pads, wiring
from .layout import GridLayout
from .local_laws import EdgeRecombination, LocalLaws, Map, Region
from .placing import placed_lines
from .resolved import resolved_circuit
from .smeared import smeared_circuit
from .solve import GridSolver
from .symmetry import repeat_unit, whole_cell

if TYPE_CHECKING:
    from .sheet_mesh import SheetSpace

MODES = ("smeared", "resolved")
MANY_FINGERS, COARSE = 60, 0.25
"""Fingers above which the mesh of the resolved mode is coarser by default, and its fineness then."""


class CellSolver:
    """One cell, solved at any voltage; each solution starts from the last one.

    Parameters are those of `cell_curve`.
    """

    def __init__(
        self,
        layout: GridLayout,
        current: CellCurrent,
        *,
        mode: str = "smeared",
        under_metal: CellCurrent | None = None,
        regions: Sequence[Region] = (),
        light: Map | None = None,
        edge: EdgeRecombination | None = None,
        symmetry: str = "auto",
        fineness: float | None = None,
    ) -> None:
        _check(layout, current, mode, symmetry, under_metal, regions, edge, fineness)
        self.layout, self.laws = layout, LocalLaws(current, under_metal, tuple(regions), light, edge)
        self.window = repeat_unit(layout, self.laws) if symmetry == "auto" else whole_cell(layout)
        wirings = [wiring(layout.outline, name, grid, self.window) for name, grid in layout.grids.items()]
        self.space: SheetSpace | None = None
        if mode == "smeared":
            circuit = smeared_circuit(layout, self.laws, self.window, wirings)
        else:
            fingers = max(len(one.of("finger")) for one in wirings)
            chosen = (COARSE if fingers > MANY_FINGERS else 1.0) if fineness is None else fineness
            circuit, self.space = resolved_circuit(layout, self.laws, self.window, wirings, chosen)
        self.solver = GridSolver(circuit)

    def at(self, voltage_V: float) -> GridSolution:
        """The solution at a terminal voltage."""
        state = self.solver.at(float(voltage_V))
        area = self.layout.outline.area_cm2
        return GridSolution(self.layout, self.laws, self.window, state, self.space, area)


def cell_curve(
    layout: GridLayout,
    current: CellCurrent,
    *,
    mode: str = "smeared",
    under_metal: CellCurrent | None = None,
    regions: Sequence[Region] = (),
    light: Map | None = None,
    edge: EdgeRecombination | None = None,
    symmetry: str = "auto",
    fineness: float | None = None,
    voltages_V: Sequence[float] | None = None,
) -> GridCurve:
    """Current-voltage curve of a cell with its grid.

    The potentials of metal and sheets obey −∇·(∇x/R) = J(u) with u the local cell voltage, photocurrent positive.

    Parameters
    ----------
    layout : GridLayout
    current : CellCurrent
        J(u). For "smeared" that of a whole unit cell: its sheet, contacts and finger shading are in it. For "resolved"
        that of the cell without lateral transport and without shading.
    mode : {"smeared", "resolved"}
        Smeared: fingers are lines fed by pitch × J(u), with no sheet between them. Resolved: the sheet between the
        fingers on a two-dimensional mesh, for broken fingers, edges and anything that varies within a pitch.
    under_metal : CellCurrent, optional
        Law under metal that touches the cell; its dark part counts. Default: that of `current`. With grids on both
        faces it applies to the front's metal; put the rear's into `current`.
    regions : sequence of Region
        Parts of the cell with other laws. In the smeared mode one strip per finger has one law across.
    light : function, optional
        Factor on the light current, ``f(x_mm, y_mm)``.
    edge : EdgeRecombination, optional
        In the resolved mode.
    symmetry : {"auto", "none"}
        "auto" solves the smallest piece between mirror planes; "none" the whole cell.
    fineness : float, optional
        Divides the mesh steps of the resolved mode. Default is 1, and 0.25 for more than 60 fingers in the modelled
        piece, which changes the power by less than 1e-4.
    voltages_V : sequence of float, optional
        Voltages of the curve besides short circuit, open circuit and maximum power.

    Returns
    -------
    GridCurve

    Raises
    ------
    InputError
        Every problem of the input at once; a part of the cell without a path to a terminal, with its place.
    SolverError
        No convergence.
    """
    solver = CellSolver(
        layout, current, mode=mode, under_metal=under_metal, regions=regions, light=light, edge=edge,
        symmetry=symmetry, fineness=fineness,
    )  # fmt: skip
    return traced(solver.at, current, voltages_V)


def cell_at(layout: GridLayout, current: CellCurrent, voltage_V: float, **options: object) -> GridSolution:
    """The cell with its grid at one terminal voltage.

    Parameters
    ----------
    layout, current
        As for `cell_curve`.
    voltage_V : float
    **options
        ``mode``, ``under_metal``, ``regions``, ``light``, ``edge``, ``symmetry``, ``fineness`` of `cell_curve`.

    Returns
    -------
    GridSolution
    """
    problems = Complaints("cell_at")
    checks.finite(problems, "voltage_V", voltage_V)
    problems.raise_if_any()
    return CellSolver(layout, current, **options).at(voltage_V)  # type: ignore[arg-type]


def _check(
    layout: GridLayout,
    current: CellCurrent,
    mode: str,
    symmetry: str,
    under_metal: CellCurrent | None,
    regions: Sequence[Region],
    edge: EdgeRecombination | None,
    fineness: float | None,
) -> None:
    problems = Complaints("cell_curve")
    sound = problems.unless(isinstance(layout, GridLayout), f"layout = {layout!r}", "a GridLayout")
    for name, law in (("current", current), ("under_metal", under_metal)):
        good = isinstance(law, CellCurrent) or (law is None and name == "under_metal")
        sound &= problems.unless(good, f"{name} = {law!r}", "a CellCurrent", "diode_current or current_from_curve")
    checks.one_of(problems, "mode", mode, MODES)
    checks.one_of(problems, "symmetry", symmetry, ("auto", "none"))
    if fineness is not None:
        checks.positive(problems, "fineness", fineness)
    for region in regions:
        problems.unless(isinstance(region, Region), f"region {region!r}", "a Region")
    problems.unless(edge is None or isinstance(edge, EdgeRecombination), f"edge = {edge!r}", "an EdgeRecombination")
    if sound:
        _check_mode(problems, current, mode, edge)
        for name, grid in layout.grids.items():
            check_pads(problems, name, grid, placed_lines(layout.outline, name, grid))
    problems.raise_if_any()


def _check_mode(problems: Complaints, current: CellCurrent, mode: str, edge: EdgeRecombination | None) -> None:
    """Lateral losses are taken once."""
    if mode == "resolved" and current.lateral:
        given = "a unit cell's curve, which contains the lateral losses already, in the resolved mode"
        problems.add(given, "a curve without lateral losses", 'mode="smeared", or current_from_curve(…, lateral=False)')
    if mode == "smeared" and current.lateral is False:
        given = "a curve without lateral losses in the smeared mode, which has no sheet between the fingers"
        problems.add(given, "a unit cell's curve", 'mode="resolved"')
    if mode == "smeared" and edge is not None:
        problems.add("edge recombination in the smeared mode", "no edge", 'mode="resolved"')
