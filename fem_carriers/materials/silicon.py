"""Crystalline silicon: intrinsic density, mobility, resistivity.

Each model carries its source; `TEMPERATURE_RANGE_K` says where each may be used.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from ..errors import Complaints

TEMPERATURE_RANGE_K = {
    "intrinsic_density": (78.0, 375.0),  # measured 78–340 K (title of the source); 375 K: see the function
    "mobility": (250.0, 500.0),  # range of Arora et al. 1982 (its abstract)
    "radiative": (77.0, 363.0),  # measured 77–300 K; constant above: see the function
    "auger": (273.0, 375.0),  # measured at 300 K only; see the function
}
"""Temperatures in K (low, high) within which each silicon model may be used."""

DOPING_RANGE_PER_CM3 = {"p": (1e12, 1e21), "n": (1e12, 5e20)}
"""Dopant densities within which ASTM F723 converts to resistivity (from memory; its data: 1e14–1e20, 3e13–1e20)."""

CARRIERS = ("n", "p")


def intrinsic_density_per_cm3(temperature_K: Any) -> Any:
    """Intrinsic carrier density of silicon, ni = 5.29e19 (T/300)^2.54 exp(−6726/T), in cm⁻³.

    Measured from 78 to 340 K. Used up to 375 K, where it stays within 4 % of 9.15e19 (T/300)² exp(−6880/T)
    (Sproul & Green 1991, 275–375 K, from memory).

    Parameters
    ----------
    temperature_K : float or array

    Returns
    -------
    float or array

    References
    ----------
    K. Misiakos and D. Tsamakis, J. Appl. Phys. 74, 3293 (1993).
    """
    return 5.29e19 * (temperature_K / 300.0) ** 2.54 * np.exp(-6726.0 / temperature_K)


def mobility_cm2_per_Vs(carrier: str, doping_per_cm3: Any, temperature_K: Any = 300.0) -> Any:
    """Mobility of electrons or holes in doped silicon, cm²/Vs.

    At 300 K the majority mobility of Masetti et al. (electrons: phosphorus, holes: boron). Minority carriers get the
    curve of the same carrier at the same doping, an approximation: measured minority mobilities are larger at high
    doping (from memory: by a factor of 2 to 3 well above 1e18 cm⁻³). Other temperatures: times the ratio
    μ(N, T)/μ(N, 300 K) of Arora et al., in which the lattice part falls as T^−2.33 (electrons) and T^−2.23 (holes);
    valid 250–500 K, ±13 %.

    Parameters
    ----------
    carrier : {"n", "p"}
        Electrons or holes.
    doping_per_cm3 : float or array
        Ionised dopants, cm⁻³; 0 gives the lattice mobility.
    temperature_K : float or array

    Returns
    -------
    float or array

    Raises
    ------
    InputError
        For another carrier.

    References
    ----------
    G. Masetti, M. Severi and S. Solmi, IEEE Trans. Electron Devices 30, 764 (1983).
    N. D. Arora, J. R. Hauser and D. J. Roulston, IEEE Trans. Electron Devices 29, 292 (1982); coefficients from memory.
    """
    _check_type("carrier", carrier)
    doping = np.maximum(doping_per_cm3, 1.0)  # the formulas divide by it; 1 cm⁻³ is as good as none
    at_300_K = _masetti_electrons(doping) if carrier == "n" else _masetti_holes(doping)
    return at_300_K * _arora(carrier, doping, temperature_K) / _arora(carrier, doping, 300.0)


def _masetti_electrons(N: Any) -> Any:
    return 68.5 + (1414.0 - 68.5) / (1 + (N / 9.20e16) ** 0.711) - 56.1 / (1 + (3.41e20 / N) ** 1.98)


def _masetti_holes(N: Any) -> Any:
    return 44.9 * np.exp(-9.23e16 / N) + 470.5 / (1 + (N / 2.23e17) ** 0.719) - 29.0 / (1 + (6.10e20 / N) ** 2)


def _arora(carrier: str, N: Any, temperature_K: Any) -> Any:
    """Mobility after Arora et al. 1982, cm²/Vs; used for its dependence on temperature alone."""
    t = temperature_K / 300.0
    exponent = 0.88 * t**-0.146
    if carrier == "n":
        return 88.0 * t**-0.57 + 7.4e8 * temperature_K**-2.33 / (1 + (N / (1.26e17 * t**2.4)) ** exponent)
    return 54.3 * t**-0.57 + 1.36e8 * temperature_K**-2.23 / (1 + (N / (2.35e17 * t**2.4)) ** exponent)


def resistivity_ohm_cm(doping_type: str, doping_per_cm3: Any) -> Any:
    """Resistivity of boron- ("p") or phosphorus-doped ("n") silicon at room temperature, Ω·cm (ASTM F723).

    Boron: ρ = 1.305e16/N + 1.133e17/(N [1 + (2.58e-19 N)^−0.737]). Phosphorus: ρ = 6.242e18·10^Z/N with
    Z = (−3.0769 + 2.2108x − 0.62272x² + 0.057501x³)/(1 − 0.68157x + 0.19833x² − 0.018376x³), x = log10 N − 16.

    Parameters
    ----------
    doping_type : {"p", "n"}
    doping_per_cm3 : float or array
        Within `DOPING_RANGE_PER_CM3`.

    Returns
    -------
    float or array

    Raises
    ------
    InputError
        For another type or a density outside the range of the standard.

    References
    ----------
    ASTM F723, Standard practice for conversion between resistivity and dopant density for boron-doped,
    phosphorus-doped, and arsenic-doped silicon.
    """
    _check_type("doping_type", doping_type)
    low, high = DOPING_RANGE_PER_CM3[doping_type]
    _check_range("doping_per_cm3", doping_per_cm3, low, high, "stating mobilities and doping instead of a resistivity")
    return _F723[doping_type](doping_per_cm3)


def doping_per_cm3(doping_type: str, resistivity_ohm_cm: Any) -> Any:
    """Dopant density of silicon of a given room-temperature resistivity, cm⁻³: the inverse of `resistivity_ohm_cm`.

    The density→resistivity formula of ASTM F723 is inverted by root finding in log N, so that both directions agree
    (the standard's own inverse formulas differ from it by up to a few percent).

    Parameters
    ----------
    doping_type : {"p", "n"}
    resistivity_ohm_cm : float or array

    Returns
    -------
    float or array

    Raises
    ------
    InputError
        For another type or a resistivity that no density within `DOPING_RANGE_PER_CM3` has.
    """
    _check_type("doping_type", doping_type)
    low, high = DOPING_RANGE_PER_CM3[doping_type]
    formula = _F723[doping_type]
    _check_range(
        "resistivity_ohm_cm", resistivity_ohm_cm, formula(high), formula(low), "giving doping_per_cm3 and mobilities"
    )
    found = [_density(formula, rho, low, high) for rho in np.ravel(resistivity_ohm_cm)]
    return found[0] if np.ndim(resistivity_ohm_cm) == 0 else np.reshape(found, np.shape(resistivity_ohm_cm))


def _density(formula: Any, resistivity_ohm_cm: float, low: float, high: float) -> float:
    from scipy.optimize import brentq

    def miss(log_N: float) -> float:
        return float(np.log(formula(np.exp(log_N)) / resistivity_ohm_cm))

    slack = 1e-9  # so that both ends of the range themselves are bracketed
    return float(np.exp(brentq(miss, np.log(low) - slack, np.log(high) + slack, xtol=1e-13, rtol=1e-14)))


def _boron(N: Any) -> Any:
    return 1.305e16 / N + 1.133e17 / (N * (1 + (2.58e-19 * N) ** -0.737))


def _phosphorus(N: Any) -> Any:
    x = np.log10(N) - 16.0
    Z = (-3.0769 + 2.2108 * x - 0.62272 * x**2 + 0.057501 * x**3) / (1 - 0.68157 * x + 0.19833 * x**2 - 0.018376 * x**3)
    return 6.242e18 * 10**Z / N


_F723 = {"p": _boron, "n": _phosphorus}


def _check_type(name: str, value: str) -> None:
    problems = Complaints("silicon")
    problems.unless(value in CARRIERS, f"{name} = {value!r}", "'n' or 'p'")
    problems.raise_if_any()


def _check_range(name: str, value: Any, low: float, high: float, try_: str) -> None:
    """Refuse values outside low…high (NaN too)."""
    values = np.ravel(value)
    wrong = values[~((values >= low) & (values <= high))]
    if wrong.size:
        problems = Complaints("ASTM F723")
        problems.add(f"{name} = {wrong[0]:g}", f"{low:.4g} to {high:.4g}", try_)
        problems.raise_if_any()
