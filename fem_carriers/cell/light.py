"""Light: sources that add. Plain data; the photon flux is computed where it is assembled."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import Complaints
from . import checks
from .light_tables import numbers_of, read_profile, reflectance_table
from .masks import check_masks

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

PATHS = ("single_pass", "rear_mirror", "lambertian")


@dataclass(frozen=True, kw_only=True)
class Source:
    """What every source states.

    Parameters
    ----------
    enters : {"front", "rear"}
    mask : LitRectangle, HalfPlane, Spot, or several
        Light falls only inside their union.
    shaded : bool
        Whether opaque metal removes the light under it.
    """

    enters: str = "front"
    mask: Any = ()
    shaded: bool = True

    @property
    def needs_plane(self) -> bool:
        """Whether it matters which plane the light enters; for a bare rate it does not."""
        return True

    def _check(self, problems: Complaints) -> None:
        checks.one_of(problems, "enters", self.enters, ("front", "rear"))
        object.__setattr__(self, "mask", check_masks(problems, self.mask))


@dataclass(frozen=True, repr=False, kw_only=True)
class Sunlight(Source):
    """ASTM G173-03 global spectrum; see `Light.sunlight`."""

    reflectance: float | Any = 0.0
    path: str = "single_pass"
    suns: float = 1.0
    lowest_nm: float = 280.0
    highest_nm: float = 1450.0
    absorption: Any = None

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Light.sunlight")
        self._check(problems)
        object.__setattr__(self, "reflectance", reflectance_table(problems, self.reflectance))
        checks.one_of(problems, "path", self.path, PATHS)
        checks.positive(problems, "suns", self.suns, zero=True)
        if checks.positive(problems, "lowest_nm", self.lowest_nm) and checks.positive(
            problems, "highest_nm", self.highest_nm
        ):
            given = f"lowest_nm = {self.lowest_nm!r}, highest_nm = {self.highest_nm!r}"
            problems.unless(280 <= self.lowest_nm < self.highest_nm <= 4000, given, "280 ≤ lowest < highest ≤ 4000")
        problems.raise_if_any()


@dataclass(frozen=True, repr=False, kw_only=True)
class Monochromatic(Source):
    """Light of one wavelength; see `Light.monochromatic`."""

    flux_per_cm2_s: float
    wavelength_nm: float | None = None
    absorption_per_cm: float | None = None
    reflectance: float = 0.0
    path: str = "single_pass"

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Light.monochromatic")
        self._check(problems)
        checks.positive(problems, "flux_per_cm2_s", self.flux_per_cm2_s, zero=True)
        given = {"wavelength_nm": self.wavelength_nm, "absorption_per_cm": self.absorption_per_cm}
        checks.exactly_one(problems, "wavelength", given)
        for name, value in given.items():
            if value is not None:
                checks.positive(problems, name, value)
        good = checks.is_number(self.reflectance) and 0 <= self.reflectance <= 1
        problems.unless(good, f"reflectance = {self.reflectance!r}", "a number from 0 to 1 for one wavelength")
        checks.one_of(problems, "path", self.path, PATHS)
        allowed = "a wavelength_nm with path 'lambertian', which needs the refractive index"
        problems.unless(self.path != "lambertian" or self.wavelength_nm is not None, "absorption_per_cm", allowed)
        problems.raise_if_any()


@dataclass(frozen=True, repr=False, kw_only=True)
class DepthProfile(Source):
    """A tabulated generation rate against depth; see `Light.depth_profile`."""

    depth_um: tuple[float, ...]
    rate_per_cm3_s: tuple[float, ...]

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Light.depth_profile")
        self._check(problems)
        depth, rate = numbers_of(self.depth_um), numbers_of(self.rate_per_cm3_s)
        if depth is None or rate is None:
            given = f"depth_um = {self.depth_um!r}, rate_per_cm3_s = {self.rate_per_cm3_s!r}"
            problems.add(given, "two lists of numbers, or the path of a CSV file")
            problems.raise_if_any()
        assert depth is not None
        assert rate is not None
        object.__setattr__(self, "depth_um", depth)
        object.__setattr__(self, "rate_per_cm3_s", rate)
        given = f"{len(depth)} depths and {len(rate)} rates"
        if problems.unless(len(depth) == len(rate) >= 2, given, "as many rates as depths, two or more"):
            rising = all(b > a for a, b in pairwise(depth))
            problems.unless(rising and depth[0] >= 0, "depth_um", "rising from 0 or above, no repeats")
            good = all(checks.is_number(r) and 0 <= r < float("inf") for r in rate)
            problems.unless(good, "rate_per_cm3_s", "finite rates of at least 0")
        problems.raise_if_any()


@dataclass(frozen=True, repr=False, kw_only=True)
class UniformRate(Source):
    """The same generation rate everywhere (inside the mask)."""

    rate_per_cm3_s: float
    shaded: bool = False

    @property
    def needs_plane(self) -> bool:
        """A mask or metal lies in a plane."""
        return bool(self.mask) or self.shaded

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Light.uniform")
        self._check(problems)
        checks.positive(problems, "rate_per_cm3_s", self.rate_per_cm3_s, zero=True)
        problems.raise_if_any()


@dataclass(frozen=True, repr=False, kw_only=True)
class RateFunction(Source):
    """A generation rate given as a function of position, cm⁻³s⁻¹ against µm."""

    rate: Callable[..., Any]
    shaded: bool = False

    @property
    def needs_plane(self) -> bool:
        """A mask or metal lies in a plane."""
        return bool(self.mask) or self.shaded

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Light.function")
        self._check(problems)
        problems.unless(callable(self.rate), f"function {self.rate!r}", "f(x_um, y_um, z_um) returning cm⁻³s⁻¹")
        problems.raise_if_any()


@dataclass(frozen=True, repr=False)
class Light:
    """Sources of generation; lights add with ``+``."""

    sources: tuple[Source, ...]

    __repr__ = checks.stated_repr

    def __add__(self, other: Light) -> Light:
        if not isinstance(other, Light):
            return NotImplemented
        return Light(self.sources + other.sources)

    def scaled(self, factor: float) -> Light:
        """The same light, stronger or weaker by a factor."""
        problems = Complaints("Light.scaled")
        checks.positive(problems, "factor", factor, zero=True)
        problems.raise_if_any()
        return Light(tuple(_scaled(source, factor) for source in self.sources))

    @staticmethod
    def sunlight(
        reflectance: float | tuple[ArrayLike, ArrayLike] = 0.0,
        *,
        path: str = "single_pass",
        suns: float = 1.0,
        lowest_nm: float = 280.0,
        highest_nm: float = 1450.0,
        absorption: Any = None,
        enters: str = "front",
        mask: Any = (),
    ) -> Light:
        """AM1.5 global sunlight (ASTM G173-03) absorbed by the base.

        Parameters
        ----------
        reflectance : float or (wavelength_nm, reflectance)
            Share of the light reflected outside of opaque metal.
        path : {"single_pass", "rear_mirror", "lambertian"}
            exp(−αd); once down and once up; or the weak-absorption Lambertian limit of the absorptance
            α/(α + 1/(4n²W)), its excess over a single pass spread evenly over the thickness.
        suns : float
            Factor on the spectrum.
        lowest_nm, highest_nm : float
            Wavelength range taken.
        absorption : AbsorptionTable, optional
            For a generic absorber; silicon has a table.
        enters, mask
            As for `Source`.
        """
        return Light(
            (
                Sunlight(
                    reflectance=reflectance, path=path, suns=suns, lowest_nm=lowest_nm, highest_nm=highest_nm,
                    absorption=absorption, enters=enters, mask=mask,
                ),
            )
        )  # fmt: skip

    @staticmethod
    def monochromatic(
        *,
        flux_per_cm2_s: float,
        wavelength_nm: float | None = None,
        absorption_per_cm: float | None = None,
        reflectance: float = 0.0,
        path: str = "single_pass",
        enters: str = "front",
        mask: Any = (),
    ) -> Light:
        """One wavelength: G = αΦ exp(−αd) for a single pass (Beer–Lambert)."""
        return Light(
            (
                Monochromatic(
                    flux_per_cm2_s=flux_per_cm2_s, wavelength_nm=wavelength_nm, absorption_per_cm=absorption_per_cm,
                    reflectance=reflectance, path=path, enters=enters, mask=mask,
                ),
            )
        )  # fmt: skip

    @staticmethod
    def depth_profile(
        depth_um: str | Path | Sequence[float],
        rate_per_cm3_s: Sequence[float] | None = None,
        *,
        enters: str = "front",
        mask: Any = (),
    ) -> Light:
        """Generation rate against depth below the lit face, linear between entries and zero beyond them.

        Parameters
        ----------
        depth_um : sequence, or path of a CSV file with columns ``depth_um,rate_per_cm3_s``
        rate_per_cm3_s : sequence, if `depth_um` is one
        """
        if rate_per_cm3_s is None:
            depth_um, rate_per_cm3_s = read_profile(depth_um)
        return Light((DepthProfile(depth_um=depth_um, rate_per_cm3_s=rate_per_cm3_s, enters=enters, mask=mask),))  # type: ignore[arg-type]

    @staticmethod
    def uniform(rate_per_cm3_s: float, *, mask: Any = (), shaded: bool = False) -> Light:
        """A uniform generation rate; metal does not shade it unless asked."""
        return Light((UniformRate(rate_per_cm3_s=rate_per_cm3_s, mask=mask, shaded=shaded),))

    @staticmethod
    def function(rate: Callable[..., Any], *, mask: Any = (), shaded: bool = False) -> Light:
        """A generation rate ``f(x_um, y_um, z_um)`` in cm⁻³s⁻¹ (arrays in and out; y_um is 0 in 2-D)."""
        return Light((RateFunction(rate=rate, mask=mask, shaded=shaded),))


@dataclass(frozen=True)
class _ScaledRate:
    rate: Callable[..., Any]
    factor: float

    def __call__(self, x_um: Any, y_um: Any, z_um: Any) -> Any:
        return self.factor * self.rate(x_um, y_um, z_um)


def _scaled(source: Source, factor: float) -> Source:
    if isinstance(source, RateFunction):
        return replace(source, rate=_ScaledRate(source.rate, factor))
    if isinstance(source, DepthProfile):
        return replace(source, rate_per_cm3_s=tuple(factor * r for r in source.rate_per_cm3_s))
    strength = {Sunlight: "suns", Monochromatic: "flux_per_cm2_s", UniformRate: "rate_per_cm3_s"}[type(source)]
    return replace(source, **{strength: factor * getattr(source, strength)})
