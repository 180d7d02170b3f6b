"""Silicon models, spectrum and absorption against published values.

Values not printed in a source were evaluated from its formula independently of this package.
"""

from __future__ import annotations

import numpy as np
import pytest

from fem_carriers.constants import BOLTZMANN_J_PER_K, LIGHT_SPEED_M_PER_S, PLANCK_J_S
from fem_carriers.materials import recombination, silicon
from fem_carriers.materials.absorption import absorption_per_cm, refractive_index, silicon_table
from fem_carriers.materials.optics import generation_mA_per_cm2
from fem_carriers.materials.spectrum import am15g

NI = 9.65e9  # cm⁻³ at 300 K; Altermatt et al., J. Appl. Phys. 93, 1598 (2003)


# Intrinsic density: Misiakos and Tsamakis, J. Appl. Phys. 74, 3293 (1993)


@pytest.mark.parametrize(("temperature_K", "expected"), [(300.0, 9.695571e9), (298.15, 8.304876e9)])
def test_intrinsic_density(temperature_K, expected):
    assert silicon.intrinsic_density_per_cm3(temperature_K) == pytest.approx(expected, rel=1e-6)


def test_intrinsic_density_agrees_with_the_value_of_altermatt():
    """9.65e9 at 300 K, Altermatt et al. 2003; the two publications differ by 0.5 %."""
    assert silicon.intrinsic_density_per_cm3(300.0) == pytest.approx(NI, rel=0.006)


def test_intrinsic_density_above_its_measured_range():
    """Sproul and Green, J. Appl. Phys. 70, 846 (1991): 9.15e19 (T/300)² exp(−6880/T), 275–375 K (from memory).

    Their value lies 3.5 % higher at 300 K; the temperature dependence is what is compared.
    """
    T = np.linspace(275, 375, 21)
    sproul = 9.15e19 * (T / 300) ** 2 * np.exp(-6880 / T)
    np.testing.assert_allclose(silicon.intrinsic_density_per_cm3(T), sproul, rtol=0.04)


def test_J0_factor_from_25_to_75_degrees():
    """Misiakos and Tsamakis 1993, squared ratio: (348.15/298.15)^5.08 exp(13452 (1/298.15 − 1/348.15)) ≈ 1430."""
    expected = (348.15 / 298.15) ** 5.08 * np.exp(13452 * (1 / 298.15 - 1 / 348.15))
    assert recombination.J0_temperature_factor(348.15) == pytest.approx(expected, rel=1e-12)
    assert expected == pytest.approx(1430, rel=0.003)


# Auger: Richter et al., Phys. Rev. B 86, 165202 (2012); Δn/R of this term alone


@pytest.mark.parametrize(
    ("doping_type", "N", "dn", "lifetime_s"),
    [("p", 1.5e16, 1e15, 5.259514e-3), ("n", 5e15, 1e16, 2.068955e-3), ("n", 1e18, 1e13, 2.855614e-6)],
)
def test_auger_lifetime(doping_type, N, dn, lifetime_s):
    n0, p0 = (N, NI**2 / N) if doping_type == "n" else (NI**2 / N, N)
    rate, _ = recombination.auger_richter2012(dn, n0, p0)
    assert dn / rate == pytest.approx(lifetime_s, rel=3e-7)


# Radiative


def test_radiative_coefficient_at_300_K():
    """Trupke et al., J. Appl. Phys. 94, 4930 (2003)."""
    assert recombination.radiative_coefficient_cm3_per_s(300.0) == pytest.approx(4.73e-15, rel=1e-12)


def test_radiative_coefficient_against_temperature():
    """Falls from 77 to 300 K (Trupke et al. 2003), nearly constant above (Nguyen et al., APL 104, 112105 (2014))."""
    low, high = silicon.TEMPERATURE_RANGE_K["radiative"]
    B = recombination.radiative_coefficient_cm3_per_s(np.linspace(low, 300, 200))
    assert np.all(np.diff(B) < 0)
    assert B[0] == pytest.approx(8.01e-14)  # 77 K (from memory)
    assert recombination.radiative_coefficient_cm3_per_s(high) == pytest.approx(4.73e-15)
    assert recombination.radiative_coefficient_cm3_per_s(298.15) == pytest.approx(4.73e-15, rel=0.006)


def roosbroeck_shockley_cm3_per_s(temperature_K, ni):
    """B = (8πc/ni²) ∫ n²α λ⁻⁴/(exp(hc/λkT) − 1) dλ in cm units, over the silicon table."""
    wavelength_nm = np.arange(250.0, 1450.01, 0.5)
    wavelength_cm = wavelength_nm * 1e-7
    x = PLANCK_J_S * LIGHT_SPEED_M_PER_S * 100 / (wavelength_cm * BOLTZMANN_J_PER_K * temperature_K)
    emission = refractive_index(wavelength_nm) ** 2 * absorption_per_cm(wavelength_nm) / wavelength_cm**4 / np.expm1(x)
    return 8 * np.pi * LIGHT_SPEED_M_PER_S * 100 / ni**2 * np.trapezoid(emission, wavelength_cm)


