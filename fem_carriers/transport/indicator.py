"""Which cells matter for a number: error of the flux times error of the adjoint's gradient, cell by cell.

The error of a number is ∫ δj·∇δψ with δj the error of the flux and δψ that of the adjoint (R. Becker and R. Rannacher,
Acta Numerica 10, 1 (2001)). Both are estimated by the difference to the continuous, piecewise linear field closest to
them (after O. C. Zienkiewicz and J. Z. Zhu, Int. J. Numer. Meth. Eng. 24, 337 (1987)).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from .adjoint import ExcessResponse
from .bipolar_adjoint import BipolarResponse
from .bipolar_state import BipolarState
from .bulk import Bulk, make_bulk
from .photon_field import beams_of, photons_at
from .spaces import Space
from .steady import ExcessState

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .state import SolvedState


class Smoother:
    """Continuous, piecewise linear fields on the mesh of a space.

    Parameters
    ----------
    space : Space
    """

    def __init__(self, space: Space) -> None:
        self.space = space

    @cached_property
    def _bulk(self) -> Bulk:
        """Linear elements at the quadrature points of the space."""
        return make_bulk(Space(self.space.mesh, 1).numbering, self.space.quadrature_order)

    @cached_property
    def _mass(self) -> Any:
        return self._bulk.matrix(slope=np.ones(self._bulk.dx.shape))

    def gap(self, field: Any) -> Any:
        """|field − closest continuous field| at the quadrature points, field (dimension, n_cells, n_points)."""
        return np.sqrt(sum((part - self._bulk.values(self._closest(part))) ** 2 for part in field))

    def _closest(self, values: Any) -> NDArray[np.float64]:
        """Least squares by conjugate gradients; the mass matrix scaled by its diagonal is well conditioned."""
        from scipy.sparse import diags
        from scipy.sparse.linalg import cg

        right = self._bulk.load(rate=values)
        return np.asarray(cg(self._mass, right, rtol=1e-6, maxiter=100, M=diags(1 / self._mass.diagonal()))[0])


def cell_errors(state: SolvedState) -> dict[str, NDArray[np.float64]]:
    """Share of every cell in the error of every terminal's current, carriers per second, each (n_cells,).

    Without a terminal the energy of the error under the name "".

    Parameters
    ----------
    state : ExcessState or BipolarState

    Returns
    -------
    dict of str to (n_cells,) array
    """
    smoother = Smoother(state.system.space)
    if isinstance(state, BipolarState):
        return _bipolar_errors(state, smoother)
    assert isinstance(state, ExcessState)
    return _excess_errors(state, smoother)


def _photons(state: SolvedState) -> Any:
    """Φ at the quadrature points; carrier and photon flux together are smooth where light ends within a cell."""
    problem = state.system.problem
    return photons_at(problem, beams_of(problem), np.asarray(problem.space.bulk.x_cm))


def _excess_errors(state: ExcessState, smoother: Smoother) -> dict[str, NDArray[np.float64]]:
    bulk = state.system.space.bulk
    flux = smoother.gap(state.minority_flux() - _photons(state))
    response = ExcessResponse(state)
    fields = {name: response.field((kind, name)) for kind, name in response.weights if kind == "terminal"}
    gaps = {name: smoother.gap(bulk.gradients(field)) for name, field in fields.items()} or {"": flux}
    return {name: (flux * gap * bulk.dx).sum(axis=1) for name, gap in gaps.items()}


def _bipolar_errors(state: BipolarState, smoother: Smoother) -> dict[str, NDArray[np.float64]]:
    bulk, n = state.system.space.bulk, state.system.space.size
    (minority, majority), photons = state.system.fluxes(state.x), _photons(state)
    fluxes = [smoother.gap(minority - photons), smoother.gap(majority + photons)]
    response = BipolarResponse(state)
    found = {}
    for key in [key for key in response.functionals if key[0] == "terminal"]:
        psi = response.multipliers(response.functionals[key])
        gaps = [smoother.gap(bulk.gradients(part)) for part in (psi[:n], psi[n:])]
        found[key[1]] = sum((f * g * bulk.dx).sum(axis=1) for f, g in zip(fluxes, gaps, strict=True))
    return found or {"": sum((f**2 * bulk.dx).sum(axis=1) for f in fluxes)}


def combined(errors: Sequence[Mapping[str, NDArray[np.float64]]]) -> NDArray[np.float64]:
    """One indicator (n_cells,) from those of several states and terminals, which all count alike."""
    parts = [part for by_terminal in errors for part in by_terminal.values()]
    return np.asarray(sum(part / max(float(part.sum()), 1e-300) for part in parts) / len(parts))
