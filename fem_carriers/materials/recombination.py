"""Recombination laws of bulk and surface.

Every law returns the rate and its derivative with respect to the excess density Δn. Densities are in cm⁻³, bulk rates
in cm⁻³s⁻¹, surface rates in cm⁻²s⁻¹; arguments are numbers or arrays that broadcast, and Δn may be complex (derivatives
by complex step). The product np − ni² is always written Δn (n0 + p0 + Δn), which loses no digits near equilibrium.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C, STANDARD_TEMPERATURE_K
from .silicon import intrinsic_density_per_cm3

Rate = tuple[Any, Any]
"""A rate and its derivative with respect to Δn."""


def excess_product(dn: Any, n0: Any, p0: Any) -> Rate:
    """np − ni² = Δn (n0 + p0 + Δn) in cm⁻⁶, and its derivative n0 + p0 + 2Δn.

    Parameters
    ----------
    dn, n0, p0 : float or array
        Excess density and equilibrium densities, cm⁻³.
    """
    return dn * (n0 + p0 + dn), n0 + p0 + 2 * dn


def constant_lifetime(dn: Any, lifetime_s: Any) -> Rate:
    """R = Δn/τ.

    Parameters
    ----------
    dn : float or array
        Excess density, cm⁻³.
    lifetime_s : float or array
    """
    return dn / lifetime_s, 1 / lifetime_s + 0 * dn


def srh(dn: Any, n0: Any, p0: Any, ni: Any, tau_n0_s: Any, tau_p0_s: Any, trap_level_kT: float = 0.0) -> Rate:
    """Recombination through one trap level, R = (np − ni²)/(τp0 (n + n1) + τn0 (p + p1)).

    Parameters
    ----------
    dn, n0, p0, ni : float or array
        Excess, equilibrium and intrinsic densities, cm⁻³.
    tau_n0_s, tau_p0_s : float or array
        Capture time constants of electrons and of holes.
    trap_level_kT : float
        Trap level above the intrinsic level in units of kT: n1 = ni e^u, p1 = ni e^−u. 0 is mid-gap, n1 = p1 = ni.

    References
    ----------
    W. Shockley and W. T. Read, Phys. Rev. 87, 835 (1952); R. N. Hall, Phys. Rev. 87, 387 (1952).
    """
    product, slope = excess_product(dn, n0, p0)
    n1, p1 = ni * np.exp(trap_level_kT), ni * np.exp(-trap_level_kT)
    denominator = tau_p0_s * (n0 + dn + n1) + tau_n0_s * (p0 + dn + p1)
    rate = product / denominator
    return rate, (slope - rate * (tau_n0_s + tau_p0_s)) / denominator


def auger_richter2012(dn: Any, n0: Any, p0: Any) -> Rate:
    """Auger recombination of silicon with Coulomb enhancement.

    R = (np − ni²)(2.5e-31 g_eeh n0 + 8.5e-32 g_ehh p0 + 3.0e-29 Δn^0.92) with
    g_eeh = 1 + 13 {1 − tanh[(n0/3.3e17)^0.66]} and g_ehh = 1 + 7.5 {1 − tanh[(p0/7e17)^0.63]}.
    Measured at 300 K and used unchanged from 273 to 375 K: from 300 to 400 K the low-injection coefficients of
    Dziewior & Schmid (Appl. Phys. Lett. 31, 346 (1977), from memory) change by 0 % (eeh) and 21 % (ehh). Δn^0.92 is 0
    for Δn < 0.

    Parameters
    ----------
    dn, n0, p0 : float or array
        Excess and equilibrium densities, cm⁻³.

    References
    ----------
    A. Richter, S. W. Glunz, F. Werner, J. Schmidt and A. Cuevas, Phys. Rev. B 86, 165202 (2012).
    """
    product, slope = excess_product(dn, n0, p0)
    g_eeh = 1 + 13.0 * (1 - np.tanh((n0 / 3.3e17) ** 0.66))
    g_ehh = 1 + 7.5 * (1 - np.tanh((p0 / 7.0e17) ** 0.63))
    injected = 3.0e-29 * np.where(np.real(dn) > 0, dn, 0) ** 0.92
    coefficient = 2.5e-31 * g_eeh * n0 + 8.5e-32 * g_ehh * p0 + injected
    # Δn cancels in (np − ni²) d(Δn^0.92)/dΔn, so that nothing diverges at Δn = 0
    return coefficient * product, coefficient * slope + 0.92 * injected * (n0 + p0 + dn)


def constant_auger(dn: Any, n0: Any, p0: Any, Cn_cm6_per_s: Any, Cp_cm6_per_s: Any) -> Rate:
    """Auger recombination with constant coefficients, R = (Cn n + Cp p)(np − ni²).

    Parameters
    ----------
    dn, n0, p0 : float or array
        Excess and equilibrium densities, cm⁻³.
    Cn_cm6_per_s, Cp_cm6_per_s : float or array
    """
    product, slope = excess_product(dn, n0, p0)
    coefficient = Cn_cm6_per_s * (n0 + dn) + Cp_cm6_per_s * (p0 + dn)
    return coefficient * product, coefficient * slope + (Cn_cm6_per_s + Cp_cm6_per_s) * product


def radiative(dn: Any, n0: Any, p0: Any, B_cm3_per_s: Any) -> Rate:
    """Radiative recombination, R = B (np − ni²).

    Parameters
    ----------
    dn, n0, p0 : float or array
        Excess and equilibrium densities, cm⁻³.
    B_cm3_per_s : float or array
    """
    product, slope = excess_product(dn, n0, p0)
    return B_cm3_per_s * product, B_cm3_per_s * slope


_TRUPKE_K = (77.0, 90.0, 112.0, 170.0, 195.0, 249.0, 300.0)
_TRUPKE_B = (8.01e-14, 4.57e-14, 2.14e-14, 8.84e-15, 7.35e-15, 5.48e-15, 4.73e-15)


def radiative_coefficient_cm3_per_s(temperature_K: Any) -> Any:
    """Radiative coefficient B of intrinsic silicon, cm³/s; 4.73e-15 at 300 K.

    Linear in log B against log T between the tabulated values from 77 to 300 K (entries below 300 K from memory, as
    commonly reproduced). Above 300 K the value at 300 K: Nguyen et al. find B nearly constant there, up to 363 K.

    Parameters
    ----------
    temperature_K : float or array

    References
    ----------
    T. Trupke et al., J. Appl. Phys. 94, 4930 (2003); H. T. Nguyen et al., Appl. Phys. Lett. 104, 112105 (2014).
    """
    return np.exp(np.interp(np.log(temperature_K), np.log(_TRUPKE_K), np.log(_TRUPKE_B)))


def surface_srv(dn: Any, srv_cm_per_s: Any) -> Rate:
    """U = S Δn.

    Parameters
    ----------
    dn : float or array
        Excess density at the surface, cm⁻³.
    srv_cm_per_s : float or array
        Surface recombination velocity S.
    """
    return srv_cm_per_s * dn, srv_cm_per_s + 0 * dn


def surface_J0(dn: Any, n0: Any, p0: Any, ni: Any, J0_A_per_cm2: Any) -> Rate:
    """qU = J0 (np/ni² − 1).

    Parameters
    ----------
    dn, n0, p0, ni : float or array
        Excess, equilibrium and intrinsic densities at the surface, cm⁻³.
    J0_A_per_cm2 : float or array
        At the temperature of the cell; see `J0_temperature_factor`.
    """
    product, slope = excess_product(dn, n0, p0)
    scale = J0_A_per_cm2 / (ELEMENTARY_CHARGE_C * ni**2)
    return scale * product, scale * slope


def surface_J02(dn: Any, n0: Any, p0: Any, ni: Any, J02_A_per_cm2: Any) -> Rate:
    """qU = J02 (√(np/ni²) − 1).

    Evaluated as x/(√(1+x) + 1) with x = np/ni² − 1, without loss of digits near equilibrium. Where np < 0 (a density
    iterated below zero) the root is taken as 0, with slope 0.

    Parameters
    ----------
    dn, n0, p0, ni : float or array
        Excess, equilibrium and intrinsic densities at the surface, cm⁻³.
    J02_A_per_cm2 : float or array
    """
    product, slope = excess_product(dn, n0, p0)
    x, dx = product / ni**2, slope / ni**2
    physical = np.real(x) > -1
    root = np.sqrt(np.where(physical, 1 + x, 1))
    scale = J02_A_per_cm2 / ELEMENTARY_CHARGE_C
    return scale * np.where(physical, x / (root + 1), -1), scale * np.where(physical, dx / (2 * root), 0)


def J0_temperature_factor(temperature_K: Any) -> Any:
    """(ni(T)/ni(298.15 K))², by which a J0 stated at 298.15 K scales to another temperature.

    Parameters
    ----------
    temperature_K : float or array
    """
    return (intrinsic_density_per_cm3(temperature_K) / intrinsic_density_per_cm3(STANDARD_TEMPERATURE_K)) ** 2
