"""The bipolar form: Δn and the majority potential f; on opposite-type layers the layer's potential s in place of Δn.

For a p-type base (an n-type one by exchanging roles, see `roles`), fluxes in carriers per cm² and second,

    jm = Dm (1 + m/M) ∇Δn − μm m ∇f          jM = −μM M ∇f
    Fm(v) = ∫ [jm·∇v + (R − G) v] + ∫ k·∇s v + ∮ (U − jc) v = 0      k = −∇s s / (q R_sh),  jc = (s − V) / (q ρc)
    FM(v) = ∫ [jM·∇v − (R − G) v] + ∫ k·∇s v − ∮ (U + jc) v = 0      k, jc with f in place of s

A layer of the base's type and a contact that reaches the base act on f, a layer of the opposite type on s; on its nodes
Δn = h(V + f − s) (`Roles.density`). Both unknowns are smooth at short circuit and at open circuit. Every potential is
stored relative to its own terminal; the voltage enters only in h. The test functions sum to one: Σ Fm + Σ FM = 0 is the
balance of the terminals.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C
from .balance import CarrierBalance
from .conductors import Conductors
from .roles import Roles, roles_of

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, eq=False)
class Unknowns:
    """Nodal values, each of shape (n,).

    Parameters
    ----------
    d : array
        Δn, cm⁻³ (on layers it follows from the potentials).
    f : array
        Majority potential relative to its reference terminal, V.
    s : array
        Layer potential relative to the layer's terminal, V; meaningful on layers only.
    """

    d: NDArray[Any]
    f: NDArray[Any]
    s: NDArray[Any]


@dataclass(frozen=True, eq=False)
class BipolarSystem(CarrierBalance):
    """The discrete equations of the bipolar form; residuals in carriers per second."""

    @cached_property
    def roles(self) -> Roles:
        """Densities and mobilities by role."""
        return roles_of(self.problem.equilibrium)

    @cached_property
    def conductors(self) -> Conductors:
        """Sheets, contacts, terminals."""
        return Conductors(self.problem)

    @cached_property
    def on_s(self) -> Any:
        """Linear operator of sheets and contacts on the layer potential, (n, n)."""
        return -(self._sheets[True] + self._contacts[True])

    @cached_property
    def on_f(self) -> Any:
        """Linear operator of sheets and contacts on the majority potential, (n, n)."""
        return -(self._sheets[False] + self._contacts[False])

    @cached_property
    def _sheets(self) -> dict[bool, Any]:
        """∫ ∇s u·∇s v / (q R_sh) over opposite-type layers (True), over layers of the base's type (False)."""
        sheets = self.conductors.sheets.values()
        return {side: self._sum([c for opposite, c in sheets if opposite == side]) for side in (True, False)}

    @cached_property
    def _contacts(self) -> dict[bool, Any]:
        """∫ u v / (q ρc) over contacts on opposite-type layers (True), over those that reach the base (False)."""
        metals = [m for m in self.conductors.metals if m.resistivity_ohm_cm2 > 0]
        scaled = [(m.on_layer, m.mass / m.resistivity_ohm_cm2) for m in metals]
        return {side: self._sum([c for on_layer, c in scaled if on_layer == side]) for side in (True, False)}

    def _sum(self, parts: list[Any]) -> Any:
        from scipy.sparse import csr_matrix

        return (sum(parts, csr_matrix((self.space.size, self.space.size))) / ELEMENTARY_CHARGE_C).tocsr()

    def _conducted(self, potential: NDArray[Any], *, on_layer: bool) -> NDArray[Any]:
        """Sheets and contacts applied to a potential.

        A sheet acts on differences of the potential, which are exact; its rows then sum to zero to round-off of the
        current, not of potential over cell size, and the balance closes on the finest meshes.
        """
        sheet = self._sheets[on_layer]
        rows = np.repeat(np.arange(sheet.shape[0]), np.diff(sheet.indptr))
        lateral = sheet.data * (potential[sheet.indices] - potential[rows])
        along = np.bincount(rows, lateral, potential.size)
        return np.asarray(-along - self._contacts[on_layer] @ potential)

    @cached_property
    def shunt(self) -> Any:
        """∫ u v / (q r_shunt) over all shunted junctions, (n, n)."""
        return self._sum(list(self.conductors.shunts.values()))

    def completed(self, unknowns: Unknowns, voltages: Mapping[str, float]) -> tuple[Unknowns, NDArray[Any]]:
        """Unknowns with Δn on layers from the potentials, and dΔn/du there (0 elsewhere)."""
        layer = self.conductors.layer
        u = self.conductors.offsets(voltages)[layer] + unknowns.f[layer] - unknowns.s[layer]
        d, slope = unknowns.d.copy(), np.zeros_like(unknowns.d)
        d[layer], slope[layer] = self.roles.density(u)
        return Unknowns(d, unknowns.f, unknowns.s), slope

    def residuals(self, x: Unknowns, voltages: Mapping[str, float]) -> tuple[NDArray[Any], NDArray[Any]]:
        """(Fm, FM) at completed unknowns, each (n,), carriers per second."""
        bulk = self.space.bulk
        minority, majority = self.fluxes(x)
        net = bulk.load(None, self.rate(bulk.values(x.d))[0]) - self.load
        net = net + self.surface_load(x.d) + self.shunt @ self.across(x, voltages)
        from_metal_s, from_metal_f = self._metal_loads(voltages)
        Fm = bulk.load(minority) + net + self._conducted(self._on_layer(x.s), on_layer=True) + from_metal_s
        FM = bulk.load(majority) - net + self._conducted(x.f, on_layer=False) + from_metal_f
        return Fm, FM

    def fluxes(self, x: Unknowns) -> tuple[Any, Any]:
        """(jm, jM) at the quadrature points, each (dimension, n_cells, n_points), 1/(cm² s)."""
        bulk, roles = self.space.bulk, self.roles
        d, f_gradient = bulk.values(x.d), bulk.gradients(x.f)
        minority = roles.diffusion(d)[0] * bulk.gradients(x.d) - roles.mu_m * (roles.m0 + d) * f_gradient
        return minority, -roles.mu_M * (roles.M0 + d) * f_gradient

    def _on_layer(self, s: NDArray[Any]) -> NDArray[Any]:
        return np.where(self.conductors.layer, s, 0.0)

    def across(self, x: Unknowns, voltages: Mapping[str, float]) -> NDArray[Any]:
        """Junction voltage at layer nodes, V; 0 elsewhere."""
        return np.where(self.conductors.layer, self.conductors.offsets(voltages) + x.f - x.s, 0.0)

    def _metal_loads(self, voltages: Mapping[str, float]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """What contacts of terminals other than the reference add, (on s, on f)."""
        on_s, on_f = np.zeros(self.space.size), np.zeros(self.space.size)
        for metal in self.conductors.metals:
            lift = voltages[metal.terminal] - voltages[metal.reference]
            if metal.resistivity_ohm_cm2 > 0 and lift != 0:
                part = metal.load * lift / metal.resistivity_ohm_cm2 / ELEMENTARY_CHARGE_C
                on_s, on_f = (on_s + part, on_f) if metal.on_layer else (on_s, on_f + part)
        return on_s, on_f

    def blocks(self, x: Unknowns) -> tuple[Any, Any, Any, Any]:
        """dFm/dΔn, dFm/df, dFM/dΔn, dFM/df at fixed s, without sheets, contacts and shunts; sparse (n, n)."""
        bulk, roles = self.space.bulk, self.roles
        d, f_gradient = bulk.values(x.d), bulk.gradients(x.f)
        D, dD = roles.diffusion(d)
        slope = self.rate(d)[1]
        surface = self.surface_jacobian(x.d)
        Kmd = bulk.matrix(D, dD * bulk.gradients(x.d) - roles.mu_m * f_gradient, slope) + surface
        KMd = bulk.matrix(None, -roles.mu_M * f_gradient, -slope) - surface
        return Kmd, bulk.matrix(-roles.mu_m * (roles.m0 + d)), KMd, bulk.matrix(-roles.mu_M * (roles.M0 + d))
