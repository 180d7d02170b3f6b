"""The plan view against closed forms.

Lateral, finger and contact losses: the usual integrals of i² over sheet and line, e.g. in M. A. Green, "Solar Cells",
1982, chapter 8 [from memory]; contact with crowding: H. H. Berger, J. Electrochem. Soc. 119, 507 (1972); the rectangle
held at zero on its sides: Fourier series of −∇²v = 1, as for torsion of a bar in S. Timoshenko and J. N. Goodier,
"Theory of Elasticity" [from memory], summed below.
"""

import math

import numpy as np
import pytest

from fem_carriers.grid.cell_current import CellCurrent
from fem_carriers.grid.cell_curve import cell_at, cell_curve
from fem_carriers.grid.diodes import diode_current
from fem_carriers.grid.falling_curve import falling_curve
from fem_carriers.grid.layout import Grid, GridLayout, interdigitated_layout
from fem_carriers.grid.metal import MetalLine
from fem_carriers.grid.outline import CellOutline
from fem_carriers.grid.parts import Breaks, Busbars, CollectionPoints, Fingers, PerimeterBusbar, Wires
from fem_carriers.grid.tables import current_from_table

IDEAL = MetalLine(10, line_resistance_ohm_per_cm=0)
SILICON = diode_current(39.0, 25.0, J02_nA_per_cm2=4.0)


def constant(current_mA_per_cm2: float) -> CellCurrent:
    """A photocurrent at any voltage."""
    return diode_current(current_mA_per_cm2, 0.0)


def comb(length_mm, pitch_mm, finger, *, rsh=None, rhoc=None, tip=None, bar_um=1.0, n=1, **more) -> GridLayout:
    """Fingers from an ideal, narrow busbar at y = 0."""
    bar = Busbars(MetalLine(bar_um, line_resistance_ohm_per_cm=0), positions_mm=[bar_um / 2000])
    grid = Grid(
        Fingers(finger, pitch_mm * 1000, tip_width_um=tip), bar, collection=CollectionPoints(per_busbar=1),
        sheet_resistance_ohm_per_sq=rsh, contact_resistivity_mohm_cm2=rhoc, **more,
    )  # fmt: skip
    return GridLayout(CellOutline(n * pitch_mm, length_mm), front=grid)


def resistive(solution, kind: str) -> float:
    """Power lost in one kind of conductor, mW."""
    return sum(v for (k, name), v in solution.losses.rows.items() if k == "resistance" and name.endswith(kind))


def test_lateral_loss_of_the_sheet():
    # fraction R_sh S² J/(12 V): 40 Ω/sq, 30 mA/cm², 450 mV, 4.24264 mm → 4 %
    s = 0.424264
    layout = comb(10.0, 10 * s, MetalLine(0.5, line_resistance_ohm_per_cm=0), rsh=40.0, rhoc=0.0, bar_um=0.1)
    solution = cell_at(layout, constant(30.0), 0.45, mode="resolved")
    assert resistive(solution, "sheet") / (30.0 * 0.45 * solution.area_cm2) == pytest.approx(0.04, rel=1e-3)


def test_lateral_loss_between_wide_fingers():
    # the lit part S − w exactly: J² R_sh L (S − w)³/12
    layout = comb(10.0, 1.5, MetalLine(200, line_resistance_ohm_per_cm=0), rsh=100.0, rhoc=0.0, bar_um=0.1)
    solution = cell_at(layout, constant(37.0), 0.5, mode="resolved")
    assert resistive(solution, "sheet") == pytest.approx(1e3 * 0.037**2 * 100 * 0.13**3 / 12, rel=1e-3)


