"""Behaviour of the materials package: derivatives, limits, refusals."""

from __future__ import annotations

import numpy as np
import pytest

from fem_carriers.errors import InputError
from fem_carriers.materials import recombination, silicon
from fem_carriers.materials.absorption import AbsorptionTable, absorption_per_cm, read_absorption_csv, refractive_index
from fem_carriers.materials.optics import SCHEMES, absorptance, generation_mA_per_cm2
from fem_carriers.materials.spectrum import Spectrum, am15g

NI = 9.65e9
DOPED_P, DOPED_N, UNDOPED = (NI**2 / 1.5e16, 1.5e16), (5e15, NI**2 / 5e15), (NI, NI)
POINTS = {"p": DOPED_P, "n": DOPED_N, "undoped": UNDOPED}

LAWS = {
    "constant_lifetime": lambda dn, n0, p0: recombination.constant_lifetime(dn, 1e-4),
    "srh": lambda dn, n0, p0: recombination.srh(dn, n0, p0, NI, 1e-4, 1e-3),
    "srh_off_midgap": lambda dn, n0, p0: recombination.srh(dn, n0, p0, NI, 1e-4, 1e-3, trap_level_kT=-8.0),
    "auger_richter2012": recombination.auger_richter2012,
    "constant_auger": lambda dn, n0, p0: recombination.constant_auger(dn, n0, p0, 2.8e-31, 9.9e-32),
    "radiative": lambda dn, n0, p0: recombination.radiative(dn, n0, p0, 4.73e-15),
    "surface_srv": lambda dn, n0, p0: recombination.surface_srv(dn, 123.0),
    "surface_J0": lambda dn, n0, p0: recombination.surface_J0(dn, n0, p0, NI, 50e-15),
    "surface_J02": lambda dn, n0, p0: recombination.surface_J02(dn, n0, p0, NI, 1e-9),
}


def law_at_point():
    return [pytest.param(law, *POINTS[base], id=f"{name}-{base}") for name, law in LAWS.items() for base in POINTS]


@pytest.mark.parametrize(("law", "n0", "p0"), law_at_point())
def test_derivative_is_the_complex_step(law, n0, p0):
    dn = np.concatenate([-np.geomspace(1e-3, 0.9 * min(n0, p0), 7)[::-1], np.geomspace(1e-3, 1e20, 47)])
    step = 1e-20 * np.abs(dn)
    _, slope = law(dn, n0, p0)
    expected = law(dn + 1j * step, n0, p0)[0].imag / step
    np.testing.assert_allclose(slope, expected, rtol=1e-10)


@pytest.mark.parametrize(("law", "n0", "p0"), law_at_point())
def test_zero_excess_recombines_nothing_and_has_a_finite_positive_slope(law, n0, p0):
    for zero in (0.0, 0j, np.zeros(2)):
        rate, slope = law(zero, n0, p0)
        assert np.all(rate == 0)
        assert np.all(np.isfinite(slope))
        assert np.all(np.real(slope) > 0)


@pytest.mark.parametrize(("law", "n0", "p0"), law_at_point())
def test_depletion_generates(law, n0, p0):
    rate, _ = law(-0.5 * min(n0, p0), n0, p0)
    assert rate < 0


@pytest.mark.parametrize("law", LAWS.values(), ids=LAWS)
def test_complex_excess_below_zero_is_finite(law):
    """Values a Newton iterate may pass through: Δn below −n0 makes np negative."""
    rate, slope = law(np.array([-1e9, -1.0, 0.0, 1.0]) + 1e-30j, *DOPED_P)
    assert np.all(np.isfinite(rate))
    assert np.all(np.isfinite(slope))


@pytest.mark.parametrize("law", LAWS.values(), ids=LAWS)
def test_arrays_broadcast_and_scalars_stay_scalars(law):
    dn = np.array([1e12, 1e14, 1e16])
    N = np.array([[1e15], [1e16]])
    rate, slope = law(dn, NI**2 / N, N)
    single_rate, single_slope = law(1e14, NI**2 / 1e16, 1e16)
    assert np.ndim(single_rate) == np.ndim(single_slope) == 0
    np.testing.assert_allclose(np.broadcast_to(rate, (2, 3))[1, 1], single_rate, rtol=1e-15)
    np.testing.assert_allclose(np.broadcast_to(slope, (2, 3))[1, 1], single_slope, rtol=1e-15)


