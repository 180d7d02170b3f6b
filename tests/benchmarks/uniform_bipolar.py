"""A two-dimensional current-voltage curve the way a careful person writes it first.

Linear triangles of one size, scikit-fem's stock forms, Newton's method in (Δn, majority potential f, layer potential
s), SciPy's direct solver. With a p-type base, per carrier,

    ∫ [(Dn (1 + n/p) ∇Δn − µn n ∇f)·∇v + (R − G) v] + ∮ U v − ∫ ∇s·∇v/(q R_sh) − ∮ s v/(q ρc) = 0
    ∫ [−µp p ∇f·∇v − (R − G) v] − ∮ U v − ∮ f v/(q ρc) = 0,        np = ni² exp((V + f − s)/VT) on the layer
"""

from __future__ import annotations

import dataclasses
import time
from functools import cached_property
from typing import Any

import numpy as np

import fem_carriers as fc
from fem_carriers.constants import ELEMENTARY_CHARGE_C as Q
from fem_carriers.transport.roles import roles_of

FLUX, ABSORPTION, LIFETIME_US, HEIGHT_UM = 2.5e17, 200.0, 300.0, 160.0


@dataclasses.dataclass(frozen=True)
class Piece:
    """A stretch of a face: from x to x in µm, J0 in fA/cm²; an n-layer in Ω; a contact in mΩ cm²."""

    side: str
    low: float
    high: float
    J0: float
    sheet: float | None = None
    rho: float | None = None


@dataclasses.dataclass(frozen=True)
class Section:
    """A two-dimensional cell.

    Parameters
    ----------
    name : str
    cell : UnitCell
    half_pitch : float
        µm.
    pieces : tuple of Piece
    shaded : float
        Width from x = 0 without light, µm.
    step : float
        Largest step that fits all outlines, µm.
    """

    name: str
    cell: fc.UnitCell
    half_pitch: float
    pieces: tuple[Piece, ...]
    shaded: float
    step: float


def _base_and_light() -> dict[str, Any]:
    base = fc.Base(
        "p", doping_per_cm3=1e16, thickness_um=HEIGHT_UM, lifetime_us=LIFETIME_US, auger=None, radiative_cm3_per_s=0.0
    )
    return {"base": base, "light": fc.Light.monochromatic(flux_per_cm2_s=FLUX, absorption_per_cm=ABSORPTION)}


def fingers_on_layer() -> Section:
    """Fingers of 30 µm on a full n-layer, rear lines of 60 µm, pitch 1300 µm."""
    finger = fc.Strip("finger", 30, J0_fA_per_cm2=600, contact=fc.Contact("front", 2))
    line = fc.Strip("line", 60, J0_fA_per_cm2=500, contact=fc.Contact("rear", 1))
    front = fc.Face(fc.Surface(J0_fA_per_cm2=30, layer=fc.DopedLayer("n", 120)), [finger])
    rear = fc.Face(fc.Surface(J0_fA_per_cm2=8), [line])
    cell = fc.UnitCell(pitch_um=1300, front=front, rear=rear, **_base_and_light())
    pieces = (
        Piece("front", 0, 15, 600, 120, 2), Piece("front", 15, 650, 30, 120), Piece("rear", 0, 30, 500, None, 1),
        Piece("rear", 30, 650, 8),
    )  # fmt: skip
    return Section("fingers on a full layer", cell, 650, pieces, 15, 15)


def local_junctions() -> Section:
    """The same with the n-layer under the fingers alone: carriers travel sideways to them."""
    finger = fc.Strip("finger", 30, J0_fA_per_cm2=600, layer=fc.DopedLayer("n", 120), contact=fc.Contact("front", 2))
    line = fc.Strip("line", 60, J0_fA_per_cm2=500, contact=fc.Contact("rear", 1))
    front, rear = fc.Face(fc.Surface(J0_fA_per_cm2=8), [finger]), fc.Face(fc.Surface(J0_fA_per_cm2=8), [line])
    cell = fc.UnitCell(pitch_um=1300, front=front, rear=rear, **_base_and_light())
    pieces = (
        Piece("front", 0, 15, 600, 120, 2), Piece("front", 15, 650, 8), Piece("rear", 0, 30, 500, None, 1),
        Piece("rear", 30, 650, 8),
    )  # fmt: skip
    return Section("junctions under the fingers alone", cell, 650, pieces, 15, 15)


