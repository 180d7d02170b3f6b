"""A unit cell's curve of `current_voltage` in the grid."""

import numpy as np
import pytest

import fem_carriers as fc
from fem_carriers.errors import InputError
from fem_carriers.grid.cell_curve import cell_curve
from fem_carriers.grid.layout import Grid, GridLayout
from fem_carriers.grid.metal import MetalLine
from fem_carriers.grid.outline import CellOutline
from fem_carriers.grid.parts import Busbars, CollectionPoints, Fingers
from fem_carriers.grid.tables import current_from_curve

PITCH_UM = 1300.0


@pytest.fixture(scope="module")
def problem():
    wafer = fc.Base("p", resistivity_ohm_cm=1.0, thickness_um=160, lifetime_us=400)
    front = fc.Face(
        fc.Surface(J0_fA_per_cm2=30, layer=fc.DopedLayer("n", sheet_resistance_ohm_per_sq=130)),
        [
            fc.Strip(
                "finger", width_um=40, J0_fA_per_cm2=500, contact=fc.Contact("front", contact_resistivity_mohm_cm2=2)
            )
        ],
    )
    rear = fc.Face(fc.Surface(J0_fA_per_cm2=30, contact=fc.Contact("rear")))
    cell = fc.UnitCell(wafer, pitch_um=PITCH_UM, front=front, rear=rear, light=fc.Light.sunlight(0.03))
    return fc.problem(cell, first_step_um=3.0, growth=3.0)


@pytest.fixture(scope="module")
def curve(problem):
    return fc.current_voltage(problem)


def layout(resistance_ohm_per_cm: float) -> GridLayout:
    finger = MetalLine(40, line_resistance_ohm_per_cm=resistance_ohm_per_cm)
    bar = Busbars(MetalLine(0.001, line_resistance_ohm_per_cm=0), 2)
    return GridLayout(
        CellOutline(13, 40), front=Grid(Fingers(finger, PITCH_UM), bar, collection=CollectionPoints(per_busbar=1))
    )


def test_ideal_metal_gives_the_unit_cell(curve):
    whole = cell_curve(layout(0.0), current_from_curve(curve))
    assert whole.maximum_power.power_mW_per_cm2 == pytest.approx(curve.maximum_power.power_mW_per_cm2, rel=1e-6)
    assert whole.voc_V == pytest.approx(curve.voc_V, abs=1e-6)
    assert whole.efficiency_percent == pytest.approx(curve.efficiency_percent, rel=1e-6)


def test_interpolation_between_the_points(problem, curve):
    # solved half-way between the points of the curve, to 1e-4 of Jsc
    known = np.array([p.voltage_V for p in curve.points])
    between = 0.5 * (known[1:] + known[:-1])
    between = [float(v) for v in between if v < curve.voc_V]
    solved = fc.current_voltage(problem, voltages_V=between)
    exact = {p.voltage_V: p.current_mA_per_cm2 for p in solved.points}
    law = current_from_curve(curve)
    error = max(abs(law.at(v) - exact[v]) for v in between)
    assert error < 1e-4 * curve.jsc_mA_per_cm2


def test_lumped_limit_of_a_unit_cell(curve):
    # fingers fed over L = 1 cm from either side of a busbar: r L² S/3 in series with the unit cell, to 0.05 % of power
    law, r = current_from_curve(curve), 2.5
    lumped = law.with_series_resistance(r * 1.0**2 * PITCH_UM * 1e-4 / 3)
    whole = cell_curve(layout(r), law)
    assert whole.maximum_power.power_mW_per_cm2 == pytest.approx(lumped.maximum_power_mW_per_cm2, rel=5e-4)


def test_losses_inside_the_unit_cell(curve):
    budget = curve.maximum_power.solution.losses
    inside = cell_curve(layout(0.0), current_from_curve(curve)).losses.inside_unit_cell
    for name in ("sheet", "contact"):
        assert inside[name] == pytest.approx(5.2 * budget.sum_of(name), rel=1e-4)
    assert inside["shading by fingers"] == pytest.approx(5.2 * budget.optical["shaded"], rel=1e-4)
    assert 0 < inside["recombination under metal"] < 5.2 * budget.sum_of("surface")


def test_what_is_no_curve_is_refused():
    with pytest.raises(InputError, match="a CurrentVoltage"):
        current_from_curve({"voltage_V": [0, 1]})
