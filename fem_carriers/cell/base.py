"""The quasi-neutral base: doping, mobilities, lifetime, temperature."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from ..constants import ELEMENTARY_CHARGE_C, STANDARD_TEMPERATURE_K, thermal_voltage_V
from ..errors import Complaints
from . import checks
from .checks import Varying

SILICON = "silicon"


@dataclass(frozen=True)
class Equilibrium:
    """What the weak forms need of a base, in cm, s, V.

    Parameters
    ----------
    doping_type : {"n", "p"}
    n0, p0, ni : float
        Equilibrium densities and intrinsic density, cm⁻³.
    mu_n, mu_p : float
        Mobilities, cm²/(V s).
    VT : float
        kT/q, V.
    """

    doping_type: str
    n0: float
    p0: float
    ni: float
    mu_n: float
    mu_p: float
    VT: float

    @property
    def Dn(self) -> float:
        """Electron diffusivity, cm²/s (Einstein relation)."""
        return self.mu_n * self.VT

    @property
    def Dp(self) -> float:
        """Hole diffusivity, cm²/s."""
        return self.mu_p * self.VT

    @property
    def minority_diffusivity(self) -> float:
        """Low-injection limit of the ambipolar diffusivity, cm²/s."""
        n, p = self.n0, self.p0
        return (n + p) / (n / self.Dp + p / self.Dn)


@dataclass(frozen=True, repr=False)
class Base:
    """A uniformly doped, quasi-neutral absorber.

    Parameters
    ----------
    doping_type : {"p", "n"}
    resistivity_ohm_cm, doping_per_cm3 : float
        Exactly one of the two. Resistivity and doping are related by ASTM F723 for silicon.
    thickness_um : float, optional
        Needed where a unit cell is built.
    lifetime_us : float or function of position
        Constant lifetime, R = Δn/τ; ``math.inf`` for none.
    tau_n0_us, tau_p0_us : float or function of position
        Shockley–Read–Hall lifetimes of a mid-gap level; both, and instead of `lifetime_us`.
    mobility_n_cm2_per_Vs, mobility_p_cm2_per_Vs : float, optional
        Constant mobilities; silicon has a default.
    ni_per_cm3 : float, optional
        Intrinsic density; silicon has a default.
    auger : "silicon", None, or (float, float)
        The silicon parametrisation, none, or constants (Cn, Cp) in cm⁶/s.
    radiative_cm3_per_s : "silicon" or float
        The silicon value, or a constant B.
    temperature_K : float
    material : {"silicon", "generic"}
        A generic absorber is described by constants only.

    Raises
    ------
    InputError
        Every problem of the input at once.
    """

    doping_type: str
    resistivity_ohm_cm: float | None = None
    doping_per_cm3: float | None = None
    thickness_um: float | None = None
    lifetime_us: Varying | None = None
    tau_n0_us: Varying | None = None
    tau_p0_us: Varying | None = None
    mobility_n_cm2_per_Vs: float | None = None
    mobility_p_cm2_per_Vs: float | None = None
    ni_per_cm3: float | None = None
    auger: str | tuple[float, float] | None = SILICON
    radiative_cm3_per_s: str | float = SILICON
    temperature_K: float = STANDARD_TEMPERATURE_K
    material: str = SILICON

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Base")
        checks.one_of(problems, "doping_type", self.doping_type, ("p", "n"))
        checks.one_of(problems, "material", self.material, (SILICON, "generic"))
        self._check_doping(problems)
        self._check_lifetimes(problems)
        self._check_constants(problems)
        if self.material == "generic":
            self._check_generic(problems)
        elif checks.positive(problems, "temperature_K", self.temperature_K):
            self._check_temperature(problems)
        problems.raise_if_any()
        self.equilibrium()  # refuses a doping or resistivity outside the range of the silicon models

    def _check_doping(self, problems: Complaints) -> None:
        given = {"resistivity_ohm_cm": self.resistivity_ohm_cm, "doping_per_cm3": self.doping_per_cm3}
        checks.exactly_one(problems, "doping", given, "doping_per_cm3=1e16, say")
        if self.resistivity_ohm_cm is not None:
            checks.positive(problems, "resistivity_ohm_cm", self.resistivity_ohm_cm)
        if self.doping_per_cm3 is not None:
            checks.positive(problems, "doping_per_cm3", self.doping_per_cm3, zero=True)

    def _check_lifetimes(self, problems: Complaints) -> None:
        taus = (self.tau_n0_us, self.tau_p0_us)
        srh = None if taus == (None, None) else taus
        given = {"lifetime_us": self.lifetime_us, "tau_n0_us and tau_p0_us": srh}
        checks.exactly_one(problems, "lifetime", given, "lifetime_us=math.inf for a base without defects")
        if self.lifetime_us is not None:
            checks.varying(problems, "lifetime_us", self.lifetime_us, inf=True)
        if srh is not None:
            for name, value in (("tau_n0_us", self.tau_n0_us), ("tau_p0_us", self.tau_p0_us)):
                if problems.unless(value is not None, f"{name} not given", "both tau_n0_us and tau_p0_us"):
                    checks.varying(problems, name, value, inf=True)

    def _check_constants(self, problems: Complaints) -> None:
        for name in ("thickness_um", "mobility_n_cm2_per_Vs", "mobility_p_cm2_per_Vs", "ni_per_cm3"):
            if getattr(self, name) is not None:
                checks.positive(problems, name, getattr(self, name))
        if self.radiative_cm3_per_s != SILICON:
            checks.positive(problems, "radiative_cm3_per_s", self.radiative_cm3_per_s, zero=True)
        if isinstance(self.auger, tuple):
            if problems.unless(len(self.auger) == 2, f"auger = {self.auger!r}", "a pair (Cn, Cp) in cm⁶/s"):
                for value in self.auger:
                    checks.positive(problems, "auger", value, zero=True)
        elif self.auger is not None:
            checks.one_of(problems, "auger", self.auger, (SILICON,))

    def _check_generic(self, problems: Complaints) -> None:
        for name in ("mobility_n_cm2_per_Vs", "mobility_p_cm2_per_Vs", "ni_per_cm3"):
            problems.unless(getattr(self, name) is not None, f"{name} not given", "a constant for a generic absorber")
        for name in ("auger", "radiative_cm3_per_s"):
            if getattr(self, name) == SILICON:
                problems.add(f"{name} = 'silicon'", "constants for a generic absorber", f"{name}={_NONE[name]}")
        checks.positive(problems, "temperature_K", self.temperature_K)

    def _check_temperature(self, problems: Complaints) -> None:
        from ..materials.silicon import TEMPERATURE_RANGE_K

        used = {
            "intrinsic_density": self.ni_per_cm3 is None,
            "mobility": self.mobility_n_cm2_per_Vs is None or self.mobility_p_cm2_per_Vs is None,
            "auger": self.auger == SILICON,
            "radiative": self.radiative_cm3_per_s == SILICON,
        }
        for model, is_used in used.items():
            low, high = TEMPERATURE_RANGE_K[model]
            if is_used:
                problems.unless(
                    low <= self.temperature_K <= high,
                    f"temperature_K = {self.temperature_K!r}",
                    f"{low:g} to {high:g} K for the silicon model of {model.replace('_', ' ')}",
                    "another temperature, or a constant in its place",
                )

    def intrinsic_density_per_cm3(self) -> float:
        """ni: the value given, or silicon's at this temperature."""
        if self.ni_per_cm3 is not None:
            return self.ni_per_cm3
        from ..materials.silicon import intrinsic_density_per_cm3

        return float(intrinsic_density_per_cm3(self.temperature_K))

    def equilibrium(self) -> Equilibrium:
        """Equilibrium densities, mobilities and thermal voltage.

        n0 p0 = ni², n0 − p0 = ±N. A typed resistivity scales the majority mobility so that exactly it results
        at 300 K, where ASTM F723 holds.

        Returns
        -------
        Equilibrium

        Raises
        ------
        InputError
            Doping or resistivity outside the range of the silicon models.
        """
        doping = self._doping()
        ni, VT = self.intrinsic_density_per_cm3(), thermal_voltage_V(self.temperature_K)
        majority = 0.5 * doping + math.hypot(0.5 * doping, ni)
        minority = ni**2 / majority
        mobility = {c: self._mobility(c, doping) for c in ("n", "p")}
        mobility[self.doping_type] *= self._majority_scale(doping)
        n0, p0 = (minority, majority) if self.doping_type == "p" else (majority, minority)
        return Equilibrium(self.doping_type, n0, p0, ni, mobility["n"], mobility["p"], VT)

    def _majority_scale(self, doping: float) -> float:
        """Factor on the silicon majority mobility that gives the typed resistivity at 300 K; 1 otherwise."""
        given = {"n": self.mobility_n_cm2_per_Vs, "p": self.mobility_p_cm2_per_Vs}[self.doping_type]
        if self.resistivity_ohm_cm is None or given is not None:
            return 1.0
        from ..materials.silicon import mobility_cm2_per_Vs

        wanted = 1 / (ELEMENTARY_CHARGE_C * self.resistivity_ohm_cm * doping)
        return wanted / float(mobility_cm2_per_Vs(self.doping_type, doping, 300.0))

    def _doping(self) -> float:
        if self.doping_per_cm3 is not None:
            return self.doping_per_cm3
        given: Any = {"n": self.mobility_n_cm2_per_Vs, "p": self.mobility_p_cm2_per_Vs}[self.doping_type]
        if given is not None:
            return float(1 / (ELEMENTARY_CHARGE_C * given * self.resistivity_ohm_cm))
        from ..materials.silicon import doping_per_cm3

        return float(doping_per_cm3(self.doping_type, self.resistivity_ohm_cm))

    def _mobility(self, carrier: str, doping: float) -> float:
        given = {"n": self.mobility_n_cm2_per_Vs, "p": self.mobility_p_cm2_per_Vs}[carrier]
        if given is not None:
            return given
        from ..materials.silicon import mobility_cm2_per_Vs

        return float(mobility_cm2_per_Vs(carrier, doping, self.temperature_K))


_NONE = {"auger": None, "radiative_cm3_per_s": 0}
