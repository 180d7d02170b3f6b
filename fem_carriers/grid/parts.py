"""What a grid is made of: fingers, busbars, wires, a perimeter busbar, collection points, breaks."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..errors import Complaints
from .metal import MetalLine

if TYPE_CHECKING:
    from numpy.typing import NDArray


def _check_metal(problems: Complaints, metal: object, printed: bool = True) -> bool:
    """Complain unless it is a MetalLine; what lies flat shades no more than its width."""
    if not isinstance(metal, MetalLine):
        return problems.unless(False, f"metal = {metal!r}", "a MetalLine")
    given = f"shading_width_um = {metal.shading_width_um} of metal {metal.width_um:g} µm wide"
    return problems.unless(
        not printed or metal.shaded_um <= metal.width_um, given, "at most the width (more for wires)"
    )


def _numbers(problems: Complaints, name: str, values: Any) -> bool:
    listed = isinstance(values, Sequence | np.ndarray) and not isinstance(values, str) and len(values) > 0
    good = listed and all(checks.is_number(v) and np.isfinite(v) for v in values)
    return problems.unless(good, f"{name} = {values!r}", "a list of finite numbers")


def _count(problems: Complaints, name: str, value: object) -> bool:
    good = isinstance(value, int | np.integer) and not isinstance(value, bool) and value >= 1
    return problems.unless(bool(good), f"{name} = {value!r}", "a whole number of at least 1")


@dataclass(frozen=True, repr=False)
class Fingers:
    """Parallel fingers along y.

    Parameters
    ----------
    metal : MetalLine
        Its width is the width at the root.
    pitch_um : float
        Distance of the centre lines.
    tip_width_um : float, optional
        Width at free ends and half-way between two busbars or wires, for fingers that taper linearly; 0 allowed.
        The line resistance goes as 1/width, the height is uniform.
    margin_um : float or (float, float)
        Distance of finger ends from the outline, at low y and at high y.
    edge_margin_um : float
        Least distance of the outermost centre lines from the outline in x.
    positions_mm : sequence of float, optional
        Centre lines in x instead of as many as fit, centred.
    offset_um : float
        Shift in x.
    """

    metal: MetalLine
    pitch_um: float
    tip_width_um: float | None = None
    margin_um: float | tuple[float, float] = 0.0
    edge_margin_um: float = 0.0
    positions_mm: Sequence[float] | None = None
    offset_um: float = 0.0

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Fingers")
        sound = _check_metal(problems, self.metal) & checks.positive(problems, "pitch_um", self.pitch_um)
        if sound:
            given = f"pitch_um = {self.pitch_um:g} with a finger width of {self.metal.width_um:g} µm"
            problems.unless(self.pitch_um > self.metal.width_um, given, "a pitch above the width")
        if self.tip_width_um is not None and checks.positive(problems, "tip_width_um", self.tip_width_um, zero=True):
            given = f"tip_width_um = {self.tip_width_um:g}"
            problems.unless(not sound or self.tip_width_um <= self.metal.width_um, given, "at most the root's width")
        for margin in self.margin_um if isinstance(self.margin_um, tuple) else (self.margin_um,):
            checks.positive(problems, "margin_um", margin, zero=True)
        pair = not isinstance(self.margin_um, tuple) or len(self.margin_um) == 2
        problems.unless(pair, f"margin_um = {self.margin_um!r}", "one number, or two for low and high y")
        checks.positive(problems, "edge_margin_um", self.edge_margin_um, zero=True)
        checks.finite(problems, "offset_um", self.offset_um)
        if self.positions_mm is not None:
            _numbers(problems, "positions_mm", self.positions_mm)
        problems.raise_if_any()

    @property
    def margins_um(self) -> tuple[float, float]:
        """Margins at low and at high y."""
        return self.margin_um if isinstance(self.margin_um, tuple) else (self.margin_um, self.margin_um)

    def centres_cm(self, width_cm: float) -> NDArray[np.float64]:
        """Centre lines on a cell of this width."""
        if self.positions_mm is not None:
            return np.sort(np.asarray(self.positions_mm, dtype=float)) * 0.1 + self.offset_um * 1e-4
        pitch, margin = self.pitch_um * 1e-4, self.edge_margin_um * 1e-4
        room = width_cm - 2 * margin
        n = int(np.floor(room / pitch + 1e-6)) if margin == 0 else int(np.floor(room / pitch + 1e-6)) + 1
        start = width_cm / 2 - (max(n, 1) - 1) * pitch / 2
        return np.asarray(start + pitch * np.arange(max(n, 1)) + self.offset_um * 1e-4)


@dataclass(frozen=True, repr=False)
class Busbars:
    """Parallel busbars along x.

    Parameters
    ----------
    metal : MetalLine
    number : int, optional
        Equally distributed: centre lines at (k + ½)/number of the height.
    positions_mm : sequence of float, optional
        Centre lines in y instead.
    margin_um : float
        Distance of the ends from the outline.
    touches_sheet : bool
        Whether the busbar contacts the cell beneath or only carries current.
    """

    metal: MetalLine
    number: int | None = None
    positions_mm: Sequence[float] | None = None
    margin_um: float = 0.0
    touches_sheet: bool = False

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Busbars")
        _check_metal(problems, self.metal)
        _check_rows(problems, self)
        problems.raise_if_any()

    def centres_cm(self, height_cm: float) -> NDArray[np.float64]:
        """Centre lines on a cell of this height."""
        return _rows(self.number, self.positions_mm, height_cm)


@dataclass(frozen=True, repr=False)
class Wires:
    """Parallel wires (or ribbons) along x, on the fingers or on busbars beneath.

    Parameters
    ----------
    metal : MetalLine
    number, positions_mm, margin_um
        As for `Busbars`.
    contacts : int, optional
        Number of equally spaced joints along each wire; default: every finger (or every finger crossing of the
        busbar beneath).
    joint_resistance_mohm : float
        Of each joint.
    ends : {"high", "low", "both"}
        Ends of the wires, in x, that lead to the terminal.
    end_resistance_mohm : float
        Between each end and the terminal.
    """

    metal: MetalLine
    number: int | None = None
    positions_mm: Sequence[float] | None = None
    margin_um: float = 0.0
    contacts: int | None = None
    joint_resistance_mohm: float = 0.0
    ends: str = "high"
    end_resistance_mohm: float = 0.0

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Wires")
        _check_metal(problems, self.metal, printed=False)
        _check_rows(problems, self)
        if self.contacts is not None:
            _count(problems, "contacts", self.contacts)
        checks.one_of(problems, "ends", self.ends, ("high", "low", "both"))
        checks.positive(problems, "joint_resistance_mohm", self.joint_resistance_mohm, zero=True)
        checks.positive(problems, "end_resistance_mohm", self.end_resistance_mohm, zero=True)
        problems.raise_if_any()

    def centres_cm(self, height_cm: float) -> NDArray[np.float64]:
        """Centre lines on a cell of this height."""
        return _rows(self.number, self.positions_mm, height_cm)


@dataclass(frozen=True, repr=False)
class PerimeterBusbar:
    """A closed rectangular busbar, as on laboratory cells.

    Parameters
    ----------
    metal : MetalLine
    inset_um : float
        Distance of its outer edge from the outline.
    touches_sheet : bool
    """

    metal: MetalLine
    inset_um: float = 0.0
    touches_sheet: bool = True

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("PerimeterBusbar")
        _check_metal(problems, self.metal)
        checks.positive(problems, "inset_um", self.inset_um, zero=True)
        problems.raise_if_any()


@dataclass(frozen=True, repr=False)
class CollectionPoints:
    """Pads or probes on busbars (or on a perimeter busbar) that are held at the terminal.

    Parameters
    ----------
    per_busbar : int, optional
        Equally distributed along each busbar: at (k + ½)/per_busbar of its length.
    points_mm : sequence of (x, y), optional
        Places instead; each must lie on a busbar, wire or perimeter busbar.
    resistance_mohm : float
        Between each point and the terminal.
    """

    per_busbar: int | None = None
    points_mm: Sequence[tuple[float, float]] | None = None
    resistance_mohm: float = 0.0

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("CollectionPoints")
        given = {"per_busbar": self.per_busbar, "points_mm": self.points_mm}
        if checks.exactly_one(problems, "places", given):
            if self.per_busbar is not None:
                _count(problems, "per_busbar", self.per_busbar)
            for point in self.points_mm if self.points_mm is not None else ():
                checks.pair(problems, "point", point)
        checks.positive(problems, "resistance_mohm", self.resistance_mohm, zero=True)
        problems.raise_if_any()


@dataclass(frozen=True, repr=False)
class Breaks:
    """Gaps in fingers.

    Parameters
    ----------
    gap_um : float
    places : sequence of (finger number from 0, y in mm)
    random : int
        Further breaks at random places of random fingers.
    seed : int
        Of the random places.
    """

    gap_um: float
    places: Sequence[tuple[int, float]] = ()
    random: int = 0
    seed: int = 0

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Breaks")
        checks.positive(problems, "gap_um", self.gap_um)
        for place in self.places:
            checks.pair(problems, "place", place)
        good = isinstance(self.random, int) and self.random >= 0
        problems.unless(good, f"random = {self.random!r}", "a whole number of at least 0")
        problems.unless(isinstance(self.seed, int), f"seed = {self.seed!r}", "a whole number")
        problems.raise_if_any()


def _check_rows(problems: Complaints, rows: Any) -> None:
    given = {"number": rows.number, "positions_mm": rows.positions_mm}
    if checks.exactly_one(problems, "centre lines", given):
        if rows.number is not None:
            _count(problems, "number", rows.number)
        else:
            _numbers(problems, "positions_mm", rows.positions_mm)
    checks.positive(problems, "margin_um", rows.margin_um, zero=True)


def _rows(number: int | None, positions_mm: Sequence[float] | None, height_cm: float) -> NDArray[np.float64]:
    if positions_mm is not None:
        return np.sort(np.asarray(positions_mm, dtype=float)) * 0.1
    assert number is not None
    return (np.arange(number) + 0.5) / number * height_cm
