"""Power and masses of layouts between the solved ones, and the best of them under limits."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .interpolation import Interpolant
from .layout_axes import LayoutVariable

QUANTITIES = ("power_mW", "error_bar_power_mW", "printed_mass_mg", "wire_mass_mg", "metal_mass_mg")
TRADE_LEVELS = 25
Place = dict[str, float]


@dataclass(frozen=True, eq=False)
class LayoutSurface:
    """Solved layouts in all combinations of their variables' nodes.

    Parameters
    ----------
    variables : tuple of LayoutVariable
    rows : list of dict
        In the order of `itertools.product` of the nodes.
    limits : mapping of str to float
        Largest value of some `QUANTITIES`.
    bar_mW : float
        Added to the error bars: what interpolation may miss.
    """

    variables: tuple[LayoutVariable, ...]
    rows: list[dict[str, float]]
    limits: Mapping[str, float]
    bar_mW: float = 0.0

    def corrected(self, by_mW: float) -> LayoutSurface:
        """The same with every power moved by the difference found at one place, and error bars wider by as much."""
        moved = [row | {"power_mW": row["power_mW"] + by_mW} for row in self.rows]
        return replace(self, rows=moved, bar_mW=self.bar_mW + abs(by_mW))

    @property
    def smooth(self) -> list[LayoutVariable]:
        """Variables that are interpolated."""
        return [v for v in self.variables if not v.apart]

    @property
    def apart(self) -> list[LayoutVariable]:
        """Variables that are not."""
        return [v for v in self.variables if v.apart]

    @cached_property
    def _interpolants(self) -> dict[tuple[float, ...], Interpolant]:
        """By the values of the variables that stand apart."""
        found = {}
        for values in itertools.product(*(v.nodes for v in self.apart)):
            names = [v.name for v in self.apart]
            rows = [r for r in self.rows if all(r[n] == x for n, x in zip(names, values, strict=True))]
            table = np.array([[row[q] for q in QUANTITIES] for row in rows]).T
            shape = (len(QUANTITIES), *(v.nodes.size for v in self.smooth))
            found[values] = Interpolant([v.nodes for v in self.smooth], table.reshape(shape))
        return found

    def at(self, place: Mapping[str, float]) -> Place:
        """Interpolated quantities at values of all variables, with the values."""
        one = self._interpolants[tuple(place[v.name] for v in self.apart)]
        found = dict(zip(QUANTITIES, map(float, one.at(*(place[v.name] for v in self.smooth))), strict=True))
        found["error_bar_power_mW"] += self.bar_mW
        return {v.name: place[v.name] for v in self.variables} | found

    @cached_property
    def _candidates(self) -> dict[str, NDArray[np.float64]]:
        """All combinations of the variables' places with their quantities."""
        columns: dict[str, list[NDArray[np.float64]]] = {n: [] for n in (*self._names, *QUANTITIES)}
        places = np.meshgrid(*(v.places for v in self.smooth), indexing="ij")
        for values, one in self._interpolants.items():
            table = one.grid(*(v.places for v in self.smooth)).reshape(len(QUANTITIES), -1)
            for v, p in zip(self.smooth, places, strict=True):
                columns[v.name].append(p.ravel())
            for v, x in zip(self.apart, values, strict=True):
                columns[v.name].append(np.full(table.shape[1], x))
            for name, row in zip(QUANTITIES, table, strict=True):
                columns[name].append(row)
        return {name: np.concatenate(parts) for name, parts in columns.items()}

    @property
    def _names(self) -> list[str]:
        return [v.name for v in self.variables]

    def _allowed(self, limits: Mapping[str, float]) -> NDArray[np.bool_]:
        found = np.ones(self._candidates[QUANTITIES[0]].size, dtype=bool)
        for name, limit in limits.items():
            found &= self._candidates[name] <= limit * (1 + 1e-12)
        return found

    def best(self, limits: Mapping[str, float] | None = None, fixed: Mapping[str, float] | None = None) -> Place | None:
        """The most power with some variables fixed at one of their places; None if the limits leave nothing."""
        limits = self.limits if limits is None else limits
        allowed = self._allowed(limits)
        for name, value in (fixed or {}).items():
            allowed &= self._candidates[name] == value
        if not allowed.any():
            return None
        k = int(np.argmax(np.where(allowed, self._candidates["power_mW"], -np.inf)))
        start = {name: float(self._candidates[name][k]) for name in self._names}
        return self._improved(start, limits, set(fixed or {}))

    def _improved(self, start: Place, limits: Mapping[str, float], fixed: set[str]) -> Place:
        """Continuous variables moved off their places: sequential quadratic programming in their logarithms."""
        from scipy.optimize import minimize

        free = [v for v in self.smooth if not v.whole and v.name not in fixed]
        first = self.at(start)
        if not free:
            return first

        def at(logs: NDArray[np.float64]) -> Place:
            inside = {v.name: float(np.clip(np.exp(x), *v.places[[0, -1]])) for v, x in zip(free, logs, strict=True)}
            return self.at(start | inside)

        def room(name: str, limit: float) -> dict[str, Any]:
            return {"type": "ineq", "fun": lambda logs: 1 - at(logs)[name] / limit}

        rest: dict[str, Any] = {"constraints": [room(*item) for item in limits.items()], "options": {"ftol": 1e-9}}
        bounds = [(float(np.log(v.places[0])), float(np.log(v.places[-1]))) for v in free]
        begin = np.log([start[v.name] for v in free])
        loss: Any = lambda logs: -at(logs)["power_mW"] / first["power_mW"]
        found = minimize(loss, begin, method="SLSQP", bounds=bounds, **rest)
        best = at(found.x)
        kept = all(best[name] <= limit * (1 + 1e-6) for name, limit in limits.items())
        return best if kept and best["power_mW"] >= first["power_mW"] else first

    def best_by(self, name: str) -> list[Place]:
        """The best layout for every place of a variable; those that the limits forbid are left out."""
        places = next(v.places for v in self.variables if v.name == name)
        found = [self.best(fixed={name: float(x)}) for x in places]
        return [place for place in found if place is not None]

    def flat(self, level_mW: float) -> dict[str, list[float]]:
        """Smallest and largest value of every variable among the allowed places with at least this power."""
        good = self._allowed(self.limits) & (self._candidates["power_mW"] >= level_mW)
        found = {}
        for name in self._names:
            values = self._candidates[name][good]
            best = self.best() or {}
            found[name] = [float(min([*values, best[name]])), float(max([*values, best[name]]))]
        return found

    def trade(self, mass: str) -> list[Place]:
        """The most power for masses from the least one to that of the most power without a limit on it."""
        others = {name: limit for name, limit in self.limits.items() if name != mass}
        top = self.best(others)
        low = float(self._candidates[mass][self._allowed(others)].min())
        assert top is not None
        if top[mass] == 0:
            return [top]
        levels: Sequence[float] = [top[mass]]
        if 0 < low < 0.999 * top[mass]:
            levels = [*np.geomspace(low, top[mass], TRADE_LEVELS)]
        found: list[Place] = []
        for level in levels:
            place = self.best({**others, mass: float(level)})
            if place is not None and (not found or place["power_mW"] > found[-1]["power_mW"]):
                found.append(place)
        return found
