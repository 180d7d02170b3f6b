"""Every example runs, leaves its files, and its headline number is what physics says."""

import math
import re
import runpy
import sys
import warnings

import numpy as np
import pytest
from example_files import EXAMPLES, assert_written, number_after
from scipy.optimize import brentq
from scipy.special import i0, i1, k0, k1

import fem_carriers as fc
from fem_carriers.constants import ELEMENTARY_CHARGE_C


@pytest.mark.parametrize("path", sorted(EXAMPLES.glob("*.py")), ids=lambda p: p.stem)
def test_examples_are_short_and_say_what_they_solve(path):
    text = path.read_text()
    assert len(text.splitlines()) <= 80
    docstring = text.split('"""')[1]
    assert "?" in docstring
    assert "Δn" in docstring
    assert text.count('if __name__ == "__main__":') == 1
    assert text.endswith("main()\n")


def test_half_lit_slab(example, capsys):
    """Parabola and straight line matched at the shadow line: 3/4, 1/4, top 9 G W²/(128 D) at 3W/8 (elementary)."""
    module = example("half_lit_slab")
    lit, dark, top = module.main()
    width_cm, D = module.WIDTH_UM * 1e-4, 1200 * 1.380649e-23 * 298.15 / ELEMENTARY_CHARGE_C
    assert (lit, dark) == (pytest.approx(0.75, abs=1e-9), pytest.approx(0.25, abs=1e-9))
    assert top["x_um"] == pytest.approx(0.375 * module.WIDTH_UM)
    expected = 9 * module.RATE_PER_CM3_S * width_cm**2 / (128 * D)
    assert top["excess_density_per_cm3"] == pytest.approx(expected, rel=1e-6)
    assert number_after(capsys.readouterr().out, "lit end") == pytest.approx(0.75, abs=1e-9)
    assert_written("half_lit_slab.png")


def test_drift_field(example, capsys):
    """Roots of D/L² ∓ v/L − 1/τ = 0: their difference is v τ and their product D τ (Vieta)."""
    module = example("drift_field")
    (down, up), _ = module.main()
    tau = module.LIFETIME_US * 1e-6
    D, v = 1160 * 1.380649e-23 * 298.15 / ELEMENTARY_CHARGE_C, 1160 * module.FIELD_V_PER_CM
    assert down - up == pytest.approx(v * tau * 1e4, rel=1e-3)
    assert math.sqrt(down * up) == pytest.approx(math.sqrt(D * tau) * 1e4, rel=1e-3)
    assert number_after(capsys.readouterr().out, "downstream: decay length") == pytest.approx(down, abs=1e-3)
    assert_written("drift_field.png")


def test_imported_mesh(example):
    """The same cell described and meshed here, instead of read from a file, collects the same."""
    module = example("imported_mesh")
    solution, collected = module.main()
    s = module.surfaces
    finger = fc.Strip("finger", 50, J0_fA_per_cm2=500, layer=fc.DopedLayer("n", 60), contact=fc.Contact("front"))
    cell = fc.UnitCell(
        fc.Base("p", doping_per_cm3=5e16, lifetime_us=100, thickness_um=180), 2 * module.WIDTH_UM,
        front=fc.Face(s["front_passivated"], [finger]), rear=s["rear"],
        light=fc.Light.monochromatic(flux_per_cm2_s=2e16, wavelength_nm=900),
    )  # fmt: skip
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", fc.ModelWarning)
        own = fc.solve_excess(fc.problem(cell))
    # The shadow line crosses facets of the imported mesh's rear, where 0.4 % of the light leaves again.
    assert solution.ledger.generated_mA_per_cm2 == pytest.approx(own.ledger.generated_mA_per_cm2, rel=1e-5)
    assert collected[-1] == pytest.approx(own.collected_mA_per_cm2["front"], rel=2e-4)
    assert abs(collected[2] - collected[1]) < abs(collected[1] - collected[0]) < 2e-3 * collected[2]
    assert_written("imported_mesh.png", "imported_mesh.vtu")


