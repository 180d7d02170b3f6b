"""The carrier ledger: generated = bulk channels + surfaces + terminals, from the assembled vectors that were solved."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from ..constants import ELEMENTARY_CHARGE_C
from ..errors import BalanceError, Complaints
from ..transport.bipolar_state import BipolarState
from ..transport.excess import ExcessSystem
from ..transport.newton import round_off
from ..units import MA

if TYPE_CHECKING:
    import pandas as pd

    from ..transport.state import SolvedState

LARGEST_MISCLOSURE = 1e-10
"""Of the largest of generation, total recombination and terminal current; a solution beyond it is refused."""


@dataclass(frozen=True, eq=False)
class Ledger:
    """Where the generated carriers went.

    Parameters
    ----------
    rows : dict of (kind, name) to float
        mA/cm² of cell area; kind is "bulk", "surface" or "terminal".
    generated_mA_per_cm2 : float
    """

    rows: dict[tuple[str, str], float]
    generated_mA_per_cm2: float

    @property
    def scale_mA_per_cm2(self) -> float:
        """The larger of generation and total recombination (plus what is injected)."""
        lost = sum(abs(v) for (kind, _), v in self.rows.items() if kind != "terminal")
        injected = sum(-v for (kind, _), v in self.rows.items() if kind == "terminal" and v < 0)
        return max(abs(self.generated_mA_per_cm2), lost, injected)

    @property
    def residual_mA_per_cm2(self) -> float:
        """Generated less everything accounted for."""
        return self.generated_mA_per_cm2 - sum(self.rows.values())

    @property
    def relative_residual(self) -> float:
        """`residual_mA_per_cm2` over `scale_mA_per_cm2`."""
        return self.residual_mA_per_cm2 / self.scale_mA_per_cm2 if self.scale_mA_per_cm2 > 0 else 0.0

    def share(self, name: str, kind: str | None = None) -> float:
        """Fraction of the generation that went to `name`.

        Parameters
        ----------
        name : str
            A terminal, a surface, or "volume: channel"; also a kind ("bulk", "surface", "terminal") for its sum.
        kind : {"bulk", "surface", "terminal"}, optional
            Needed where a terminal and a surface share their name.

        Raises
        ------
        InputError
            Unknown or ambiguous name, or nothing generated.
        """
        problems = Complaints("ledger.share")
        keys = [k for k in self.rows if name in (k[1], k[0]) and kind in (None, k[0])]
        kinds = {k[0] for k in keys}
        known = ", ".join(f"{n!r} ({k})" for k, n in self.rows)
        problems.unless(bool(keys), f"name {name!r}", known)
        if len(kinds) > 1:
            problems.add(f"name {name!r} of a {' and a '.join(sorted(kinds))}", "one of them", f"kind={min(kinds)!r}")
        problems.unless(self.generated_mA_per_cm2 != 0, "a share of nothing generated", "a solution under light")
        problems.raise_if_any()
        return sum(self.rows[k] for k in keys) / self.generated_mA_per_cm2

    @property
    def table(self) -> pd.DataFrame:
        """The ledger as a table with its sum and residual; percent of the generation."""
        import pandas as pd

        lines = [("generated", "", self.generated_mA_per_cm2)]
        lines += [(kind, name, value) for (kind, name), value in self.rows.items()]
        lines.append(("residual", "", self.residual_mA_per_cm2))
        table = pd.DataFrame(lines, columns=["kind", "name", "current_mA_per_cm2"]).set_index(["kind", "name"])
        if self.generated_mA_per_cm2 != 0:
            table["percent_of_generated"] = 100 * table["current_mA_per_cm2"] / self.generated_mA_per_cm2
        return table

    def __str__(self) -> str:
        formats = {"current_mA_per_cm2": "{:.6g}".format, "percent_of_generated": "{:.5g}".format}
        return str(self.table.to_string(formatters=formats))

    def _repr_html_(self) -> str:
        return str(self.table.to_html(float_format="{:.6g}".format))


def make_ledger(state: SolvedState) -> Ledger:
    """Ledger of a solved state.

    Parameters
    ----------
    state : SolvedState

    Returns
    -------
    Ledger

    Raises
    ------
    BalanceError
        The ledger does not close to `LARGEST_MISCLOSURE`.
    """
    system = state.system
    to_current = ELEMENTARY_CHARGE_C / system.problem.cell_area_cm2 / MA
    rows: dict[tuple[str, str], Any] = {}
    for (volume, channel), rate in system.bulk_rates(state.dn).items():
        rows["bulk", f"{volume}: {channel}"] = rate * to_current
    for name, rate in system.surface_rates(state.dn).items():
        rows["surface", name] = rate * to_current
    for key, rate in state.leaving().items():
        rows[key] = rows.get(key, 0.0) + rate * to_current
    ledger = Ledger(rows, float(system.load.sum()) * to_current)
    if not abs(ledger.residual_mA_per_cm2) <= _allowed(ledger, state, to_current):
        raise BalanceError(
            "balance does not close",
            f"The carrier ledger misses {ledger.relative_residual:.1e} of the throughput (allowed "
            f"{LARGEST_MISCLOSURE:.0e}); the solution is refused. Try a larger first step or less extreme inputs.",
        )
    return ledger


def _allowed(ledger: Ledger, state: SolvedState, to_current: float) -> float:
    """Largest misclosure, mA/cm²; where drift holds diffusion in balance, at least the round-off of the two."""
    scale, system = ledger.scale_mA_per_cm2, state.system
    if isinstance(state, BipolarState):  # between contacts of one polarity a current flows that is no row here
        scale = max([scale, *(abs(i) / system.problem.cell_area_cm2 / MA for i in state.terminal_currents.values())])
    allowed = LARGEST_MISCLOSURE * scale
    if not isinstance(system, ExcessSystem) or system.drift is None:
        return allowed
    return max(allowed, round_off(system.jacobian(state.dn), state.dn) * to_current)
