"""How the rate of every recombination channel changes with the excess density at the nodes."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .balance import CarrierBalance, load_form

if TYPE_CHECKING:
    from numpy.typing import NDArray

Key = tuple[str, str]
"""(kind, name) as in the ledger: ("bulk", "base: Auger"), ("surface", "rear"), ("terminal", "front")."""


def rate_slopes(system: CarrierBalance, dn: NDArray[np.float64]) -> dict[Key, NDArray[np.float64]]:
    """d/dΔn_i of ∫ R of every bulk channel and of ∮ U of every surface and edge with a law, each (n,).

    Parameters
    ----------
    system : CarrierBalance
    dn : (n,) array
        Δn at the nodes, cm⁻³.
    """
    found: dict[Key, NDArray[np.float64]] = {}
    bulk, values = system.space.bulk, system.space.bulk.values(dn)
    for channel in system.channels:
        slope = np.zeros_like(values)
        slope[channel.cells] = channel.law(values[channel.cells])[1]
        found["bulk", f"{channel.volume}: {channel.name}"] = np.asarray(bulk.load(rate=slope))
    for name, law in system.surface_laws.items():
        basis = system.space.surfaces[name]
        slope = law(np.asarray(basis.interpolate(dn)))[1] * np.ones(basis.dx.shape)
        found["surface", name] = np.asarray(load_form().assemble(basis, rate=slope))
    for name, (weights, law) in system.edge_laws.items():
        found["surface", f"{name}: edge"] = weights * law(dn)[1]
    return found
