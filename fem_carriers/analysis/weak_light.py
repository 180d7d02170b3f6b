"""Beams of many wavelengths on a linearised operating point: how they are described, absorbed and shared out."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..cell.light import PATHS, Monochromatic, Source, Sunlight
from ..cell.light_tables import reflectance_table
from ..errors import Complaints
from ..transport.photons import absorption_and_index, net_flux, share_at

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..cell.light import Light
    from ..transport.channels import Key
    from ..transport.problem import Problem


@dataclass(frozen=True, eq=False)
class Beams:
    """Weak beams, one per wavelength, that enter alike.

    Parameters
    ----------
    wavelength_nm : (n,) array or None
        None where absorption coefficients are given instead.
    absorption_per_cm, index, reflectance : (n,) arrays
    path : str
    source : Source
        A beam that enters the same plane; its strength and wavelength do not count.
    """

    wavelength_nm: NDArray[np.float64] | None
    absorption_per_cm: NDArray[np.float64]
    index: NDArray[np.float64]
    reflectance: NDArray[np.float64]
    path: str
    source: Source

    def net(self, deepest_cm: float) -> Any:
        """Depths (m, 1) to net fluxes (m, n) per photon that entered."""
        return lambda depth: net_flux(depth, self.absorption_per_cm, self.index, self.path, deepest_cm)


def make_beams(
    what: str, problem: Problem, light: Light | None, *, wavelength_nm: Any, absorption_per_cm: Any, reflectance: Any,
    path: str | None, enters: str | None, mask: Any = (),
) -> Beams:  # fmt: skip
    """Beams from what the caller states; the rest as in the first sunlight or monochromatic source of `light`.

    Raises
    ------
    InputError
    """
    problems = Complaints(what)
    like = _first_beam(light, enters)
    enters = enters or (like.enters if like is not None else "front")
    path = path or (like.path if like is not None else "single_pass")
    reflectance = getattr(like, "reflectance", 0.0) if reflectance is None else reflectance
    checks.one_of(problems, "enters", enters, ("front", "rear"))
    checks.one_of(problems, "path", path, PATHS)
    given = {"wavelength_nm": wavelength_nm, "absorption_per_cm": absorption_per_cm}
    checks.exactly_one(problems, "wavelengths", given, "wavelength_nm=range(300, 1201, 10)")
    values = _positive(problems, given)
    reflectance = reflectance_table(problems, reflectance)
    needs = path == "lambertian" or isinstance(reflectance, tuple)
    allowed = "wavelength_nm for a Lambertian path or a table of reflectance"
    problems.unless(wavelength_nm is not None or not needs, "absorption_per_cm", allowed)
    problems.unless(enters in problem.lit_planes, f"light that enters the {enters}", "a lit_surface of the problem")
    problems.raise_if_any()
    source = Monochromatic(flux_per_cm2_s=1.0, absorption_per_cm=1.0, enters=enters, mask=mask)
    if wavelength_nm is None:
        ones = np.ones(values.size)
        return Beams(None, values, ones, ones * reflectance, path, source)
    table = like.absorption if isinstance(like, Sunlight) else None
    absorption, index = absorption_and_index(table, problem.base, values, path)
    return Beams(values, absorption, index * np.ones(values.size), share_at(reflectance, values) * np.ones(values.size),
                 path, source)  # fmt: skip


def _first_beam(light: Light | None, enters: str | None) -> Sunlight | Monochromatic | None:
    beams = [s for s in (light.sources if light is not None else ()) if isinstance(s, Sunlight | Monochromatic)]
    return next((s for s in beams if enters in (None, s.enters)), None)


def _positive(problems: Complaints, given: dict[str, Any]) -> NDArray[np.float64]:
    """The values given as a flat array; complains about anything but positive finite numbers."""
    name, value = next(((k, v) for k, v in given.items() if v is not None), ("wavelength_nm", []))
    try:
        values = np.atleast_1d(np.asarray(list(value) if hasattr(value, "__iter__") else value, dtype=float)).ravel()
    except (TypeError, ValueError):
        values = np.zeros(0)
    good = values.size > 0 and bool((np.isfinite(values) & (values > 0)).all())
    problems.unless(good, f"{name} = {value!r:.80}", "one or more finite numbers above 0")
    return values


def channel_columns(keys: list[Key], ending: str) -> dict[Key, str]:
    """Column of every channel: ``collected_front_percent``, ``lost_base_Auger_percent``, ``lost_rear_percent``."""
    return {(k, n): f"{'collected' if k == 'terminal' else 'lost'}_{plain(n)}{ending}" for k, n in keys}


def plain(name: str) -> str:
    """A name fit for a column: "base: Auger" becomes "base_Auger"."""
    return re.sub(r"\W+", "_", name).strip("_")