@pytest.mark.parametrize(("tip", "share"), [(None, 1 / 3), (0.0, 1 / 4)])
def test_finger_uniform_and_tapered(tip, share):
    # L² S J ρ c/(V w h), c = 1/3 uniform, 1/4 tapered to zero with twice the width at the root
    length, pitch, resistance = 2.6, 0.15, 3e-6 / (60e-4 * 15e-4)
    wide = 1 if tip is None else 2
    finger = MetalLine(60 * wide, line_resistance_ohm_per_cm=resistance / wide)
    solution = cell_at(comb(26.0, 1.5, finger, tip=tip), constant(37.0), 0.55)
    current = 0.037 * length * pitch
    assert resistive(solution, "finger") == pytest.approx(1e3 * share * current**2 * resistance * length, rel=1e-3)


def contact_loss_W(layout, current) -> float:
    """Power lost under the fingers: contact, and the sheet beneath."""
    solution = cell_at(layout, current, 0.5, mode="resolved")
    pitch, width = layout.front.fingers.pitch_um * 1e-4, layout.front.fingers.metal.width_um * 1e-4
    length = layout.outline.size_cm[1]
    between = current.jsc_mA_per_cm2**2 * 1e-6 * layout.front.sheet_resistance_ohm_per_sq * length / 12
    return 1e-3 * (resistive(solution, "sheet") + resistive(solution, "contact")) - between * (pitch - width) ** 3


def test_contact_with_crowding():
    # both sides: V/I = √(ρc Rs)/(2w) coth(d/2LT) = 0.4408237 Ω for ρc = 2e-3, Rs = 100, d = 50 µm, 1 cm long
    layout = comb(10.0, 1.5, MetalLine(50, line_resistance_ohm_per_cm=0), rsh=100.0, rhoc=2.0, bar_um=0.1)
    current = 0.037 * (0.15 - 0.005)
    assert contact_loss_W(layout, constant(37.0)) / current**2 == pytest.approx(0.4408237, rel=1e-3)


def mean_voltage(a: float, b: float) -> float:
    """Mean of v with −∇²v = 1 on a rectangle, v = 0 on its sides; over the square of the shorter side."""
    k = np.arange(1, 400, 2)
    m, n = np.meshgrid(k, k)
    return float((64 / np.pi**6 / (m**2 * n**2 * (m**2 / a**2 + n**2 / b**2))).sum()) / min(a, b) ** 2


@pytest.mark.parametrize(("ratio", "c"), [(1, 0.03514425374), (2, 0.05717041928)])
def test_sheet_within_a_perimeter_busbar(ratio, c):
    side, rsh, j = 2.0, 80.0, 35.0  # cm, Ω/sq, mA/cm²
    frame = PerimeterBusbar(MetalLine(1000, line_resistance_ohm_per_cm=0))
    grid = Grid(
        perimeter=frame, collection=CollectionPoints(points_mm=[(0.5, 0.5)]), sheet_resistance_ohm_per_sq=rsh,
        contact_resistivity_mohm_cm2=0.0,
    )  # fmt: skip
    layout = GridLayout(CellOutline(10 * side + 2, 10 * side * ratio + 2), front=grid)
    solution = cell_at(layout, constant(j), 0.4, mode="resolved")
    expected = c * (j * 1e-3) ** 2 * rsh * side**2 * (side**2 * ratio) * 1e3
    assert mean_voltage(1, ratio) == pytest.approx(c, rel=1e-6)
    assert resistive(solution, "sheet") == pytest.approx(expected, rel=1e-3)


# The complete example: fractions of J V · cell area, J not reduced by shading; 37 mA/cm², 0.55 V, S = 1.5 mm,
# w = 60 µm, h = 15 µm, ρ = 3e-6 Ω·cm, L = 2.6 cm, 100 Ω/sq, 2 mΩ·cm². A line of 0.1 µm with the same line and contact
# resistance per length stands for the example's fingers without width; shading and crowding are those of real width.
LENGTH, J, V, RSH, RHOC, WIDTH, RESISTANCE = 2.6, 37.0, 0.55, 100.0, 2e-3, 60e-4, 3e-6 / (60e-4 * 15e-4)