def fin_length_cm(base, front_J0, rear_J0):
    """√(D τeff) of a wafer whose density is even over its depth: 1/τeff = 1/τ + (S1 + S2)/W, S = J0 N/(q ni²).

    Low injection, without Auger and radiative recombination. J0 in fA/cm².
    """
    eq = base.equilibrium()
    srv = (front_J0 + rear_J0) * 1e-15 * eq.p0 / (ELEMENTARY_CHARGE_C * eq.ni**2)
    rate = 1 / (base.lifetime_us * 1e-6) + srv / (base.thickness_um * 1e-4)
    return math.sqrt(eq.Dn / rate)


def test_collected_current_sweep(example, capsys):
    """Shading is the covered share; no more is collected than by a fin whose density is even over its depth.

    The fin collects tanh(x)/x of what is generated beside the strip, x = its length over √(D τeff): the textbook fin
    with a perfect sink at its root. It has neither the constriction below the strip nor Auger recombination and metal.
    """
    module = example("collected_current_sweep")
    best, table, found, checked = module.main((80, 200, 300, 400, 800))
    assert (table["failure"] == "").all()
    pitch, generated = table["pitch_um"], table["generated_mA_per_cm2"]
    shaded = module.FINGER_UM / pitch
    np.testing.assert_allclose(table["shaded_mA_per_cm2"] / table["incident_mA_per_cm2"], shaded, rtol=1e-9)
    np.testing.assert_allclose(generated / (1 - shaded), generated[0] / (1 - shaded[0]), rtol=1e-9)
    x = (pitch - module.STRIP_UM) / 2 * 1e-4 / fin_length_cm(module.wafer, 8, 12)
    lit, beside = pitch - module.FINGER_UM, pitch - module.STRIP_UM
    fin = (lit - beside + beside * np.tanh(x) / x) / lit
    share = table[module.COLLECTED] / generated
    assert (share < fin).all()
    assert (np.diff(share) < 0).all()
    assert not best.at_end
    assert best.flat_from < best.location < best.flat_to
    assert found == pytest.approx(best.value, rel=1e-2)
    assert checked == pytest.approx(found, rel=1e-2)
    out = capsys.readouterr().out
    assert number_after(out, "best pitch") == pytest.approx(best.location, rel=1e-3)
    assert out.count("low injection") == 1
    names = [f"collected_current_sweep{end}" for end in (".csv", ".png", ".vtu", "_excess_density.png")]
    assert_written(*names)


def current_A_per_cm2(table):
    """Current density at maximum power."""
    return 1e-3 * table["maximum_power_mW_per_cm2"] / table["maximum_power_voltage_V"]


def layer_share(table, loss, sheet_ohm, width_um):
    """Power lost in the front layer over J² R_sh p (p − w)/12.

    That is the loss where all of the current J p enters the layer evenly over p − w: J p/(p − w) times the distance
    from the middle, squared and integrated (elementary).
    """
    pitch, width = table["pitch_um"] * 1e-4, width_um * 1e-4
    return table[loss] * 1e-3 / (current_A_per_cm2(table) ** 2 * sheet_ohm * pitch * (pitch - width) / 12)


