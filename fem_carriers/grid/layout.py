"""The layout of a cell in plan: outline, and a grid on the front, on the rear, on both, or two on the rear."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from ..cell import checks
from ..errors import Complaints
from .outline import CellOutline
from .parts import Breaks, Busbars, CollectionPoints, Fingers, PerimeterBusbar, Wires

if TYPE_CHECKING:
    from .metal import MetalLine

KINDS = {
    "fingers": Fingers, "busbars": Busbars, "wires": Wires, "perimeter": PerimeterBusbar,
    "collection": CollectionPoints, "breaks": Breaks,
}  # fmt: skip


@dataclass(frozen=True, repr=False)
class Grid:
    """The metal of one terminal on one face, and the sheet it contacts.

    Parameters
    ----------
    fingers : Fingers, optional
    busbars : Busbars, optional
    wires : Wires, optional
    perimeter : PerimeterBusbar, optional
    collection : CollectionPoints, optional
        On busbars and the perimeter busbar; wires lead to the terminal by their ends.
    breaks : Breaks, optional
    collects : {"electrons", "holes"}
    sheet_resistance_ohm_per_sq, contact_resistivity_mohm_cm2 : float, optional
        Of the sheet between the fingers and between metal and sheet; used and needed by ``mode="resolved"`` only (in
        ``mode="smeared"`` the unit cell's curve contains both). A contact resistivity of 0 is an ideal contact.
    """

    fingers: Fingers | None = None
    busbars: Busbars | None = None
    wires: Wires | None = None
    perimeter: PerimeterBusbar | None = None
    collection: CollectionPoints | None = None
    breaks: Breaks | None = None
    collects: str = "electrons"
    sheet_resistance_ohm_per_sq: float | None = None
    contact_resistivity_mohm_cm2: float | None = None

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Grid")
        for name, kind in KINDS.items():
            value = getattr(self, name)
            problems.unless(value is None or isinstance(value, kind), f"{name} = {value!r}", f"a {kind.__name__}")
        if self.fingers is None and self.perimeter is None:
            problems.add("a grid without fingers and without a perimeter busbar", "at least one of them")
        if self.breaks is not None and self.fingers is None:
            problems.add("breaks without fingers", "breaks in fingers")
        checks.one_of(problems, "collects", self.collects, ("electrons", "holes"))
        if self.sheet_resistance_ohm_per_sq is not None:
            checks.positive(problems, "sheet_resistance_ohm_per_sq", self.sheet_resistance_ohm_per_sq)
        if self.contact_resistivity_mohm_cm2 is not None:
            checks.positive(problems, "contact_resistivity_mohm_cm2", self.contact_resistivity_mohm_cm2, zero=True)
        if self.collection is None and self.wires is None:
            problems.add(
                "a grid without wires and without collection points",
                "at least one path to the terminal",
                "collection=CollectionPoints(per_busbar=5)",
            )
        problems.raise_if_any()

    @property
    def sign(self) -> int:
        """+1 if the grid's potential counts positive in the cell voltage φh − φe."""
        return 1 if self.collects == "holes" else -1


@dataclass(frozen=True, repr=False)
class GridLayout:
    """Outline of the cell and its grids.

    Parameters
    ----------
    outline : CellOutline
    front : Grid, optional
        Shades the cell.
    rear : Grid or (Grid, Grid), optional
        One grid, or two of opposite polarity for an interdigitated rear. A face without a grid is an equipotential.

    Raises
    ------
    InputError
        Every problem at once: no grid, equal polarities, lines outside the outline, lines of two terminals that touch.
    """

    outline: CellOutline
    front: Grid | None = None
    rear: Grid | tuple[Grid, Grid] | None = None

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        from .placing import check_places

        problems = Complaints("GridLayout")
        problems.unless(isinstance(self.outline, CellOutline), f"outline = {self.outline!r}", "a CellOutline")
        grids = [*self._rear, *([] if self.front is None else [self.front])]
        problems.unless(
            1 <= len(grids) <= 2, f"{len(grids)} grids", "a front grid, a rear grid, one of each, or two rear"
        )
        for grid in grids:
            problems.unless(isinstance(grid, Grid), f"grid {grid!r}", "a Grid")
        problems.raise_if_any()
        if len(grids) == 2 and grids[0].sign == grids[1].sign:
            problems.add(f"two grids that collect {grids[0].collects}", 'one with collects="electrons" and one "holes"')
        check_places(problems, self)
        problems.raise_if_any()

    @property
    def _rear(self) -> tuple[Grid, ...]:
        if self.rear is None:
            return ()
        return self.rear if isinstance(self.rear, tuple) else (self.rear,)

    @property
    def grids(self) -> dict[str, Grid]:
        """The grids by name: "front", "rear", or "rear electrons" and "rear holes"."""
        named = {} if self.front is None else {"front": self.front}
        if len(self._rear) == 1:
            return named | {"rear": self._rear[0]}
        return named | {f"rear {grid.collects}": grid for grid in self._rear}

    @property
    def interdigitated(self) -> bool:
        """Whether both grids lie on the rear."""
        return len(self._rear) == 2


def interdigitated_layout(
    outline: CellOutline,
    fingers: MetalLine,
    busbars: MetalLine,
    pitch_um: float,
    gap_um: float,
    collection: CollectionPoints,
) -> GridLayout:
    """Two combs on the rear: fingers alternate at half the pitch, busbars lie at opposite ends.

    Parameters
    ----------
    outline : CellOutline
    fingers, busbars : MetalLine
        The same for both polarities; make a `GridLayout` with ``rear=(…, …)`` for different ones.
    pitch_um : float
        Period: distance of fingers of the same polarity.
    gap_um : float
        Between a finger's end and the busbar of the other polarity.
    collection : CollectionPoints

    Returns
    -------
    GridLayout
        Electrons at the low end of y.
    """
    bar_um = busbars.width_um
    height_mm = outline.size_cm[1] * 10
    electrons = Grid(
        Fingers(fingers, pitch_um, margin_um=(bar_um / 2, bar_um + gap_um), offset_um=-pitch_um / 4),
        Busbars(busbars, positions_mm=[bar_um / 2000]),
        collection=collection,
    )
    holes = replace(
        electrons,
        fingers=Fingers(fingers, pitch_um, margin_um=(bar_um + gap_um, bar_um / 2), offset_um=pitch_um / 4),
        busbars=Busbars(busbars, positions_mm=[height_mm - bar_um / 2000]),
        collects="holes",
    )
    return GridLayout(outline, rear=(electrons, holes))