def fractions(pitch_cm: float, tapered: bool = False) -> dict[str, float]:
    """Emitter, finger and uncrowded contact, from one resolved solution; shading from the area under metal."""
    narrow, wide = 0.1e-4, 2 if tapered else 1
    finger = MetalLine(narrow * 1e4, line_resistance_ohm_per_cm=RESISTANCE / wide)
    tip = 0.0 if tapered else None
    rhoc = 1e3 * RHOC * narrow / WIDTH
    layout = comb(10 * LENGTH, 10 * pitch_cm, MetalLine(narrow * 1e4, line_resistance_ohm_per_cm=0), rsh=RSH, rhoc=rhoc)
    sheet = cell_at(layout, constant(J), V, mode="resolved")
    metal = cell_at(comb(10 * LENGTH, 10 * pitch_cm, finger, tip=tip), constant(J), V)
    per = J * V * LENGTH * pitch_cm
    found = {kind: resistive(sheet, kind) / per for kind in ("sheet", "contact")}
    return found | {"finger": resistive(metal, "finger") / per, "shading": WIDTH / pitch_cm}


def crowded(pitch_cm: float) -> float:
    """Contact with crowding, for all the cell's current."""
    layout = comb(2.0, 10 * pitch_cm, MetalLine(60, line_resistance_ohm_per_cm=0), rsh=RSH, rhoc=1e3 * RHOC, bar_um=0.1)
    through = 1e-3 * J * (pitch_cm - WIDTH) * 0.2
    resistance = contact_loss_W(layout, constant(J)) / through**2 * 0.2  # Ω·cm of finger
    return resistance * J * 1e-3 * pitch_cm / V


def test_the_worked_example():
    found = fractions(0.15)
    assert found["sheet"] == pytest.approx(0.01261364, rel=1e-3)
    assert found["finger"] == pytest.approx(0.00757939, rel=1e-3)
    assert found["contact"] == pytest.approx(0.00336364, rel=1e-3)
    assert fractions(0.15, tapered=True)["finger"] == pytest.approx(0.00568455, rel=1e-3)
    assert crowded(0.15) == pytest.approx(0.00385367, rel=1e-3)


def test_shading_is_the_width_over_the_pitch():
    layout = comb(26.0, 1.5, MetalLine(60, line_resistance_ohm_per_cm=0), rsh=RSH, rhoc=2.0, bar_um=0.1)
    solution = cell_at(layout, constant(J), V, mode="resolved")
    assert 1 - solution.current_mA_per_cm2 / J == pytest.approx(0.04, rel=1e-3)
    under = solution.samples[solution.samples["part"] == "under finger"]
    assert under["area_cm2"].sum() / solution.area_cm2 == pytest.approx(0.04, rel=1e-3)
    lost = J * (under["area_cm2"] @ under["local_voltage_V"])
    assert solution.losses.rows["optical", "shading by fingers"] == pytest.approx(lost, rel=1e-3)


@pytest.mark.parametrize(
    ("tapered", "crowd", "pitch_mm", "total"),
    [
        (False, False, 1.5569374, 0.06348500),
        (True, False, 1.5869344, 0.06149941),
        (False, True, 1.5493823, 0.06399239),
        (True, True, 1.5790555, 0.06201655),
    ],
)
def test_best_pitch_of_the_worked_example(tapered, crowd, pitch_mm, total):
    from scipy.optimize import minimize_scalar

    def loss(pitch_cm: float) -> float:
        parts = fractions(pitch_cm, tapered)
        return sum(parts.values()) + (crowded(pitch_cm) - parts["contact"] if crowd else 0.0)

    best = minimize_scalar(loss, bracket=(0.12, 0.15, 0.2), tol=1e-4)
    assert best.x * 10 == pytest.approx(pitch_mm, rel=1e-3)
    assert best.fun == pytest.approx(total, rel=1e-3)


