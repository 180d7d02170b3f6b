"""How much of the entering light a slab absorbs, for three simple optical schemes."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C
from ..errors import Complaints
from ..units import MA, UM
from .absorption import AbsorptionTable, absorption_per_cm, refractive_index

if TYPE_CHECKING:
    from .spectrum import Spectrum

SCHEMES = ("single_pass", "rear_mirror", "lambertian")


def absorptance(wavelength_nm: Any, thickness_um: Any, scheme: str, material: str | AbsorptionTable = "silicon") -> Any:
    """Fraction of the light entering a slab of thickness W that is absorbed, without reflection at the front.

    ``"single_pass"``: 1 − exp(−αW). ``"rear_mirror"``: 1 − exp(−2αW). ``"lambertian"``: α/(α + 1/(4n²W)), randomised
    light in the limit of weak absorption.

    Parameters
    ----------
    wavelength_nm : float or array
    thickness_um : float or array
        Broadcasts with `wavelength_nm`.
    scheme : {"single_pass", "rear_mirror", "lambertian"}
    material : "silicon" or AbsorptionTable
        An own table needs its refractive index for ``"lambertian"`` only.

    Returns
    -------
    float or array

    Raises
    ------
    InputError
        For another scheme, or wavelengths outside the table.

    References
    ----------
    Lambertian limit: T. Tiedje, E. Yablonovitch, G. D. Cody and B. G. Brooks, IEEE Trans. Electron Devices 31, 711
    (1984).
    """
    problems = Complaints("absorptance")
    problems.unless(scheme in SCHEMES, f"scheme = {scheme!r}", " or ".join(map(repr, SCHEMES)))
    problems.raise_if_any()
    alpha, W = absorption_per_cm(wavelength_nm, material), thickness_um * UM
    if scheme == "lambertian":
        return alpha / (alpha + 1 / (4 * refractive_index(wavelength_nm, material) ** 2 * W))
    return -np.expm1(-alpha * W * (2 if scheme == "rear_mirror" else 1))


def generation_mA_per_cm2(
    spectrum: Spectrum,
    thickness_um: float,
    scheme: str,
    lo_nm: float = 280.0,
    hi_nm: float = 1450.0,
    material: str | AbsorptionTable = "silicon",
) -> float:
    """Carriers generated in a slab, q ∫ Φ(λ) A(λ) dλ in mA/cm², by the trapezoidal rule on the spectrum's wavelengths.

    Parameters
    ----------
    spectrum : Spectrum
    thickness_um : float
    scheme : {"single_pass", "rear_mirror", "lambertian"}
        See `absorptance`.
    lo_nm, hi_nm : float
        Limits, both included.
    material : "silicon" or AbsorptionTable

    Raises
    ------
    InputError
        For another scheme, or limits outside the table or the spectrum.
    """
    part = spectrum.between(lo_nm, hi_nm)
    absorbed = part.photon_flux_per_cm2_s_nm * absorptance(part.wavelength_nm, thickness_um, scheme, material)
    return ELEMENTARY_CHARGE_C * float(np.trapezoid(absorbed, part.wavelength_nm)) / MA
