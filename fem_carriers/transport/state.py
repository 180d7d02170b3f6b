"""What every solved state offers to the analysis, whichever form it was solved in."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any, Protocol

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from .balance import CarrierBalance
    from .newton import Outcome


class SolvedState(Protocol):
    """A solved excess density with its system."""

    @property
    def system(self) -> CarrierBalance:
        """Generation and recombination of the problem."""

    @property
    def outcome(self) -> Outcome:
        """How the solution was reached."""

    @property
    def dn(self) -> NDArray[np.float64]:
        """Δn at the nodes, cm⁻³."""

    @property
    def voltages_V(self) -> Mapping[str, float]:
        """Voltage of every terminal."""

    def minority_flux(self) -> Any:
        """Γ, the flux of the excess carriers up their gradient, (dimension, n_cells, n_points), 1/(cm² s)."""

    def leaving(self) -> dict[tuple[str, str], float]:
        """Carriers per second that leave other than by a rate, keyed by ("terminal" or "surface", name)."""
