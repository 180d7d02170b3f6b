"""Net photon flux against depth for each kind of source."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell.light import DepthProfile, Monochromatic, Sunlight
from ..constants import LIGHT_SPEED_M_PER_S, PLANCK_J_S
from ..errors import Complaints
from ..units import UM

if TYPE_CHECKING:
    from ..cell.base import Base
    from ..cell.light import Source

Flux = Callable[[Any], Any]


@dataclass(frozen=True)
class PhotonFlux:
    """Photons of one source per cm² of lit plane.

    Parameters
    ----------
    net : function
        Net flux in the direction of entry at a depth in cm, 1/(cm² s): what entered and is still to be absorbed or to
        leave through the far side, less what comes back.
    incident, reflected : float
        1/(cm² s).
    power_mW_per_cm2 : float
        Incident power; 0 where the source states no wavelength.
    """

    net: Flux
    incident: float
    reflected: float
    power_mW_per_cm2: float = 0.0


def photon_flux(source: Source, base: Base, thickness_cm: float) -> PhotonFlux:
    """Flux of a beam in an absorber of this thickness.

    Parameters
    ----------
    source : Sunlight, Monochromatic or DepthProfile
    base : Base
        Silicon takes its published absorption table.
    thickness_cm : float

    Returns
    -------
    PhotonFlux
    """
    if isinstance(source, Sunlight):
        return _sunlight(source, base, thickness_cm)
    if isinstance(source, Monochromatic):
        return _monochromatic(source, base, thickness_cm)
    if isinstance(source, DepthProfile):
        return _profile(source)
    raise TypeError(f"{type(source).__name__} has no photon flux")


def net_flux(depth_cm: Any, absorption: Any, index: Any, path: str, thickness_cm: float) -> Any:
    """Net flux per photon that entered (Lambertian: per photon that arrived), at a depth.

    Parameters
    ----------
    depth_cm : array (..., 1)
    absorption : array (n_wavelengths,)
        α in 1/cm.
    index : array (n_wavelengths,)
        Refractive index, used by the Lambertian path.
    path : {"single_pass", "rear_mirror", "lambertian"}
        exp(−αd); exp(−αd) − exp(−α(2W − d)); or, with A1 = 1 − exp(−αW) and A = α/(α + 1/(4n²W)), a single pass
        scaled to min(A, A1) plus max(A − A1, 0) absorbed evenly.
    thickness_cm : float
        W.
    """
    once = np.exp(-absorption * depth_cm)
    if path == "single_pass":
        return once
    if path == "rear_mirror":
        return once - np.exp(-absorption * (2 * thickness_cm - depth_cm))
    one_pass = -np.expm1(-absorption * thickness_cm)
    wanted = absorption / (absorption + 1 / (4 * index**2 * thickness_cm))
    scaled = np.minimum(wanted / one_pass, 1.0) * (once - np.exp(-absorption * thickness_cm))
    return scaled + np.maximum(wanted - one_pass, 0.0) * (1 - depth_cm / thickness_cm)


def _sunlight(source: Sunlight, base: Base, thickness_cm: float) -> PhotonFlux:
    from ..materials.spectrum import am15g

    spectrum = am15g()
    keep = (spectrum.wavelength_nm >= source.lowest_nm) & (spectrum.wavelength_nm <= source.highest_nm)
    wavelength = spectrum.wavelength_nm[keep]
    arriving = source.suns * spectrum.photon_flux_per_cm2_s_nm[keep] * _trapezoid_weights(wavelength)
    absorption, index = absorption_and_index(source.absorption, base, wavelength, source.path)
    entering = arriving * (1 - share_at(source.reflectance, wavelength))

    def exact(depth: Any) -> Any:
        return net_flux(depth[..., None], absorption, index, source.path, thickness_cm) @ entering

    power = source.suns * spectrum.irradiance_mW_per_cm2
    return PhotonFlux(_spline(exact, thickness_cm), float(arriving.sum()), float((arriving - entering).sum()), power)


def _monochromatic(source: Monochromatic, base: Base, thickness_cm: float) -> PhotonFlux:
    power = 0.0
    if source.absorption_per_cm is not None:
        absorption, index = np.array([source.absorption_per_cm]), np.ones(1)
    else:
        wavelength = np.array([source.wavelength_nm])
        absorption, index = absorption_and_index(None, base, wavelength, source.path)
        power = 1e3 * source.flux_per_cm2_s * PLANCK_J_S * LIGHT_SPEED_M_PER_S / float(wavelength[0] * 1e-9)
    entering = source.flux_per_cm2_s * (1 - source.reflectance)

    def net(depth: Any) -> Any:
        return entering * net_flux(depth[..., None], absorption, index, source.path, thickness_cm)[..., 0]

    return PhotonFlux(net, source.flux_per_cm2_s, source.flux_per_cm2_s * source.reflectance, power)


def _profile(source: DepthProfile) -> PhotonFlux:
    """Flux still to be absorbed below a depth: the exact integral of the piecewise linear rate."""
    from scipy.interpolate import PPoly

    depth, rate = np.array(source.depth_um) * UM, np.array(source.rate_per_cm3_s)
    total = PPoly(np.array([np.diff(rate) / np.diff(depth), rate[:-1]]), depth).antiderivative()
    all_of_it = float(total(depth[-1]))
    return PhotonFlux(lambda d: all_of_it - total(np.clip(d, depth[0], depth[-1])), all_of_it, 0.0)


def absorption_and_index(table: Any, base: Base, wavelength: Any, path: str) -> tuple[Any, Any]:
    """α and refractive index at these wavelengths, from the given table or silicon's."""
    from ..materials import absorption as published

    if table is None and base.material != "silicon":
        problems = Complaints("Light")
        allowed = "light with absorption_per_cm, a depth profile, or sunlight with an absorption table"
        problems.add("a generic absorber without an absorption table", allowed, "fc.AbsorptionTable(...)")
        problems.raise_if_any()
    material = "silicon" if table is None else table
    index = published.refractive_index(wavelength, material) if path == "lambertian" else np.ones(1)
    return published.absorption_per_cm(wavelength, material), index


def share_at(reflectance: Any, wavelength: Any) -> Any:
    """Reflectance at these wavelengths; a table is interpolated linearly and held constant beyond its ends."""
    return np.interp(wavelength, *reflectance) if isinstance(reflectance, tuple) else reflectance


def _trapezoid_weights(x: Any) -> Any:
    step = np.diff(x)
    return 0.5 * (np.append(step, 0.0) + np.append(0.0, step))


def _spline(exact: Flux, thickness_cm: float, first_cm: float = 1e-7, points: int = 2000) -> Flux:
    """`exact` interpolated over the depth, dense near the surface: error below 1e-9 of it, and much faster."""
    from scipy.interpolate import CubicSpline

    stretched = np.linspace(0.0, np.log1p(1.0001 * thickness_cm / first_cm), points)
    spline = CubicSpline(stretched, exact(first_cm * np.expm1(stretched)))
    return lambda depth: spline(np.log1p(depth / first_cm))
