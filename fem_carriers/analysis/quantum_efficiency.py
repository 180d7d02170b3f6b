"""Quantum efficiency against wavelength, and where the missing carriers went."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from ..transport.beam import beam_weights
from .accuracy import Numbers, check_target, refine
from .ladder import finer, starting_problem
from .operating_point import Given, operating_point, response_of, terminal_keys
from .solution import Solution
from .weak_light import Beams, channel_columns, make_beams

EXTERNAL, INTERNAL = "external_quantum_efficiency_percent", "internal_quantum_efficiency_percent"

if TYPE_CHECKING:
    import pandas as pd

    from ..transport.beam import BeamWeights
    from ..transport.channels import Key
    from ..transport.problem import Problem
    from .operating_point import Response


def quantum_efficiency(
    problem: Given,
    wavelength_nm: Any = None,
    *,
    absorption_per_cm: Any = None,
    terminal: str | None = None,
    reflectance: Any = None,
    path: str | None = None,
    enters: str | None = None,
    voltage_V: float | Mapping[str, Any] = 0.0,
    form: str = "excess",
    losses: bool = True,
    target_error_percent: float | None = None,
    largest_unknowns: int | None = None,
) -> pd.DataFrame:
    """Internal and external quantum efficiency of weak light, from one adjoint solve per channel and no other.

    External: carriers collected per photon that falls on the cell. Internal: per photon that is neither shaded nor
    reflected. The rest is shared out: light shaded, reflected, escaped (through the other face) or lost in layers
    (parasitic), carriers lost in each bulk channel and at each surface; all of it sums to 100 %. Per wavelength only
    the flux against depth is computed (`BeamWeights`), so a hundred wavelengths cost about as much as one.

    Parameters
    ----------
    problem : Problem, UnitCell or Solution
        A problem is taken in the dark, without bias light. A solution is the operating point: its light is the bias
        light, its voltages the bias, and the result is the differential quantum efficiency.
    wavelength_nm : sequence of float
    absorption_per_cm : sequence of float
        Absorption coefficients instead of wavelengths, for any absorber.
    terminal : str, optional
        Count this terminal only; default is the sum of all that collect minority carriers (of bare metal if there are
        none).
    reflectance : float or (wavelength_nm, reflectance), optional
    path : {"single_pass", "rear_mirror", "lambertian"}, optional
    enters : {"front", "rear"}, optional
        What is not stated is as in the sunlight of the problem or solution; or 0, "single_pass", "front".
    voltage_V, form
        As for `collection_probability`.
    losses : bool
        False leaves out the split of the missing carriers and saves its adjoint solves.
    target_error_percent : float, optional
        Refine the mesh until the error bar of the external quantum efficiency is below this share of it at every
        wavelength, at least of a hundredth of the photons. Not with a solution, which has its mesh.
    largest_unknowns : int, optional
        As for `solve_excess`.

    Returns
    -------
    pandas.DataFrame
        One row per wavelength: wavelength_nm, absorption_per_cm, external_quantum_efficiency_percent,
        internal_quantum_efficiency_percent, then in percent of the incident photons collected_<terminal>,
        shaded, reflected, escaped, parasitic, lost_<volume>_<channel>, lost_<surface> (each with _percent); with a
        target error also error_bar_external_quantum_efficiency_percent and error_bar_internal_… (half widths).

    Raises
    ------
    InputError, SolverError, BalanceError
    """
    how = Measured(
        wavelength_nm, absorption_per_cm, terminal, reflectance, path, enters, voltage_V, form, losses
    )  # fmt: skip
    if target_error_percent is None:
        return how.table(problem)
    return _with_bars(problem, how, target_error_percent, largest_unknowns)


@dataclass(frozen=True)
class Measured:
    """What is asked for; see `quantum_efficiency`."""

    wavelength_nm: Any
    absorption_per_cm: Any
    terminal: str | None
    reflectance: Any
    path: str | None
    enters: str | None
    voltage_V: float | Mapping[str, Any]
    form: str
    losses: bool

    def table(self, problem: Given) -> pd.DataFrame:
        """On the mesh of a problem."""
        import pandas as pd

        solution = operating_point("quantum_efficiency", problem, self.voltage_V, self.form, dark=True)
        light = solution.problem.light if isinstance(problem, Solution) else getattr(problem, "light", None)
        beams = make_beams(
            "quantum_efficiency", solution.problem, light, wavelength_nm=self.wavelength_nm,
            absorption_per_cm=self.absorption_per_cm, reflectance=self.reflectance, path=self.path, enters=self.enters,
        )  # fmt: skip
        response = response_of(solution)
        chosen = chosen_terminals("quantum_efficiency", response, self.terminal)
        keys = response.keys if self.losses else chosen
        weights = beam_weights(solution.problem, beams.source, [response.field(key) for key in keys])
        return pd.DataFrame(_columns(beams, keys, chosen, shares(weights, beams)))


def _columns(beams: Beams, keys: list[Key], chosen: list[Key], found: tuple[dict[str, Any], Any]) -> dict[str, Any]:
    optical, rates = found
    external = sum(rates[keys.index(key)] for key in chosen)
    first = {} if beams.wavelength_nm is None else {"wavelength_nm": beams.wavelength_nm}
    first["absorption_per_cm"] = beams.absorption_per_cm
    entering = 1 - optical["shaded"] - optical["reflected"]
    first[EXTERNAL] = 100 * external
    first[INTERNAL] = 100 * external / np.where(entering > 0, entering, np.nan)
    columns = channel_columns(keys, "_percent")
    ordered = sorted(keys, key=lambda key: {"terminal": 0, "bulk": 1, "surface": 2}[key[0]])
    shared = {columns[key]: 100 * rates[keys.index(key)] for key in ordered}
    ours = {c: v for c, v in shared.items() if c.startswith("collected_")}
    rest = {c: v for c, v in shared.items() if c not in ours}
    return first | ours | {f"{n}_percent": 100 * v for n, v in optical.items()} | rest


def _with_bars(given: Given, how: Measured, percent: float, largest_unknowns: int | None) -> pd.DataFrame:
    """On ever finer meshes, with the error bars of their family."""
    problems = Complaints("quantum_efficiency")
    given_text = "target_error_percent with a solution"
    problems.unless(not isinstance(given, Solution), given_text, "a problem or a unit cell, whose mesh can be refined")
    problems.raise_if_any()
    assert not isinstance(given, Solution)
    target = check_target("quantum_efficiency", percent, None)
    assert target is not None
    first = starting_problem(given, {}, target, bipolar=how.form == "bipolar")

    def numbers(table: pd.DataFrame) -> Numbers:
        values = {f"{i}": float(v) for i, v in enumerate(table[EXTERNAL])}
        return values, {name: max(abs(v), 1.0) for name, v in values.items()}

    def next_one(table: pd.DataFrame, posed: Problem, excess: float) -> Problem | None:
        return finer(posed, largest_unknowns, excess)

    table, bars = refine(first, lambda posed, before: how.table(posed), numbers, next_one, target, progress=False)
    half = np.array([bars[f"{i}"] for i in range(len(table))])
    inner = table[INTERNAL] / table[EXTERNAL].where(table[EXTERNAL] != 0)
    place = list(table).index(INTERNAL)
    table.insert(place + 1, f"error_bar_{EXTERNAL}", half)
    table.insert(place + 2, f"error_bar_{INTERNAL}", half * inner)
    return table


def shares(weights: BeamWeights, beams: Beams) -> tuple[dict[str, Any], Any]:
    """Per incident photon: what became of the light, (n,) each, and the rate of every field, (k, n)."""
    rates, absorbed, lost = weights.responses(beams.net(weights.deepest_cm))
    lit = weights.lit_cm2 / weights.region_cm2
    entering = (1 - beams.reflectance) / weights.region_cm2
    optical = {
        "shaded": (1 - lit) * np.ones_like(absorbed),
        "reflected": beams.reflectance * lit,
        "escaped": (1 - beams.reflectance) * lit - absorbed * entering,
        "parasitic": lost * entering,
    }
    return optical, rates * entering


def chosen_terminals(what: str, response: Response, terminal: str | None) -> list[Key]:
    """Keys of the terminals that count as collecting."""
    keys = terminal_keys(response)
    names = sorted(name for _, name in keys)
    problems = Complaints(what)
    given = "nothing that collects" if terminal is None else f"terminal {terminal!r}"
    allowed = ", ".join(map(repr, names)) or "a contact on a layer of the type opposite to the base, or bare metal"
    problems.unless(bool(keys) if terminal is None else terminal in names, given, allowed)
    problems.raise_if_any()
    return [key for key in keys if terminal in (None, key[1])]
