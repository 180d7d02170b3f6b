"""Spectra of the incident light."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C, LIGHT_SPEED_M_PER_S, PLANCK_J_S
from ..errors import Complaints
from ..units import MA

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, eq=False)
class Spectrum:
    """Spectral irradiance against wavelength; every integral is the trapezoidal rule on these wavelengths.

    Parameters
    ----------
    wavelength_nm : (n,) array
        Increasing, positive; at least two.
    irradiance_W_per_m2_nm : (n,) array
        At least 0.

    Raises
    ------
    InputError
        If the arrays are not as above.
    """

    wavelength_nm: NDArray[np.float64]
    irradiance_W_per_m2_nm: NDArray[np.float64]

    def __post_init__(self) -> None:
        for name in ("wavelength_nm", "irradiance_W_per_m2_nm"):
            values = np.array(getattr(self, name), dtype=float)
            values.flags.writeable = False
            object.__setattr__(self, name, values)
        problems = Complaints("Spectrum")
        wavelength, irradiance = self.wavelength_nm, self.irradiance_W_per_m2_nm
        if problems.unless(
            wavelength.ndim == 1 and wavelength.shape == irradiance.shape and wavelength.size >= 2,
            f"arrays of shape {wavelength.shape} and {irradiance.shape}",
            "two one-dimensional arrays of equal length, at least two entries",
        ):
            rising = wavelength[0] > 0 and bool(np.all(np.diff(wavelength) > 0)) and bool(np.isfinite(wavelength[-1]))
            problems.unless(rising, "wavelength_nm", "positive, increasing, finite numbers", "sorting the rows")
            dark = np.flatnonzero(~(np.isfinite(irradiance) & (irradiance >= 0)))
            if dark.size:
                problems.add(f"irradiance_W_per_m2_nm[{dark[0]}] = {irradiance[dark[0]]:g}", "finite, at least 0")
        problems.raise_if_any()

    @property
    def photon_flux_per_cm2_s_nm(self) -> NDArray[np.float64]:
        """Photons per cm², s and nm: E λ/(hc), shape (n,)."""
        photon_energy_J = PLANCK_J_S * LIGHT_SPEED_M_PER_S / (self.wavelength_nm * 1e-9)
        return np.asarray(self.irradiance_W_per_m2_nm * 1e-4 / photon_energy_J)

    @property
    def irradiance_mW_per_cm2(self) -> float:
        """Integral of the whole spectrum."""
        return float(np.trapezoid(self.irradiance_W_per_m2_nm, self.wavelength_nm)) * 0.1

    def between(self, lo_nm: float, hi_nm: float) -> Spectrum:
        """The part of the spectrum on its wavelengths from `lo_nm` to `hi_nm`, both included.

        Raises
        ------
        InputError
            If fewer than two wavelengths are left.
        """
        inside = (self.wavelength_nm >= lo_nm) & (self.wavelength_nm <= hi_nm)
        problems = Complaints("Spectrum")
        problems.unless(
            inside.sum() >= 2,
            f"lo_nm = {lo_nm:g}, hi_nm = {hi_nm:g}",
            f"limits around at least two wavelengths of {self.wavelength_nm[0]:g} to {self.wavelength_nm[-1]:g} nm",
        )
        problems.raise_if_any()
        return Spectrum(self.wavelength_nm[inside], self.irradiance_W_per_m2_nm[inside])

    def photocurrent_mA_per_cm2(self, lo_nm: float, hi_nm: float) -> float:
        """q times the photon flux between two wavelengths (both included), mA/cm².

        Raises
        ------
        InputError
            If fewer than two wavelengths of the spectrum lie between the limits.
        """
        part = self.between(lo_nm, hi_nm)
        flux_per_cm2_s = float(np.trapezoid(part.photon_flux_per_cm2_s_nm, part.wavelength_nm))
        return ELEMENTARY_CHARGE_C * flux_per_cm2_s / MA


@lru_cache(maxsize=1)
def am15g() -> Spectrum:
    """Global spectral irradiance on a surface tilted by 37°, air mass 1.5, 280–4000 nm, 100.04 mW/cm².

    Returns
    -------
    Spectrum

    References
    ----------
    ASTM G173-03 (reapproved 2012); data from the package ``pvlib``.
    """
    from pvlib.spectrum import get_reference_spectra

    table = get_reference_spectra(standard="ASTM G173-03")
    return Spectrum(table.index.to_numpy(), table["global"].to_numpy())