def test_radiative_coefficient_follows_from_detailed_balance():
    """van Roosbroeck and Shockley, Phys. Rev. 94, 1558 (1954), over Green's 2008 absorption: 4.751e-15.

    Within 0.5 %: d ln B/d ln kT is 43, so that constants and interpolation matter.
    """
    integral = roosbroeck_shockley_cm3_per_s(300.0, NI)
    assert integral == pytest.approx(4.751e-15, rel=5e-3)
    assert recombination.radiative_coefficient_cm3_per_s(300.0) == pytest.approx(integral, rel=0.01)


# Mobility at 300 K: Masetti et al., IEEE Trans. Electron Devices 30, 764 (1983), phosphorus and boron


@pytest.mark.parametrize(
    ("carrier", "expected"), [("n", (1183.785, 276.962, 73.227)), ("p", (424.915, 160.312, 49.863))]
)
def test_mobility(carrier, expected):
    N = np.array([1e16, 1e18, 1e20])
    np.testing.assert_allclose(silicon.mobility_cm2_per_Vs(carrier, N), expected, atol=6e-4)


@pytest.mark.parametrize(("carrier", "low", "high"), [("n", 2.0, 2.45), ("p", 1.9, 2.3)])
def test_lattice_mobility_exponent(carrier, low, high):
    """−d ln µ/d ln T of pure silicon near 300 K, from memory: electrons 2.42, holes 2.20 (Jacoboni et al., Solid-State
    Electron. 20, 77 (1977)). Arora et al. 1982 fit the doped range with a flatter floor: 2.21 and 2.03."""
    mobility = silicon.mobility_cm2_per_Vs(carrier, 1e13, np.array([299.0, 301.0]))
    exponent = -np.log(mobility[1] / mobility[0]) / np.log(301 / 299)
    assert low < exponent < high


# Resistivity: ASTM F723


@pytest.mark.parametrize(
    ("doping_type", "N", "expected", "digits"),
    [("p", 1e16, 1.44344, 6e-6), ("n", 1e16, 0.522906, 6e-7), ("p", 1e15, 13.3062, 6e-5), ("n", 1e15, 4.48188, 6e-6)],
)
def test_resistivity(doping_type, N, expected, digits):
    assert silicon.resistivity_ohm_cm(doping_type, N) == pytest.approx(expected, abs=digits)
    assert silicon.doping_per_cm3(doping_type, expected) == pytest.approx(N, rel=1e-5)


def test_resistivity_agrees_with_the_mobility_formula():
    """ASTM F723 and Masetti et al. 1983 at 1e16 boron differ by 1.8 %."""
    rho = 1 / (1.602176634e-19 * 1e16 * silicon.mobility_cm2_per_Vs("p", 1e16))
    assert rho / silicon.resistivity_ohm_cm("p", 1e16) - 1 == pytest.approx(0.018, abs=0.001)


# Shockley–Read–Hall: Phys. Rev. 87, 835 and 387 (1952); mid-gap level, values by hand


@pytest.mark.parametrize(("dn", "lifetime_us"), [(1e15, 162.500663), (1e17, 969.5653)])
def test_srh_lifetime(dn, lifetime_us):
    rate, _ = recombination.srh(dn, NI**2 / 1.5e16, 1.5e16, NI, 100e-6, 1e-3)
    assert dn / rate * 1e6 == pytest.approx(lifetime_us, rel=5e-8)


# Light: ASTM G173-03; Green, Sol. Energy Mater. Sol. Cells 92, 1305 (2008)


def test_sunlight():
    """ASTM G173-03, trapezoid on its own grid."""
    assert am15g().irradiance_mW_per_cm2 == pytest.approx(100.037066, rel=1e-7)
    assert am15g().photocurrent_mA_per_cm2(300.0, 1200.0) == pytest.approx(46.45622, abs=6e-6)
    assert (am15g().wavelength_nm[0], am15g().wavelength_nm[-1]) == (280.0, 4000.0)


@pytest.mark.parametrize(
    ("wavelength_nm", "expected"),
    [(500, 11100), (600, 4175), (800, 850), (900, 303), (1000, 64.0), (1100, 3.50), (1200, 0.022)],
)
def test_silicon_absorption(wavelength_nm, expected):
    """Green 2008, table; stored through k in three or four digits."""
    assert absorption_per_cm(wavelength_nm) == pytest.approx(expected, rel=5e-5)


def test_silicon_table_range():
    """Green 2008: 250–1450 nm in steps of 10 nm."""
    np.testing.assert_array_equal(silicon_table().wavelength_nm, np.arange(250, 1451, 10))


@pytest.mark.parametrize(
    ("scheme", "expected"), [("single_pass", 39.33278), ("rear_mirror", 40.71299), ("lambertian", 43.92896)]
)
def test_generation_in_180_um(scheme, expected):
    """ASTM G173-03 on its grid, 280–1450 nm, with Green 2008, log α and n linear in λ; no reflection."""
    assert generation_mA_per_cm2(am15g(), 180.0, scheme) == pytest.approx(expected, abs=6e-6)
