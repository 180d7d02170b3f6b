"""The loss budget: free energy delivered by the light, and where it goes.

With φp − φn the splitting of the quasi-Fermi potentials, light delivers ∫ q G (φp − φn); recombination takes
∫ q R (φp − φn) in the bulk and ∮ q U (φp − φn) at surfaces; transport takes −∫ J·∇φ per carrier in the base,
−∫ K·∇s φ in sheets and ∫ ρc Jc² at contacts; what is left is Σ V J over the terminals (R. Brendel, S. Dreissigacker,
N.-P. Harder, P. P. Altermatt, Appl. Phys. Lett. 93, 173503 (2008)). The potentials are interpolated at the nodes, which
makes the budget the weak form itself, tested with the potentials.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C
from ..errors import Complaints

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from ..transport.bipolar_state import BipolarState


@dataclass(frozen=True, eq=False)
class Losses:
    """Power per cell area by named part.

    Parameters
    ----------
    rows : dict of (kind, name) to float
        mW/cm²; kind is "bulk", "surface", "transport", "sheet", "contact" or "output".
    delivered_mW_per_cm2 : float
        Free energy delivered by the absorbed light.
    optical : dict of str to float
        What shaded, reflected and escaped light would have delivered at the same energy per carrier, mW/cm².
    incident_mW_per_cm2 : float
        Incident power; 0 if the light states none.
    current_mA_per_cm2 : float
        Terminal current the series resistances refer to.
    """

    rows: dict[tuple[str, str], float]
    delivered_mW_per_cm2: float
    optical: dict[str, float]
    incident_mW_per_cm2: float
    current_mA_per_cm2: float

    @property
    def misclosure_mW_per_cm2(self) -> float:
        """Delivered less everything accounted for."""
        return self.delivered_mW_per_cm2 - sum(self.rows.values())

    @property
    def output_mW_per_cm2(self) -> float:
        """Power out of the terminals."""
        return sum(v for (kind, _), v in self.rows.items() if kind == "output")

    def sum_of(self, kind: str) -> float:
        """Sum over a kind, mW/cm²."""
        return sum(v for (k, _), v in self.rows.items() if k == kind)

    @property
    def table(self) -> pd.DataFrame:
        """The budget as a table: mW/cm², and % absolute of the incident power where it is known."""
        import pandas as pd

        lines = [("delivered", "by the light", self.delivered_mW_per_cm2)]
        lines += [(kind, name, value) for (kind, name), value in self.rows.items()]
        lines.append(("misclosure", "", self.misclosure_mW_per_cm2))
        lines += [("optical", name, value) for name, value in self.optical.items()]
        table = pd.DataFrame(lines, columns=["kind", "name", "power_mW_per_cm2"]).set_index(["kind", "name"])
        if self.incident_mW_per_cm2 > 0:
            table["percent_absolute"] = 100 * table["power_mW_per_cm2"] / self.incident_mW_per_cm2
        return table

    @property
    def series_resistance_ohm_cm2(self) -> dict[str, float]:
        """Power lost in transport, by component, over the square of the terminal current; Ω·cm².

        Raises
        ------
        InputError
            At open circuit there is no current to refer to.
        """
        problems = Complaints("series resistance")
        j = self.current_mA_per_cm2
        scale = max(abs(self.delivered_mW_per_cm2), 1e-9)
        problems.unless(abs(j) > 1e-6 * scale, f"a terminal current of {j:g} mA/cm²", "an operating point with current")
        problems.raise_if_any()
        parts = {name: v for (kind, name), v in self.rows.items() if kind in ("transport", "sheet", "contact")}
        return {name: 1e3 * value / j**2 for name, value in parts.items()}

    def __str__(self) -> str:
        return str(self.table.to_string(float_format="{:.5g}".format))

    def _repr_html_(self) -> str:
        return str(self.table.to_html(float_format="{:.5g}".format))


def make_losses(state: BipolarState, current_mA_per_cm2: float) -> Losses:
    """Loss budget of a solved state.

    Parameters
    ----------
    state : BipolarState
    current_mA_per_cm2 : float
        Terminal current of the hole-collecting side.

    Returns
    -------
    Losses
    """
    system, problem = state.system, state.system.problem
    to_power = 1e3 * ELEMENTARY_CHARGE_C / problem.cell_area_cm2
    split = node_splitting(state)
    delivered = float(system.load @ split) * to_power
    rows = {key: value * to_power for key, value in _recombination(state, split).items()}
    rows |= {("transport", name): v * to_power for name, v in _transport(state, split).items()}
    rows |= {key: v * 1e3 / problem.cell_area_cm2 for key, v in _conductors(state).items()}
    optics = system.optics
    per_carrier = delivered / optics.generated if optics.generated > 0 else 0.0
    optical = {name: getattr(optics, name) * per_carrier for name in ("shaded", "reflected", "escaped", "parasitic")}
    return Losses(rows, delivered, optical, optics.incident_power_mW_per_cm2, current_mA_per_cm2)


def node_splitting(state: BipolarState) -> NDArray[np.float64]:
    """φp − φn at the nodes, V; on layers from the potentials themselves."""
    system = state.system
    layer = system.conductors.layer
    split = np.maximum(system.roles.splitting(state.dn), -2.0)  # undershoots of nearly empty nodes are cut
    split[layer] = system.across(state.x, state.voltages)[layer]
    return np.asarray(split)


def _recombination(state: BipolarState, split: Any) -> dict[tuple[str, str], float]:
    """∫ R (φp − φn) of every channel, surface and shunt; carriers per second times volts."""
    system, bulk = state.system, state.system.space.bulk
    values, at_points = bulk.values(state.dn), bulk.values(split)
    rows: dict[tuple[str, str], float] = {}
    for c in system.channels:
        rate = c.law(values[c.cells])[0]
        rows["bulk", f"{c.volume}: {c.name}"] = float((rate * at_points[c.cells] * bulk.dx[c.cells]).sum())
    for name, law in system.surface_laws.items():
        basis = system.space.surfaces[name]
        rate = law(np.asarray(basis.interpolate(state.dn)))[0]
        rows["surface", name] = float((rate * np.asarray(basis.interpolate(split)) * basis.dx).sum())
    for name, (weights, law) in system.edge_laws.items():
        rows["surface", f"{name}: edge"] = float((weights * law(state.dn)[0]) @ split)
    for name, shunt in system.conductors.shunts.items():
        across = np.where(system.conductors.layer, split, 0.0)
        rows["surface", f"{name}: shunt"] = float(across @ (shunt @ across)) / ELEMENTARY_CHARGE_C
    return rows


def _transport(state: BipolarState, split: Any) -> dict[str, float]:
    """−∫ j·∇φ of both carriers in the base."""
    bulk = state.system.space.bulk
    names = ("electrons in the base", "holes in the base")
    names = names if state.system.roles.sign > 0 else names[::-1]
    gradients = bulk.gradients(state.x.f - split), bulk.gradients(state.x.f)
    pairs = zip(names, state.system.fluxes(state.x), gradients, strict=True)
    return {name: float(-(np.einsum("dij,dij->ij", flux, slope) * bulk.dx).sum()) for name, flux, slope in pairs}


def _conductors(state: BipolarState) -> dict[tuple[str, str], float]:
    """Power in sheets and contacts, and out of the terminals, W (per cm of depth in 2-D)."""
    conductors, x = state.system.conductors, state.x
    rows: dict[tuple[str, str], float] = {}
    for name, (opposite, conductance) in conductors.sheets.items():
        potential = np.where(conductors.layer, x.s, 0.0) if opposite else x.f
        rows["sheet", f"layer on {name}"] = float(potential @ (conductance @ potential))
    for metal in conductors.metals:
        if metal.resistivity_ohm_cm2 > 0:
            lift = state.voltages[metal.terminal] - state.voltages[metal.reference]
            drop = (x.s if metal.on_layer else x.f) - lift
            rows["contact", f"contact {metal.surface}"] = float(drop @ (metal.mass @ drop)) / metal.resistivity_ohm_cm2
    for terminal, current in state.terminal_currents.items():
        rows["output", terminal] = state.voltages[terminal] * current
    return rows