def interdigitated() -> Section:
    """Rear n-layer strips over half of a pitch of 800 µm, metal of 60 µm on them and between them on the base."""
    emitter = fc.Strip("emitter", 400, J0_fA_per_cm2=20, layer=fc.DopedLayer("n", 80))
    on_emitter = fc.Strip("emitter_metal", 60, J0_fA_per_cm2=400, contact=fc.Contact("minus", 1))
    on_base = fc.Strip("base_metal", 60, center_um=400, J0_fA_per_cm2=300, contact=fc.Contact("plus", 1))
    rear = fc.Face(fc.Surface(J0_fA_per_cm2=8), [emitter, on_emitter, on_base])
    front = fc.Face(fc.Surface(J0_fA_per_cm2=5))
    cell = fc.UnitCell(pitch_um=800, front=front, rear=rear, **_base_and_light())
    pieces = (
        Piece("front", 0, 400, 5), Piece("rear", 0, 30, 400, 80, 1), Piece("rear", 30, 200, 20, 80),
        Piece("rear", 200, 370, 8), Piece("rear", 370, 400, 300, None, 1),
    )  # fmt: skip
    return Section("interdigitated rear", cell, 400, pieces, 0, 10)


@dataclasses.dataclass
class Uniform:
    """The discrete equations on triangles whose legs are the section's step divided by a whole number."""

    section: Section
    division: int

    def __post_init__(self) -> None:
        import skfem

        section = self.section
        self.role = roles_of(section.cell.base.equilibrium())
        step = section.step / self.division
        x = np.linspace(0, section.half_pitch, round(section.half_pitch / step) + 1) * 1e-4
        z = np.linspace(0, HEIGHT_UM, round(HEIGHT_UM / step) + 1) * 1e-4
        mesh, element = skfem.MeshTri.init_tensor(x, z), skfem.ElementTriP1()
        self.bulk = skfem.Basis(mesh, element, intorder=4)
        outside = mesh.boundary_facets()
        middle = mesh.p[:, mesh.facets[:, outside]].mean(axis=1) * 1e4
        self.pieces = []
        for piece in section.pieces:
            height = HEIGHT_UM if piece.side == "front" else 0.0
            on = (abs(middle[1] - height) < 1e-6) & (middle[0] > piece.low) & (middle[0] < piece.high)
            self.pieces.append((piece, skfem.FacetBasis(mesh, element, facets=outside[on], intorder=4)))
        covered = [basis.get_dofs(basis.find).all() for piece, basis in self.pieces if piece.sheet is not None]
        self.layer, self.size = np.unique(np.concatenate(covered)), self.bulk.N

    @cached_property
    def linear(self) -> tuple[Any, Any, Any, Any]:
        """Sheets and metal on s, metal on f, conductance per area of the latter, ∫ G v."""
        import skfem
        from scipy.sparse import csr_matrix
        from skfem.helpers import grad

        mass = skfem.BilinearForm(lambda u, v, w: u * v)
        along = skfem.BilinearForm(lambda u, v, w: grad(u)[0] * grad(v)[0])

        @skfem.LinearForm
        def light(v: Any, w: Any) -> Any:
            lit = w.x[0].mean(axis=-1, keepdims=True) > self.section.shaded * 1e-4
            return lit * FLUX * ABSORPTION * np.exp(-ABSORPTION * (HEIGHT_UM * 1e-4 - w.x[1])) * v

        on_s = on_f = csr_matrix((self.size, self.size))
        for piece, basis in self.pieces:
            if piece.sheet is not None:
                on_s = on_s - along.assemble(basis) / (piece.sheet * Q)
            if piece.rho is not None:
                metal = mass.assemble(basis) / (piece.rho * 1e-3 * Q)
                on_s, on_f = (on_s, on_f - metal) if piece.sheet is None else (on_s - metal, on_f)
        return on_s, on_f, -np.asarray(on_f.sum(axis=1)).ravel(), light.assemble(self.bulk)

    def recombination(self, d: Any) -> tuple[Any, Any]:
        """∫ R v + ∮ U v and its matrix."""
        import skfem

        mass = skfem.BilinearForm(lambda u, v, w: w.c * u * v)
        load = skfem.LinearForm(lambda v, w: w.c * v)
        dn, r = self.bulk.interpolate(d), self.role
        tau = LIFETIME_US * 1e-6
        total, slope = load.assemble(self.bulk, c=dn / tau), mass.assemble(self.bulk, c=0 * dn + 1 / tau)
        for piece, basis in self.pieces:
            dn, scale = basis.interpolate(d), piece.J0 * 1e-15 / (Q * r.ni**2)
            total = total + load.assemble(basis, c=scale * dn * (r.m0 + r.M0 + dn))
            slope = slope + mass.assemble(basis, c=scale * (r.m0 + r.M0 + 2 * dn))
        return total, slope

    def equations(self, y: Any, V: float) -> tuple[Any, Any]:
        """Residual and Jacobian in the unknowns (Δn, on the layer s; f)."""
        import scipy.sparse as sp
        import skfem
        from skfem.helpers import dot, grad

        n, r = self.size, self.role
        first, f = y[:n], y[n:]
        d, dslope = first.copy(), np.ones(n)
        d[self.layer], dslope[self.layer] = r.density(V + f[self.layer] - first[self.layer])
        s = np.zeros(n)
        s[self.layer] = first[self.layer]
        dq, fq = self.bulk.interpolate(d), self.bulk.interpolate(f)
        D, dD = r.diffusion(np.asarray(dq))
        m, M = r.m0 + dq, r.M0 + dq
        carry = skfem.BilinearForm(lambda u, v, w: w.D * dot(grad(u), grad(v)) + u * dot(w.b, grad(v)))
        stiff = skfem.BilinearForm(lambda u, v, w: w.D * dot(grad(u), grad(v)))
        flow = skfem.LinearForm(lambda v, w: dot(w.j, grad(v)))
        R, dR = self.recombination(d)
        on_s, on_f, _, G = self.linear
        jm, jM = D * dq.grad - r.mu_m * m * fq.grad, -r.mu_M * M * fq.grad
        F = np.concatenate([
            flow.assemble(self.bulk, j=jm) + R - G + on_s @ s, flow.assemble(self.bulk, j=jM) - R + G + on_f @ f
        ])  # fmt: skip
        Kmd = carry.assemble(self.bulk, D=D, b=dD * dq.grad - r.mu_m * fq.grad) + dR
        KMd = carry.assemble(self.bulk, D=0 * D, b=-r.mu_M * fq.grad) - dR
        Kmf, KMf = (stiff.assemble(self.bulk, D=c) for c in (-r.mu_m * m, -r.mu_M * M))
        on_layer = np.zeros(n)
        on_layer[self.layer] = 1.0
        by_f, by_first = sp.diags(dslope * on_layer), sp.diags(np.where(on_layer > 0, -dslope, 1.0))
        J = sp.bmat([
            [Kmd @ by_first + on_s @ sp.diags(on_layer), Kmf + Kmd @ by_f], [KMd @ by_first, KMf + on_f + KMd @ by_f]
        ])  # fmt: skip
        return F, J.tocsc()

    def solve(self, y: Any, V: float) -> tuple[Any, float]:
        """Newton's method at a voltage; unknowns and current in mA/cm²."""
        import scipy.sparse as sp
        from scipy.sparse.linalg import splu

        for _ in range(40):
            F, J = self.equations(y, V)
            rows = sp.diags(1 / abs(J).max(axis=1).toarray().ravel())
            columns = 1 / abs(rows @ J).max(axis=0).toarray().ravel()
            step = -columns * splu((rows @ J @ sp.diags(columns)).tocsc()).solve(rows @ F)
            potentials = np.concatenate([step[self.layer], step[self.size :]])
            y = y + step * min(1.0, 10 * self.role.VT / np.abs(potentials).max())
            if np.abs(potentials).max() < 1e-7:
                break
        else:
            raise RuntimeError(f"not converged at {V} V")
        area = self.section.half_pitch * 1e-4
        return y, 1e3 * Q * float(self.linear[2] @ y[self.size :]) / area


