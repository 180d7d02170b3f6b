"""Current density along a contact: how the current crowds at its edge."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..errors import Complaints
from ..units import MA

if TYPE_CHECKING:
    import pandas as pd

    from .bipolar import BipolarSolution


def contact_current(solution: BipolarSolution, surface: str) -> pd.DataFrame:
    """Current density into the metal at the nodes of a contact, (φ − V)/ρc.

    Parameters
    ----------
    solution : BipolarSolution
    surface : str
        A contacted surface with a contact resistivity.

    Returns
    -------
    pandas.DataFrame
        Coordinates in µm, the distance from the first node (along x, then y), and
        ``contact_current_mA_per_cm2`` per contact area; conventional current out of the cell is positive.

    Raises
    ------
    InputError
        No such contact, or an ideal one: its current density is infinite at its edge.
    """
    import pandas as pd

    state = solution.bipolar
    metals = {m.surface: m for m in state.system.conductors.metals}
    problems = Complaints("contact_current")
    if problems.unless(surface in metals, f"surface {surface!r}", f"a contact: {', '.join(metals) or 'there is none'}"):
        given = f"the ideal contact {surface}"
        allowed = "a contact with a contact_resistivity_mohm_cm2: at an ideal one the density is infinite at the edge"
        problems.unless(metals[surface].resistivity_ohm_cm2 > 0, given, allowed)
    problems.raise_if_any()
    metal = metals[surface]
    lift = state.voltages[metal.terminal] - state.voltages[metal.reference]
    potential = (state.x.s if metal.on_layer else state.x.f)[metal.dofs] - lift
    density = state.system.roles.sign * potential / metal.resistivity_ohm_cm2 / MA
    where = solution.problem.space.points_cm[:, metal.dofs] * 1e4
    order = np.lexsort(where[::-1])
    where, density = where[:, order], density[order]
    distance = np.linalg.norm(where - where[:, :1], axis=0)
    names = ["x_um", "z_um"] if where.shape[0] == 2 else ["x_um", "y_um", "z_um"]
    columns = {"distance_um": distance} | dict(zip(names, where, strict=True))
    return pd.DataFrame(columns | {"contact_current_mA_per_cm2": density})