def test_lumped_limit():
    # ideal metal behind one resistance: the cell is the local law with R · area added
    end = Wires(IDEAL, 4, ends="high", end_resistance_mohm=40.0)
    layout = GridLayout(
        CellOutline(52, 52), front=Grid(Fingers(MetalLine(40, line_resistance_ohm_per_cm=0), 1300), wires=end)
    )
    curve = cell_curve(layout, SILICON)
    shaded = 4 * 10e-4 * 5.2  # cm² under the wires
    area = layout.outline.area_cm2
    resistance = 0.04 / 4 * area
    lit = diode_current(39.0 * (1 - shaded / area), 25.0, J02_nA_per_cm2=4.0).with_series_resistance(resistance)
    for point in curve.points:
        assert point.current_mA_per_cm2 == pytest.approx(lit.at(point.voltage_V), abs=5e-4 * 39)
    assert curve.maximum_power.power_mW_per_cm2 == pytest.approx(lit.maximum_power_mW_per_cm2, rel=1e-6)


def test_small_finger_resistance_adds_a_third():
    # short of large drops a finger is a resistance of r L² S/3 per area
    length, pitch, r = 1.5, 0.13, 2.0
    layout = comb(15.0, 1.3, MetalLine(40, line_resistance_ohm_per_cm=r), bar_um=0.1)
    lumped = SILICON.with_series_resistance(r * length**2 * pitch / 3)
    curve = cell_curve(layout, SILICON)
    assert curve.maximum_power.power_mW_per_cm2 == pytest.approx(lumped.maximum_power_mW_per_cm2, rel=5e-4)
    assert sum(curve.maximum_power.series_resistance_ohm_cm2.values()) == pytest.approx(
        r * length**2 * pitch / 3, rel=5e-3
    )


def test_smeared_and_resolved_agree():
    # the unit cell's curve comes from the resolved mode with ideal metal: sheet, contact and shading are in it
    def layout(resistance: float) -> GridLayout:
        fingers = Fingers(MetalLine(60, line_resistance_ohm_per_cm=resistance), 1500)
        bars = Busbars(MetalLine(100, line_resistance_ohm_per_cm=resistance / 20), 3)
        grid = Grid(
            fingers, bars, collection=CollectionPoints(per_busbar=2), sheet_resistance_ohm_per_sq=120.0,
            contact_resistivity_mohm_cm2=2.0,
        )  # fmt: skip
        return GridLayout(CellOutline(15, 60), front=grid)

    unit = comb(10.0, 1.5, MetalLine(60, line_resistance_ohm_per_cm=0), rsh=120.0, rhoc=2.0, bar_um=0.1)
    points = cell_curve(unit, SILICON, mode="resolved", voltages_V=np.linspace(0.3, 0.74, 23)).points
    v, j, slope = (
        np.array([getattr(p, n) for p in points]) for n in ("voltage_V", "current_mA_per_cm2", "slope_mA_per_cm2_V")
    )
    curve = falling_curve(v, j * 1e-3, slope * 1e-3)
    local = CellCurrent(curve, SILICON.dark, lateral=True)
    smeared = cell_curve(layout(3.0), local).maximum_power
    resolved = cell_curve(layout(3.0), SILICON, mode="resolved").maximum_power
    assert smeared.power_mW == pytest.approx(resolved.power_mW, rel=2e-3)
    lateral = (
        120.0 * 0.144**3 / 0.15 / 12 * 1e-3 * resolved.current_mA_per_cm2**2
    )  # mW/cm²: what counting twice would cost
    assert lateral / resolved.power_mW_per_cm2 > 4 * 2e-3
    assert abs(resolved.losses.misclosure_mW) < 1e-6 * resolved.power_mW