def test_contact_pitch_sweep(example, capsys):
    """Shade, layer and finger contact against closed formulas; groups of losses add up to what is not delivered.

    The base carries a part of the sideways current of wide pitches, so the layer loses less than it would alone. Under
    a finger much narrower than the transfer length, √(1.5 mΩ cm²/130 Ω) = 34 µm, the contact is loaded evenly:
    J² ρc p/w.
    """
    module = example("contact_pitch_sweep")
    best, table, curve = module.main((500, 800, 1100, 1500, 2200))
    assert (table["failure"] == "").all()
    pitch, width = table["pitch_um"], module.finger.width_um
    shaded_to_lit = table["shaded_mW_per_cm2"] / table["delivered_mW_per_cm2"] * (pitch - width) / width
    np.testing.assert_allclose(shaded_to_lit, shaded_to_lit[0], rtol=1e-9)
    jsc_where_lit = table["jsc_mA_per_cm2"] * pitch / (pitch - width)
    assert (np.diff(jsc_where_lit) > 0).all()  # less metal to recombine at
    np.testing.assert_allclose(jsc_where_lit, jsc_where_lit[0], rtol=5e-3)
    share = layer_share(table, "lost_layer_on_front_mW_per_cm2", 130, width)
    assert share.between(0.9, 1.005).all()
    assert (np.diff(share[pitch > 4 * module.wafer.thickness_um]) < 0).all()
    contact = 1e3 * current_A_per_cm2(table) ** 2 * 1.5e-3 * pitch / width
    np.testing.assert_allclose(table["lost_contact_front_finger_mW_per_cm2"], contact, rtol=5e-3)
    assert (np.diff(table["voc_V"]) > 0).all()
    lost = module.grouped(table)[[kind for kind in module.LOST if kind != "shading"]].sum(axis=1)
    left = table["delivered_mW_per_cm2"] - table["maximum_power_mW_per_cm2"]
    np.testing.assert_allclose(lost, left, rtol=1e-9)
    assert not best.at_end
    assert best.flat_from < best.location < best.flat_to
    assert abs(curve.efficiency_percent - best.value) < best.value_bar
    out = capsys.readouterr().out
    assert number_after(out, "best pitch") == pytest.approx(best.location, rel=1e-3)
    assert max(len(row) for row in out.splitlines()) <= 110
    largest = re.findall(r" (\d\.\d\d)(?:;|$)", out.split("Limited there by (mW/cm²):")[1].splitlines()[0])
    assert len(largest) == 3
    assert largest == sorted(largest, reverse=True)
    ends = (".csv", ".png", ".vtu", "_curve.png", "_losses.png", "_excess_density.png")
    assert_written(*(f"contact_pitch_sweep{end}" for end in ends))


def test_option_for_collected_current(monkeypatch):
    """`--collected` runs the example of that name instead."""
    run, asked = runpy.run_path, []
    monkeypatch.setattr(runpy, "run_path", lambda path, run_name: asked.append((path, run_name)))
    script = str(EXAMPLES / "contact_pitch_sweep.py")
    monkeypatch.setattr(sys, "argv", [script, "--collected"])
    run(script, run_name="__main__")
    assert asked == [(str(EXAMPLES / "collected_current_sweep.py"), "__main__")]


def voc_without_dimensions_V(base, J0_fA_per_cm2, generated_mA_per_cm2):
    """Open circuit where the density is the same everywhere: what is generated recombines at J0 and in the bulk.

    Auger recombination by A. Richter et al., Phys. Rev. B 86, 165202 (2012), eq. 18, and radiative recombination with
    B = 4.73e-15 cm³/s of T. Trupke et al., J. Appl. Phys. 94, 4930 (2003); both from memory. Base n-type.
    """
    eq, width_cm = base.equilibrium(), base.thickness_um * 1e-4
    enhanced = 1 + 13 * (1 - math.tanh((eq.n0 / 3.3e17) ** 0.66))

    def product(dn):
        return (eq.n0 + dn) * (eq.p0 + dn)

    def surplus(log_dn):
        dn = math.exp(log_dn)
        excess = product(dn) - eq.ni**2
        rate = dn / (base.lifetime_us * 1e-6)
        rate += excess * (2.5e-31 * enhanced * eq.n0 + 3.0e-29 * dn**0.92 + 4.73e-15)
        surfaces = J0_fA_per_cm2 * 1e-15 * excess / eq.ni**2
        return ELEMENTARY_CHARGE_C * width_cm * rate + surfaces - 1e-3 * generated_mA_per_cm2

    dn = math.exp(brentq(surplus, math.log(1e10), math.log(1e18)))
    return eq.VT * math.log(product(dn) / eq.ni**2)


def test_passivated_contacts(example, capsys):
    """Metal that adds no recombination leaves the open-circuit voltage that of the light, without any dimension."""
    module = example("passivated_contacts")
    table, best, curves = module.main(widths_um=(15, 40), pitches_um=(500, 900, 1300, 1800))
    assert (table["failure"] == "").all()
    expected = [voc_without_dimensions_V(module.wafer, 6 + 3, j) for j in table["jsc_mA_per_cm2"]]
    np.testing.assert_allclose(table["voc_V"], expected, atol=1e-3)
    jsc_where_lit = table["jsc_mA_per_cm2"] / (1 - table[module.WIDTH] / table["pitch_um"])
    np.testing.assert_allclose(jsc_where_lit, jsc_where_lit[0], rtol=1e-4)  # no carrier is lost to metal
    assert not any(b.at_end for b in best.values())
    assert best[15].location < best[40].location
    assert best[15].value > best[40].value
    assert curves[0].voc_V > curves[1].voc_V
    gain = curves[0].efficiency_percent - curves[1].efficiency_percent
    assert gain > 0
    assert number_after(capsys.readouterr().out, "under the metal") == pytest.approx(gain, abs=6e-3)
    assert_written("passivated_contacts.csv", "passivated_contacts.png", "passivated_contacts_losses.png")