def test_tiny_excess_keeps_its_digits():
    """np − ni² of 1e-6 cm⁻³ on 1.5e16: the products themselves agree to 22 digits."""
    n0, p0 = DOPED_P
    rate, _ = recombination.surface_J0(1e-6, n0, p0, NI, 1e-13)
    assert rate == pytest.approx(1e-13 / 1.602176634e-19 * 1e-6 * 1.5e16 / NI**2, rel=1e-11)
    rate, _ = recombination.surface_J02(1e-6, n0, p0, NI, 1e-9)
    assert rate == pytest.approx(0.5 * 1e-9 / 1.602176634e-19 * 1e-6 * 1.5e16 / NI**2, rel=1e-9)


def test_srh_lifetime_goes_from_minority_to_the_sum():
    """Low injection τ of the minority carrier, high injection τn0 + τp0 (Shockley and Read 1952)."""
    lifetime = lambda dn, base: dn / recombination.srh(dn, *base, NI, 1e-4, 1e-3)[0]
    assert lifetime(1e8, DOPED_P) == pytest.approx(1e-4, rel=1e-4)
    assert lifetime(1e8, DOPED_N) == pytest.approx(1e-3, rel=1e-4)
    assert lifetime(1e22, DOPED_P) == pytest.approx(1.1e-3, rel=1e-4)


def test_shallow_trap_is_weaker():
    midgap, _ = recombination.srh(1e12, *DOPED_P, NI, 1e-4, 1e-3)
    shallow, _ = recombination.srh(1e12, *DOPED_P, NI, 1e-4, 1e-3, trap_level_kT=15.0)
    assert shallow < 0.5 * midgap


def test_auger_reduces_to_its_doping_terms_and_to_its_injection_term():
    """Richter et al. 2012: without injection C = g·2.5e-31 n0²; far above doping R → 3e-29 Δn^2.92."""
    n0, p0 = 1e19, NI**2 / 1e19  # Coulomb enhancement has died out: tanh((1e19/3.3e17)^0.66) = 1 to 1e-8
    rate, _ = recombination.auger_richter2012(1.0, n0, p0)
    assert 1 / rate == pytest.approx(1 / (2.5e-31 * n0**2), rel=1e-6)
    rate, _ = recombination.auger_richter2012(1e17, NI, NI)
    assert rate == pytest.approx(3.0e-29 * 1e17**2.92, rel=1e-5)


def test_constant_auger_high_injection_is_ambipolar():
    rate, _ = recombination.constant_auger(1e20, NI, NI, 2e-31, 1e-31)
    assert rate == pytest.approx(3e-31 * 1e60, rel=1e-8)


def test_surface_J02_follows_half_the_splitting():
    dn = np.sqrt(np.exp(0.6 / 0.025852)) * NI  # undoped: np = ni² exp(V/V_T)
    rate, _ = recombination.surface_J02(dn - NI, NI, NI, NI, 1e-9)
    assert rate * 1.602176634e-19 == pytest.approx(1e-9 * np.expm1(0.6 / (2 * 0.025852)), rel=1e-12)


def test_J0_scales_with_the_square_of_ni():
    assert recombination.J0_temperature_factor(298.15) == 1
    ratio = silicon.intrinsic_density_per_cm3(348.15) / silicon.intrinsic_density_per_cm3(298.15)
    assert recombination.J0_temperature_factor(348.15) == pytest.approx(ratio**2)


def test_mobility_of_undoped_silicon_is_the_lattice_value():
    assert silicon.mobility_cm2_per_Vs("n", 0.0) == pytest.approx(1414.0)
    assert silicon.mobility_cm2_per_Vs("p", 0.0) == pytest.approx(470.5)