def test_a_broken_finger_is_fed_from_one_side():
    # finger of length L between two ideal busbars: i² losses L³/12 if whole; broken at distance a from one of them, the
    # two pieces are fed from one end each: (a³ + (L − a)³)/3
    length, r, gap = 2.0, 3.0, 0.2
    bars = Busbars(MetalLine(2, line_resistance_ohm_per_cm=0), positions_mm=[0.001, 10 * length - 0.001])

    def finger_loss(breaks):
        grid = Grid(
            Fingers(MetalLine(50, line_resistance_ohm_per_cm=r), 1500), bars, collection=CollectionPoints(per_busbar=1),
            breaks=breaks, sheet_resistance_ohm_per_sq=1e5, contact_resistivity_mohm_cm2=1.0,
        )  # fmt: skip
        layout = GridLayout(CellOutline(1.5, 10 * length), front=grid)
        return resistive(cell_at(layout, constant(1.0), 0.5, mode="resolved"), "finger")

    per = 1e3 * r * (1e-3 * (0.15 - 0.005)) ** 2
    assert finger_loss(None) == pytest.approx(per * length**3 / 12, rel=5e-3)
    for a in (0.5, 1.4):
        broken = finger_loss(Breaks(10 * gap * 100, [(0, 10 * a)]))
        # the sheet over the gap sends its current to the pieces' ends, half to each
        one, two = a - gap / 2, length - a - gap / 2
        direct = sum(piece**3 / 3 + gap / 2 * piece**2 + (gap / 2) ** 2 * piece for piece in (one, two))
        assert broken == pytest.approx(per * direct, rel=1e-2)


def test_interdigitated_fingers():
    # each comb: current of S J per length of finger, and of the strip beyond its end at the end; the outermost fingers
    # of a comb take 0.75 and 1.25 of the period up to the outline
    height, bar, gap, pitch = 3.0, 0.05, 0.02, 0.12
    finger, r = MetalLine(200, line_resistance_ohm_per_cm=0.8), 0.8
    outline = CellOutline(12.0, 10 * height)
    layout = interdigitated_layout(
        outline, finger, MetalLine(10000 * bar, line_resistance_ohm_per_cm=0), 10000 * pitch, 10000 * gap,
        CollectionPoints(per_busbar=1),
    )  # fmt: skip
    solution = cell_at(layout, constant(42.0), 0.6)
    length, beyond = height - 2 * bar - gap, bar + gap
    per_line = r * (0.042 * pitch) ** 2 * (length**3 / 3 + beyond * length**2 + beyond**2 * length)
    assert resistive(solution, "finger") == pytest.approx(1e3 * 2 * (8 + 0.75**2 + 1.25**2) * per_line, rel=1e-3)
    assert math.isclose(solution.current_A, 0.042 * outline.area_cm2, rel_tol=1e-9)


def test_front_and_rear_in_series():
    # the same grid on both faces costs twice the series resistance
    def grid(collects):
        return Grid(
            Fingers(MetalLine(40, line_resistance_ohm_per_cm=2.0), 1300),
            Busbars(MetalLine(0.1, line_resistance_ohm_per_cm=0), 2),
            collection=CollectionPoints(per_busbar=1), collects=collects,
        )  # fmt: skip

    one = cell_at(GridLayout(CellOutline(13, 40), front=grid("electrons")), constant(38.0), 0.5)
    both = cell_at(GridLayout(CellOutline(13, 40), front=grid("electrons"), rear=grid("holes")), constant(38.0), 0.5)
    assert both.losses.sum_of("resistance") == pytest.approx(2 * one.losses.sum_of("resistance"), rel=1e-9)


def test_interpolation_of_a_curve():
    # points as dense as those of current_voltage, with slopes, against the law they come from
    voc = SILICON.voc_V
    v = voc * np.array([0, 0.15, 0.35, 0.55, 0.7, 0.78, 0.82, 0.85, 0.88, 0.91, 0.94, 0.97, 1, 1.03])
    j, slope = SILICON.law(v)
    fine = np.linspace(0, 1.03 * voc, 2001)
    error = np.abs(falling_curve(v, j, slope)(fine)[0] - SILICON.law(fine)[0])
    assert error[fine < 0.95 * voc].max() < 1e-4 * 0.039
    table = current_from_table(v, j * 1e3)
    assert np.abs(table.at(fine[fine < voc]) - SILICON.at(fine[fine < voc])).max() < 5e-3 * 39
