"""Drift by a prescribed total current, or by a field in low injection; upwinding where cells are too coarse."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..constants import ELEMENTARY_CHARGE_C
from ..errors import Complaints
from ..units import MA
from .coefficients import diffusivity, electron_share_excess, minority_mobility_signed
from .spaces import positions_um

if TYPE_CHECKING:
    from ..cell.base import Equilibrium
    from .problem import Problem


@dataclass(frozen=True, eq=False)
class Drift:
    """The drift part of the flux at the quadrature points.

    Parameters
    ----------
    vector : (dimension, n_cells, n_points) array
        J/q in 1/(cm² s) if `is_current`, else μE in cm/s.
    is_current : bool
    base : Equilibrium
    upwind : (dimension, n_cells, n_points) array
        √(extra diffusivity) along the drift, cm/√s.
    peclet : float
        Largest cell Péclet number |b| h / (2 D order).
    """

    vector: Any
    is_current: bool
    base: Equilibrium
    upwind: Any
    peclet: float

    @property
    def needs_upwinding(self) -> bool:
        """Whether any cell Péclet number exceeds 1."""
        return self.peclet > 1

    def share(self, dn: Any) -> tuple[Any, Any]:
        """t(Δn) − t(0), or Δn where a field is given; and its derivative."""
        return electron_share_excess(dn, self.base) if self.is_current else (dn, np.ones_like(dn))

    def flux(self, dn: Any) -> Any:
        """(J/q) [t(Δn) − t(0)] or μ Δn E."""
        return self.vector * self.share(dn)[0]

    def slope(self, dn: Any) -> Any:
        """Derivative of `flux` by Δn: the drift velocity b (against which Γ counts positive)."""
        return self.vector * self.share(dn)[1]

    def upwind_flux(self, gradient: Any) -> Any:
        """Extra diffusion along the drift, b̂ (b̂·∇Δn) D_extra."""
        return self.upwind * np.einsum("dij,dij->ij", self.upwind, gradient)[None]


def make_drift(problem: Problem, field_V_per_cm: Any, current_mA_per_cm2: Any) -> Drift | None:
    """Drift from a field or a total current, each a vector, a mapping of volume names to vectors, or a function.

    Extra diffusion along the drift follows the critical rule D_extra = |b| h/2 (1 − 1/Pe) for Pe = |b| h/(2D) > 1 and
    none below, per half cell for quadratic elements. It changes the solution to first order in the cell size there.

    Parameters
    ----------
    problem : Problem
    field_V_per_cm, current_mA_per_cm2 : vector, mapping, function f(x_um, y_um, z_um), or None
        Vectors are (x, z) in 2-D and (x, y, z) in 3-D.

    Returns
    -------
    Drift or None

    Raises
    ------
    InputError
        Both given, a wrong number of components, or a current with sources inside.

    References
    ----------
    A. N. Brooks and T. J. R. Hughes, Comput. Methods Appl. Mech. Eng. 32, 199 (1982), critical approximation.
    """
    if field_V_per_cm is None and current_mA_per_cm2 is None:
        return None
    problems = Complaints("drift")
    if field_V_per_cm is not None and current_mA_per_cm2 is not None:
        problems.add("field_V_per_cm and current_mA_per_cm2", "one of them", "the total current, if it is known")
        problems.raise_if_any()
    is_current = current_mA_per_cm2 is not None
    name = "current_mA_per_cm2" if is_current else "field_V_per_cm"
    vector = _vector(problem, name, current_mA_per_cm2 if is_current else field_V_per_cm)
    if is_current:
        vector = vector * MA / ELEMENTARY_CHARGE_C
        _check_divergence(problem, vector)
    else:
        vector = vector * minority_mobility_signed(problem.equilibrium)
    upwind, peclet = _upwinding(problem, vector, is_current)
    return Drift(vector, is_current, problem.equilibrium, upwind, peclet)


def _vector(problem: Problem, name: str, value: Any) -> Any:
    """The vector at the quadrature points, shape (dimension, n_cells, n_points)."""
    x = problem.space.bulk.x_cm
    result = np.zeros_like(x)
    if isinstance(value, Mapping):
        for volume, part in value.items():
            if volume not in problem.mesh.volumes:
                problems = Complaints(name)
                problems.add(f"volume {volume!r}", f"one of {', '.join(problem.mesh.volumes)}")
                problems.raise_if_any()
            cells = problem.mesh.volumes[volume]
            result[:, cells] = _spread(name, part, x[:, cells])
        return result
    return _spread(name, value, x)


def _spread(name: str, value: Any, x: Any) -> Any:
    components = value(*positions_um(x)) if callable(value) else value
    try:
        parts = [np.broadcast_to(np.asarray(c, dtype=float), x.shape[1:]) for c in components]
        good = len(parts) == x.shape[0] and all(np.isfinite(p).all() for p in parts)
    except (TypeError, ValueError):
        good = False
    if not good:
        problems = Complaints(name)
        axes = "(x, z)" if x.shape[0] == 2 else "(x, y, z)"
        problems.add(f"{name} = {value!r}", f"finite components {axes}, or a function that returns them")
        problems.raise_if_any()
    return np.array(parts)


def _check_divergence(problem: Problem, vector: Any) -> None:
    """∫ J·∇v must vanish for every v that is zero on the boundary."""
    space = problem.space
    weak, size = space.bulk.load(flux=vector), space.bulk.load(flux=np.abs(vector))
    inner = np.setdiff1d(np.arange(space.size), space.facet_dofs(space.mesh.cells.boundary_facets()))
    if inner.size and np.abs(weak[inner]).max() > 1e-6 * max(np.abs(size).max(), 1e-300):
        problems = Complaints("current_mA_per_cm2")
        problems.add("a total current with sources inside the cell", "a divergence-free current density")
        problems.raise_if_any()


def _upwinding(problem: Problem, vector: Any, is_current: bool) -> tuple[Any, float]:
    space, eq = problem.space, problem.equilibrium
    velocity = vector * electron_share_excess(0.0, eq)[1] if is_current else vector
    speed = np.linalg.norm(velocity, axis=0)
    direction = velocity / np.where(speed > 0, speed, 1.0)
    corners = space.mesh.cells.p[:, space.mesh.cells.t]
    extent = _extent(direction, corners)
    D = diffusivity(0.0, eq)[0]
    half_step = extent / (2 * space.order)
    peclet = speed * half_step / D
    extra = np.where(peclet > 1, speed * half_step * (1 - 1 / np.maximum(peclet, 1e-300)), 0.0)
    return direction * np.sqrt(extra), float(peclet.max())


def _extent(direction: Any, corners: Any) -> Any:
    """Length of each cell along the drift, shape (n_cells, n_points)."""
    along = np.einsum("dcq,dkc->ckq", direction, corners)
    return np.asarray(np.ptp(along, axis=1))