@pytest.mark.parametrize("carrier", ["n", "p"])
def test_mobility_falls_with_doping_and_temperature(carrier):
    N, T = np.geomspace(1e13, 1e19, 40), np.linspace(250, 400, 31)[:, None]
    mobility = silicon.mobility_cm2_per_Vs(carrier, N, T)
    assert mobility.shape == (31, 40)
    assert np.all(np.diff(mobility, axis=1) < 0)
    assert np.all(np.diff(mobility[:, N < 1e17], axis=0) < 0)
    np.testing.assert_allclose(mobility[10], silicon.mobility_cm2_per_Vs(carrier, N), rtol=1e-14)  # 300 K


@pytest.mark.parametrize("doping_type", ["p", "n"])
def test_resistivity_and_doping_are_inverse(doping_type):
    N = np.geomspace(*silicon.DOPING_RANGE_PER_CM3[doping_type], 101).reshape(1, 101)
    resistivity = silicon.resistivity_ohm_cm(doping_type, N)
    assert np.all(np.diff(resistivity) < 0)
    np.testing.assert_allclose(silicon.doping_per_cm3(doping_type, resistivity), N, rtol=1e-11)
    assert isinstance(silicon.doping_per_cm3(doping_type, 1.0), float)


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: silicon.resistivity_ohm_cm("p", 1e9), "doping_per_cm3 = 1e+09.*1e+12 to 1e+21"),
        (lambda: silicon.resistivity_ohm_cm("n", [1e15, np.nan]), "doping_per_cm3 = nan"),
        (lambda: silicon.doping_per_cm3("n", 1e6), "resistivity_ohm_cm = 1e+06"),
        (lambda: silicon.doping_per_cm3("p", 0.0), "resistivity_ohm_cm = 0"),
        (lambda: silicon.doping_per_cm3("b", 1.0), "doping_type = 'b'"),
        (lambda: silicon.mobility_cm2_per_Vs("electron", 1e15), "carrier = 'electron'"),
        (lambda: absorption_per_cm(249.9), "wavelength_nm = 249.9: allowed is 250 to 1450"),
        (lambda: absorption_per_cm([500.0, 1451.0]), "wavelength_nm = 1451"),
        (lambda: absorption_per_cm(np.nan), "wavelength_nm = nan"),
        (lambda: refractive_index(2000.0), "wavelength_nm = 2000"),
        (lambda: absorption_per_cm(500.0, "germanium"), "material = 'germanium'"),
        (lambda: absorptance(500.0, 180.0, "textured"), "scheme = 'textured'.*'lambertian'"),
        (lambda: am15g().photocurrent_mA_per_cm2(900.0, 300.0), "lo_nm = 900, hi_nm = 300"),
        (lambda: generation_mA_per_cm2(am15g(), 180.0, "single_pass", hi_nm=1500.0), "wavelength_nm = 1451"),
        (lambda: Spectrum(np.array([500.0, 400.0]), np.array([1.0, 1.0])), "increasing"),
        (lambda: Spectrum(np.array([400.0, 500.0]), np.array([1.0, -1.0])), r"irradiance_W_per_m2_nm\[1\] = -1"),
        (lambda: Spectrum(np.array([400.0, 500.0]), np.array([1.0])), "equal length"),
        (lambda: AbsorptionTable([400, 500], [1e3, 0.0]), r"absorption_per_cm\[1\] = 0.*Try: 1e-6"),
        (lambda: AbsorptionTable([400, 400], [1e3, 1e2]), "400 followed by 400"),
        (lambda: AbsorptionTable([400, 500], [1e3, 1e2, 1e1]), "2 of wavelength_nm, 3 of absorption_per_cm"),
        (lambda: AbsorptionTable(["a", "b"], [1e3, 1e2]), "wavelength_nm = .*numbers"),
        (lambda: AbsorptionTable([400, 500], [1e3, 1e2], [3.0, np.inf]), r"refractive_index\[1\] = inf"),
        (lambda: AbsorptionTable([400, 500], [1e3, 1e2]).refractive_index_at(450.0), "no refractive_index"),
    ],
)
def test_refusals_say_what_was_given_and_what_is_allowed(call, words):
    with pytest.raises(InputError, match=words.replace("+", r"\+")):
        call()