def test_interdigitated_rear(example):
    """Holes from above the n-type strip arrive less often than in a fin with a perfect sink above the emitter's edge.

    The fin is even over its depth, lit from the gap g to its middle at l, and long √(D τeff), with the larger D of
    high injection, 2 Dn Dp/(Dn + Dp), and without recombination at metal: L sinh((l − g)/L)/((l − g) cosh(l/L)).
    """
    module = example("interdigitated_rear")
    fractions = np.array([0.4, 0.75, 0.88])
    table, best, line = module.main(fractions)
    base = module.wafer
    eq = base.equilibrium()
    rate = 1 / (base.lifetime_us * 1e-6)
    rate += (10 + 40) * 1e-15 * eq.n0 / (ELEMENTARY_CHARGE_C * eq.ni**2 * base.thickness_um * 1e-4)
    L = math.sqrt(2 * eq.Dn * eq.Dp / (eq.Dn + eq.Dp) / rate) * 1e4
    g, l = module.GAP_SHARE * module.PITCH_UM / 2, (1 - fractions) * module.PITCH_UM / 2  # noqa: E741
    fin = L * np.sinh((l - g) / L) / ((l - g) * np.cosh(l / L))
    share = table["above_base_percent"].to_numpy() / 100
    assert (share < fin).all()
    assert (np.diff(share) > 0).all()
    assert (np.diff(table["jsc_mA_per_cm2"]) > 0).all()
    assert not best.at_end
    near_front = line.drop(columns="distance_um")
    assert (np.diff(near_front, axis=0) > -1e-4 * near_front.to_numpy().max()).all()  # highest above the n-type strip
    middle = near_front.iloc[-1].to_numpy()
    assert (np.diff(middle) < 0).all()  # a wider strip holds more
    ends = (".csv", ".png", "_near_front.png", "_jsc.png", "_excess_density.png")
    assert_written(*(f"interdigitated_rear{end}" for end in ends))


@pytest.mark.slow
def test_sheet_resistance(example, capsys):
    """Layer loss against the closed formula; a new best pitch wins back a part; it falls less than R_sh^(−1/3)."""
    module = example("sheet_resistance")
    table, costs = module.main()
    assert (table["failure"] == "").all()
    narrow = table[table["pitch_um"] == min(module.PITCHES_UM)]
    share = layer_share(narrow, module.LAYER_LOSS, narrow[module.SHEET], module.finger.width_um)
    assert share.between(0.9, 1.005).all()
    assert (costs["cost best (%)"][1:] < costs["cost fixed (%)"][1:]).all()
    assert (np.diff(costs["cost fixed (%)"]) > 0).all()
    sheets, pitches = costs["R_sh (Ω/sq)"].to_numpy(), costs["best pitch (µm)"].to_numpy()
    assert (sheets[-1] / sheets[0]) ** (-1 / 3) < pitches[-1] / pitches[0] < 1
    cost = number_after(capsys.readouterr().out, f"to {sheets[-1]:g} Ω/sq:")
    assert cost == pytest.approx(costs["cost fixed (%)"].iloc[-1], abs=1e-3)
    assert_written("sheet_resistance.csv", "sheet_resistance.png")