def curve(section: Section, division: int) -> tuple[int, dict[str, float], float, float]:
    """Unknowns, headline numbers, processor seconds, wall seconds."""
    from scipy.optimize import brentq, minimize_scalar

    wall, busy = time.perf_counter(), time.process_time()
    model = Uniform(section, division)
    known: dict[float, tuple[Any, float]] = {}
    d = model.role.density(0.6)[0]
    start = np.concatenate([np.full(model.size, d), np.zeros(model.size)])
    start[model.layer] = 0.0

    def current(V: float) -> float:
        if V not in known:
            near = min(known, key=lambda other: abs(other - V)) if known else None
            known[V] = model.solve(known[near][0] if near is not None else start, V)
        return known[V][1]

    top = 0.6
    while current(top) > 0:
        top += 0.03
    voc = brentq(current, top - 0.03 if top > 0.6 else 0.4, top, xtol=1e-6)
    for share in (0.94, 0.85, 0.7, 0.4, 0.0):
        current(share * voc)
    best = minimize_scalar(lambda V: -V * current(V), bounds=(0.7 * voc, 0.95 * voc), options={"xatol": 3e-4})
    jsc, power = current(0.0), -float(best.fun)
    values = {"jsc_mA_per_cm2": jsc, "voc_V": voc, "fill_factor_percent": 100 * power / (jsc * voc)}
    values["maximum_power_mW_per_cm2"] = power
    return 2 * model.size, values, time.process_time() - busy, time.perf_counter() - wall
