"""Every example runs, leaves its files, and its headline number is what physics says."""

import importlib.util
import math
import warnings
from pathlib import Path

import numpy as np
import pytest
from scipy.special import i0, i1, k0, k1

import fem_carriers as fc
from fem_carriers.constants import ELEMENTARY_CHARGE_C

EXAMPLES = Path(__file__).resolve().parents[1] / "examples"


@pytest.fixture
def example(tmp_path, monkeypatch):
    """Import an example by name, away from its folder; what it writes lands in a temporary one."""
    monkeypatch.chdir(tmp_path)

    def load(name):
        spec = importlib.util.spec_from_file_location(f"example_{name}", EXAMPLES / f"{name}.py")
        module = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(module)
        return module

    return load


def assert_written(*names):
    found = {p.name: p.stat().st_size for p in Path("results").iterdir()}
    for name in names:
        assert found.get(name, 0) > 1000, f"{name} not among {found}"


def number_after(text, words):
    """The number that follows these words in the printed text."""
    return float(text.split(words, 1)[1].split()[0].strip(",;%"))


@pytest.mark.parametrize("path", sorted(EXAMPLES.glob("*.py")), ids=lambda p: p.stem)
def test_examples_are_short_and_say_what_they_solve(path):
    text = path.read_text()
    assert len(text.splitlines()) <= 80
    docstring = text.split('"""')[1]
    assert "?" in docstring
    assert "Δn" in docstring
    assert 'if __name__ == "__main__":\n    main()' in text


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


def test_contact_pitch_sweep(example, capsys):
    """Shading is the covered share; no more is collected than by a fin whose density is even over its depth.

    The fin collects tanh(x)/x of what is generated beside the strip, x = its length over √(D τeff): the textbook fin
    with a perfect sink at its root. It has neither the constriction below the strip nor Auger recombination and metal.
    """
    module = example("contact_pitch_sweep")
    best, table, found, checked = module.main()
    assert len(table) >= 12
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
    assert found == pytest.approx(best.value, rel=2e-3)
    assert checked == pytest.approx(found, rel=1e-2)
    out = capsys.readouterr().out
    assert number_after(out, "best pitch") == pytest.approx(best.location, rel=1e-3)
    assert out.count("low injection") == 1
    names = [f"contact_pitch_sweep{end}" for end in (".csv", ".png", ".vtu", "_excess_density.png")]
    assert_written(*names)


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