def test_temperature(example, capsys):
    """Voc from J0 ∝ ni², ni ∝ T^2.54 exp(−6726 K/T) (K. Misiakos, D. Tsamakis, J. Appl. Phys. 74, 3293 (1993), eq. 4).

    Jsc = J0 exp(qV/kT) at both temperatures. Fill factor without resistance after M. A. Green, Solid-State Electron.
    24, 788 (1981): (v − ln(v + 0.72))/(v + 1), v = qVoc/kT; with resistance it falls a little faster. From memory.
    """
    module = example("temperature")
    table, coefficients = module.main()
    T, voc, ff = (table[c].to_numpy() for c in ("base.temperature_K", "voc_V", "fill_factor_percent"))
    k_over_q = 1.380649e-23 / ELEMENTARY_CHARGE_C
    ni_squared = 2 * (2.54 * np.log(T / T[0]) - 6726 * (1 / T - 1 / T[0]))
    expected = k_over_q * T * (voc[0] / (k_over_q * T[0]) - ni_squared)
    np.testing.assert_allclose(voc, expected, atol=1e-3)
    v = voc / (k_over_q * T)
    ideal = (v - np.log(v + 0.72)) / (v + 1)
    fall = (ff / ff[0]) / (ideal / ideal[0])
    assert (fall <= 1).all()
    assert (fall > 0.985).all()
    parts = sum(coefficients[name] for name in ("Jsc", "Voc", "FF"))
    assert coefficients["efficiency"] == pytest.approx(parts, abs=0.03)  # the slopes of a product add up
    assert number_after(capsys.readouterr().out, "efficiency:") == pytest.approx(coefficients["efficiency"], abs=1e-3)
    assert_written("temperature.csv", "temperature.png")


@pytest.mark.slow
@pytest.mark.slow
def test_rear_point_contacts(example):
    """Holes meet the resistance of Cox and Strack's formula, and at most Fischer's addition (see the example).

    That addition lets all current enter at the front. The coarse mesh may miss some of the crowding at the dots' edges.
    """
    module = example("rear_point_contacts")
    table, best = module.main()
    assert (table["failure"] == "").all()
    pitch, d = table["pitch_um"] * 1e-4, table["diameter_um"] * 1e-4
    spreading = pitch**2 * 1.5 / (math.pi * d) * np.arctan(4 * 150e-4 / d)
    assert (table["base_ohm_cm2"] > 0.95 * spreading).all()
    assert (table["base_ohm_cm2"] < table["formula_ohm_cm2"]).all()
    optima = [fc.best_point(rows, "pitch_um", "efficiency_percent") for _, rows in table.groupby("diameter_um")]
    assert not any(optimum.at_end for optimum in optima)
    assert (np.diff([optimum.location for optimum in optima]) > 0).all()  # larger dots lie farther apart
    by_pitch = table.pivot(index="diameter_um", columns="pitch_um", values="voc_V").to_numpy()
    assert (np.diff(by_pitch, axis=1) > 0).all()  # fewer dots recombine less
    assert (np.diff(by_pitch, axis=0) < 0).all()
    assert best["efficiency_percent"] == table["efficiency_percent"].max()
    ends = (".csv", ".png", ".vtu", "_losses.png", "_potential.png")
    assert_written(*(f"rear_point_contacts{end}" for end in ends))


@pytest.mark.slow
def test_dots_3d(example):
    """As in two dimensions, against a radial fin around the dot: a disc of the cell's area with the same τeff.

    D (r Δn′)′/r − Δn/τeff + G = 0 between r1 (Δn = 0) and r2 (Δn′ = 0), solved by modified Bessel functions.
    """
    module = example("dots_3d")
    best, table, _ = module.main()
    assert (table["failure"] == "").all()
    pitch, generated = table["pitch_um"].to_numpy(), table["generated_mA_per_cm2"].to_numpy()
    shaded = math.pi * module.DOT_UM**2 / 4 / pitch**2
    np.testing.assert_allclose(table["shaded_mA_per_cm2"] / table["incident_mA_per_cm2"], shaded, rtol=1e-6)
    share = table["collected_front_mA_per_cm2"].to_numpy() / generated
    length = fin_length_cm(module.wafer, 8, 12) * 1e4
    fin = radial_fin(module.DOT_UM / 2 / length, pitch / math.sqrt(math.pi) / length)
    assert (share < fin).all()
    assert (np.diff(share) < 0).all()
    assert not best.at_end
    assert_written("dots_3d.csv", "dots_3d.png", "dots_3d.vtu", "dots_3d_excess_density.png")


def radial_fin(a, b):
    """Share of uniform generation between radii a < b (in units of the fin length) that arrives at the sink at a."""
    slope = (k1(a) * i1(b) - i1(a) * k1(b)) / (k0(a) * i1(b) + i0(a) * k1(b))
    return 2 * a * slope / (b**2 - a**2)
