"""Layouts: outlines, places of lines, refusals that name the place."""

import math

import numpy as np
import pytest

from fem_carriers.errors import InputError
from fem_carriers.grid.cell_curve import cell_at, cell_curve
from fem_carriers.grid.diodes import diode_current
from fem_carriers.grid.layout import Grid, GridLayout, interdigitated_layout
from fem_carriers.grid.metal import MetalLine
from fem_carriers.grid.outline import CellOutline
from fem_carriers.grid.parts import Breaks, Busbars, CollectionPoints, Fingers, PerimeterBusbar, Wires
from fem_carriers.grid.placing import placed_lines
from fem_carriers.grid.tables import current_from_table

SILICON = diode_current(39.0, 25.0)
FINGER = MetalLine(40, 15, 2 / 3, 3e-6)
BAR = MetalLine(800, 15, resistivity_ohm_cm=3e-6)
WIRE = MetalLine.round_wire(250, 1.8e-6)
PADS = CollectionPoints(per_busbar=3)


def refused(text: str, build) -> None:
    with pytest.raises(InputError, match=text):
        build()


def test_metal_line():
    assert FINGER.resistance_ohm_per_cm == pytest.approx(3e-6 / (40e-4 * 15e-4 * 2 / 3))
    assert WIRE.section_cm2 == pytest.approx(math.pi / 4 * 0.025**2)
    assert WIRE.mass_mg_per_cm == pytest.approx(8960 * math.pi / 4 * 0.025**2)
    refused("width_um = -1", lambda: MetalLine(-1, 10, resistivity_ohm_cm=3e-6))
    refused("exactly one", lambda: MetalLine(40))
    refused("at most 1", lambda: MetalLine(40, 15, 1.2, 3e-6))


def test_pseudo_square_areas():
    # a square of side a with the corners of a circle of diameter d: area by the circle's segments
    a, d = 15.6, 20.0
    r = d / 2
    angle = math.acos(a / 2 / r)
    segment = r**2 * (angle - math.sin(angle) * math.cos(angle))
    exact = math.pi * r**2 - 4 * segment
    assert CellOutline(156, 156, diameter_mm=200).area_cm2 == pytest.approx(exact, rel=2e-5)
    assert CellOutline(182, 182, corner_mm=8).area_cm2 == pytest.approx(18.2**2 - 2 * 0.8**2)
    pieces = [CellOutline(156, 156, diameter_mm=200, pieces=3, piece=k).area_cm2 for k in range(3)]
    assert sum(pieces) == pytest.approx(CellOutline(156, 156, diameter_mm=200).area_cm2)
    assert pieces[0] == pytest.approx(pieces[2])
    assert CellOutline(156, 156, diameter_mm=200, pieces=3, piece=1).is_rectangle


def test_outline_refusals():
    refused("diagonal", lambda: CellOutline(156, 156, diameter_mm=150))
    refused("piece = 2", lambda: CellOutline(156, 156, pieces=2, piece=2))
    refused("half of the shorter", lambda: CellOutline(20, 10, corner_mm=6))


def test_fingers_follow_the_corners():
    outline = CellOutline(156, 156, diameter_mm=200)
    grid = Grid(Fingers(FINGER, 1300, margin_um=500), wires=Wires(WIRE, 12))
    fingers = [line for line in placed_lines(outline, "front", grid) if line.kind == "finger"]
    assert len(fingers) == 120
    first = fingers[0]
    x = first.at - first.half_width - 7.8
    assert first.high - 7.8 == pytest.approx(math.sqrt(10**2 - x**2) - 0.05, abs=2e-3)
    assert fingers[60].high == pytest.approx(15.55)