def test_own_table_is_log_linear_and_read_only():
    table = AbsorptionTable([400.0, 600.0], [1e4, 1e2], [3.0, 2.0])
    assert absorption_per_cm(500.0, table) == pytest.approx(1e3)
    assert refractive_index(500.0, table) == pytest.approx(2.5)
    np.testing.assert_allclose(absorption_per_cm(np.array([[400.0, 600.0]]), table), [[1e4, 1e2]])
    with pytest.raises(ValueError, match="read-only"):
        table.absorption_per_cm[0] = 1.0


def test_csv_round_trip(tmp_path):
    path = tmp_path / "absorber.csv"
    path.write_text("﻿# measured\nwavelength_nm, absorption_per_cm,refractive_index\n400,1e4,3\n\n600,1e2,2\n", "utf-8")
    table = read_absorption_csv(path)
    np.testing.assert_array_equal(table.wavelength_nm, [400, 600])
    np.testing.assert_array_equal(table.refractive_index, [3, 2])
    path.write_text("absorption_per_cm,wavelength_nm\n1e4,400\n1e2,600\n")
    table = read_absorption_csv(str(path))
    np.testing.assert_array_equal(table.absorption_per_cm, [1e4, 1e2])
    assert table.refractive_index is None


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"", "an empty file"),
        (b"wavelength_um,absorption_per_cm\n0.4,1e4\n0.6,1e2\n", "the header wavelength_um,absorption_per_cm"),
        (b"wavelength_nm,wavelength_nm,absorption_per_cm\n", "the header"),
        (b"400,1e4\n600,1e2\n", "the header 400,1e4"),
        (b"wavelength_nm,absorption_per_cm\n# note\n400,1e4\n600\n", "line 4: 600"),
        (b"wavelength_nm,absorption_per_cm\n400,1e4\n600,low\n", "line 3: 600,low"),
        (b"wavelength_nm,absorption_per_cm\n400;1e4\n", "line 2: 400;1e4"),
        (b"wavelength_nm,absorption_per_cm\n", "0 of wavelength_nm"),
        (b"wavelength_nm,absorption_per_cm\n400,nan\n600,1\n", r"absorption_per_cm\[0\] = nan"),
        (b"wavelength_nm,absorption_per_cm\n600,1e4\n400,1e2\n", "600 followed by 400"),
        (b"\xff\xfe\x00w", "not UTF-8"),
    ],
)
def test_malformed_csv_is_refused_in_one_sentence(tmp_path, content, words):
    path = tmp_path / "bad.csv"
    path.write_bytes(content)
    with pytest.raises(InputError, match=words) as refusal:
        read_absorption_csv(path)
    assert str(path) in str(refusal.value)
    assert "\n" not in str(refusal.value)


def test_missing_csv_is_refused(tmp_path):
    with pytest.raises(InputError, match="No such file"):
        read_absorption_csv(tmp_path / "nowhere.csv")


def test_spectrum_is_loaded_once_and_read_only():
    assert am15g() is am15g()
    with pytest.raises(ValueError, match="read-only"):
        am15g().irradiance_W_per_m2_nm[0] = 1.0


def test_photon_flux_of_one_watt():
    """hc/q = 1239.84198 eV nm: 1 W/m² per nm at 1239.84 nm is 1e-4 A/cm² per nm."""
    flat = Spectrum(np.array([1239.84198433, 1240.84198433]), np.array([1.0, 1.0]))
    assert flat.photon_flux_per_cm2_s_nm[0] * 1.602176634e-19 == pytest.approx(1e-4, rel=1e-9)
    assert flat.irradiance_mW_per_cm2 == pytest.approx(0.1)


@pytest.mark.parametrize("scheme", SCHEMES)
def test_absorptance_limits(scheme):
    """Thick slabs absorb everything; thin ones 1, 2 and 4n² times αW (Tiedje et al. 1984)."""
    table = AbsorptionTable([400.0, 600.0], [100.0, 100.0], [3.5, 3.5])
    enhancement = {"single_pass": 1, "rear_mirror": 2, "lambertian": 4 * 3.5**2}[scheme]
    assert absorptance(500.0, 1e-6, scheme, table) == pytest.approx(enhancement * 100.0 * 1e-10, rel=1e-5)
    assert absorptance(500.0, 1e9, scheme, table) == pytest.approx(1.0, rel=1e-6)
    assert absorptance(np.array([450.0, 500.0]), 100.0, scheme, table).shape == (2,)