def test_refusals_name_the_place():
    outline = CellOutline(20, 20)
    refused("a pitch above the width", lambda: Fingers(MetalLine(200, 15, resistivity_ohm_cm=3e-6), 150))
    refused("pitch_um = -3", lambda: Fingers(FINGER, -3))
    outside = Grid(Fingers(FINGER, 1000, positions_mm=[5, 25]), Busbars(BAR, 1), collection=PADS)
    refused(r"finger 1 at x = 25 mm lies outside", lambda: GridLayout(outline, front=outside))
    high = Grid(Fingers(FINGER, 1000), Busbars(BAR, positions_mm=[19.9]), collection=PADS)
    refused(r"busbar 0 at y = 19.9 mm lies outside", lambda: GridLayout(outline, front=high))
    close = Grid(Fingers(FINGER, 1000, positions_mm=[5, 5.03]), Busbars(BAR, 1), collection=PADS)
    refused("finger 0 and finger 1 overlap at x = 5 mm", lambda: GridLayout(outline, front=close))
    refused("at least one path", lambda: Grid(Fingers(FINGER, 1000), Busbars(BAR, 1)))
    broken = Grid(Fingers(FINGER, 1000), Busbars(BAR, 1), collection=PADS, breaks=Breaks(100, [(40, 3)]))
    refused("a break in finger 40", lambda: GridLayout(outline, front=broken))
    refused("two grids that collect electrons", lambda: GridLayout(outline, front=close, rear=high))


def test_nets_that_touch():
    outline = CellOutline(24, 30)
    refused(
        "rear electrons .* touches rear holes .* at",
        lambda: interdigitated_layout(outline, FINGER, BAR, 1200, -50, PADS),
    )
    interdigitated_layout(outline, FINGER, BAR, 1200, 50, PADS)


def test_no_path_to_a_terminal():
    # a wire joined to two fingers only leaves the others alone
    grid = Grid(Fingers(FINGER, 2000), wires=Wires(WIRE, 1, contacts=2))
    layout = GridLayout(CellOutline(20, 20), front=grid)
    refused(r"front: finger 0 around \(1, 15\) mm has no path", lambda: cell_at(layout, SILICON, 0.5))
    # with a busbar beneath, two joints are enough
    joined = Grid(Fingers(FINGER, 2000), Busbars(BAR, 1), Wires(WIRE, 1, contacts=2))
    assert cell_at(GridLayout(CellOutline(20, 20), front=joined), SILICON, 0.5).current_A > 0


def test_collection_points_lie_on_metal():
    points = CollectionPoints(points_mm=[(3, 3)])
    layout = GridLayout(CellOutline(20, 20), front=Grid(Fingers(FINGER, 2000), Busbars(BAR, 1), collection=points))
    refused(r"the collection point at \(3, 3\) mm", lambda: cell_at(layout, SILICON, 0.5))
    refused("exactly one", lambda: CollectionPoints())


def test_modes_are_never_mixed():
    layout = GridLayout(CellOutline(20, 20), front=Grid(Fingers(FINGER, 2000), Busbars(BAR, 1), collection=PADS))
    v = [0, 0.3, 0.6, 0.7]
    whole = current_from_table(v, [38, 38, 36, 0], lateral=True)
    part = current_from_table(v, [38, 38, 36, 0], lateral=False)
    refused("contains the lateral losses already", lambda: cell_curve(layout, whole, mode="resolved"))
    refused("no sheet between the fingers", lambda: cell_curve(layout, part))
    refused("sheet_resistance_ohm_per_sq is not stated", lambda: cell_curve(layout, SILICON, mode="resolved"))
    broken = Grid(Fingers(FINGER, 2000), Busbars(BAR, 1), collection=PADS, breaks=Breaks(100, random=1))
    refused("broken fingers", lambda: cell_curve(GridLayout(CellOutline(20, 20), front=broken), SILICON))
    refused("a lit cell", lambda: cell_curve(layout, SILICON.with_light(0)))
    refused("mode = 'both'", lambda: cell_curve(layout, SILICON, mode="both"))


def test_perimeter_needs_a_rectangle():
    grid = Grid(
        Fingers(FINGER, 1000), perimeter=PerimeterBusbar(BAR), collection=CollectionPoints(points_mm=[(10, 0.4)])
    )
    refused("pseudo-square", lambda: GridLayout(CellOutline(20, 20, corner_mm=2), front=grid))


def test_random_breaks_are_reproducible():
    grid = Grid(Fingers(FINGER, 1000), Busbars(BAR, 1), collection=PADS, breaks=Breaks(100, random=5, seed=3))
    one, two = (placed_lines(CellOutline(20, 20), "front", grid) for _ in range(2))
    assert [(p.low, p.high) for p in one] == [(p.low, p.high) for p in two]
    assert sum(p.kind == "finger" for p in one) == 25
    assert np.ptp([p.low for p in one if p.kind == "finger"]) > 0
