"""Finite-element spaces on a named mesh: elements, quadrature, positions in µm."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints, InputError, MeshError
from .bulk import Bulk, make_bulk
from .skin import Skin

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..cell.checks import Varying
    from ..meshing.mesh import Mesh


def lagrange_element(kind: str, order: int) -> Any:
    """scikit-fem's Lagrange element for cells of this kind, order 1 or 2 (full tensor products on quads, hexahedra)."""
    import skfem.element as e

    table = {
        ("triangle", 1): e.ElementTriP1, ("triangle", 2): e.ElementTriP2,
        ("quad", 1): e.ElementQuad1, ("quad", 2): e.ElementQuad2,
        ("tetra", 1): e.ElementTetP1, ("tetra", 2): e.ElementTetP2,
        ("hexahedron", 1): e.ElementHex1, ("hexahedron", 2): e.ElementHex2,
    }  # fmt: skip
    return table[kind, order]()


def cell_mapping(mesh: Mesh) -> Any:
    """scikit-fem's map from the reference cell, with an inverse that also works on strongly stretched cells.

    The inverse is iterated until it is at round-off of the coordinates; a bound on reference coordinates alone cannot
    be met in cells that are small compared with their distance from the origin.
    """
    from skfem.mapping import MappingIsoparametric

    if mesh.kind in ("triangle", "tetra"):
        return mesh.cells.mapping()

    class StretchedMapping(MappingIsoparametric):  # type: ignore[misc]
        """Jacobians are computed once per set of points, not once per shape function."""

        _known: tuple[Any, ...] = (None, None)

        def F(self, X: Any, tind: Any = None) -> Any:
            corners, n = _corners(self.mesh, tind), self.mesh.t.shape[0]
            return sum(corners[:, k, :, None] * self.elem.lbasis(X, k)[0] for k in range(n))

        def J(self, i: int, j: int, X: Any, tind: Any = None) -> Any:
            return self._jacobian(X, tind)[0][i, j]

        def invDF(self, X: Any, tind: Any = None) -> Any:
            return self._jacobian(X, tind)[1]

        def _jacobian(self, X: Any, tind: Any) -> tuple[Any, Any]:
            if self._known[0] is not X or self._known[1] is not tind:
                corners, n = _corners(self.mesh, tind), self.mesh.t.shape[0]
                slopes = [np.asarray(self.elem.lbasis(X, k)[1]) for k in range(n)]
                slopes = [s if X.ndim == 3 else s[:, None] for s in slopes]
                J: Any = sum(corners[:, None, k, :, None] * slopes[k] for k in range(n))
                self._known = (X, tind, J, _inverses(J))
            return self._known[2:]

        def invF(self, x: Any, tind: Any = None, newton_max_iters: int = 50, newton_tol: float = 1e-12) -> Any:
            X = np.full(x.shape, 0.5)
            for _ in range(newton_max_iters):
                step = np.einsum("ijkl,jkl->ikl", self.invDF(X, tind), x - self.F(X, tind))
                X = np.clip(X + step, 0.0, 1.0)
                if np.abs(step).max(initial=0.0) < newton_tol:
                    break
            if np.abs(x - self.F(X, tind)).max(initial=0.0) > 1e-12 * np.abs(x).max(initial=1e-300):
                raise MeshError("A point could not be located in its cell; is a cell twisted?")
            return X

    return StretchedMapping(mesh.cells, mesh.cells.elem(), mesh.cells.bndelem)


def _inverses(J: Any) -> Any:
    """Inverses of matrices (d, d, …) by cofactors: for many small ones faster than by elimination."""
    if len(J) == 2:
        return np.array([[J[1, 1], -J[0, 1]], [-J[1, 0], J[0, 0]]]) / (J[0, 0] * J[1, 1] - J[0, 1] * J[1, 0])
    rows = np.stack([np.cross(J[:, i - 2], J[:, i - 1], axis=0) for i in range(3)])
    return rows / (J[:, 0] * rows[0]).sum(axis=0)


def _corners(mesh: Any, cells: Any) -> Any:
    """Corners of all or of some cells, (dimension, n_corners, n_cells)."""
    return mesh.p[:, mesh.t if cells is None else mesh.t[:, cells]]


class OnDemand(Mapping[str, Any]):
    """A mapping whose values are computed when first asked for.

    Parameters
    ----------
    names : sequence of str
    compute : function
    """

    def __init__(self, names: Sequence[str], compute: Callable[[str], Any]) -> None:
        self._names, self._compute, self._known = list(names), compute, dict[str, Any]()

    def __getitem__(self, name: str) -> Any:
        if name not in self._known:
            if name not in self._names:
                raise KeyError(name)
            self._known[name] = self._compute(name)
        return self._known[name]

    def __iter__(self) -> Iterator[str]:
        return iter(self._names)

    def __len__(self) -> int:
        return len(self._names)


@dataclass(frozen=True, eq=False)
class Space:
    """Continuous Lagrange elements of `order` on `mesh`.

    Parameters
    ----------
    mesh : Mesh
    order : {1, 2}
    """

    mesh: Mesh
    order: int

    @property
    def quadrature_order(self) -> int:
        """Degree integrated exactly; coefficients vary, so above twice the element's order."""
        return 2 * self.order + 2

    @cached_property
    def element(self) -> Any:
        """The scikit-fem element."""
        return lagrange_element(self.mesh.kind, self.order)

    @cached_property
    def numbering(self) -> Any:
        """scikit-fem basis that numbers the unknowns (one quadrature point, so that it stays small)."""
        from skfem import Basis

        return Basis(self.mesh.cells, self.element, mapping=cell_mapping(self.mesh), intorder=1)

    @cached_property
    def bulk(self) -> Bulk:
        """Integrals over all cells."""
        return make_bulk(self.numbering, self.quadrature_order)

    @property
    def points_cm(self) -> Any:
        """Positions of the unknowns, shape (dimension, n)."""
        return self.numbering.doflocs

    def facets(self, facets: NDArray[np.int64], quadrature_order: int | None = None) -> Any:
        """scikit-fem basis over facets; those inside are seen from one of their cells, once."""
        from skfem import FacetBasis

        order = quadrature_order or self.quadrature_order
        return FacetBasis(
            self.mesh.cells,
            self.element,
            mapping=self.numbering.mapping,
            facets=facets,
            intorder=order,
            dofs=self.numbering.dofs,
        )

    @cached_property
    def surfaces(self) -> Mapping[str, Any]:
        """scikit-fem facet basis of every named surface, made when first used."""
        names = [name for name, facets in self.mesh.surfaces.items() if facets.size]
        return OnDemand(names, lambda name: self.facets(self.mesh.surfaces[name]))

    @cached_property
    def skins(self) -> Mapping[str, Skin]:
        """Integrals over every named surface."""
        return OnDemand(list(self.surfaces), lambda name: Skin.of(self.surfaces[name]))

    @property
    def size(self) -> int:
        """Number of unknowns."""
        return int(self.numbering.N)

    def facet_dofs(self, facets: NDArray[np.int64]) -> NDArray[np.int64]:
        """Unknowns on facets."""
        return np.asarray(self.numbering.get_dofs(facets).all(), dtype=np.int64)


def positions_um(x_cm: Any) -> tuple[Any, Any, Any]:
    """(x, y, z) in µm from coordinates in cm, shape (dimension, ...); in 2-D y is zero."""
    x = np.asarray(x_cm) * 1e4
    return (x[0], np.zeros_like(x[0]), x[1]) if x.shape[0] == 2 else (x[0], x[1], x[2])


def evaluate(name: str, value: Varying, x_cm: Any, *, zero: bool = False, inf: bool = True) -> Any:
    """A number, or a function of position at quadrature points; refuses values that are not allowed.

    Parameters
    ----------
    name : str
        The input's name, for the message.
    value : float or callable
    x_cm : (dimension, ...) array
    zero : bool
        Whether 0 is allowed.
    inf : bool
        Whether infinity is.

    Returns
    -------
    float or array of shape x_cm.shape[1:]
    """
    if not callable(value):
        return float(value)
    shape = np.asarray(x_cm).shape[1:]
    try:
        result = np.broadcast_to(np.asarray(value(*positions_um(x_cm)), dtype=float), shape)
    except Exception as error:
        problems = Complaints(name)
        problems.add(f"a function that failed ({error})", "f(x_um, y_um, z_um) on arrays, one value per point")
        raise InputError(problems.what, problems.items) from error
    bad = ~((result > 0) | ((result == 0) & zero)) | (np.isinf(result) & (not inf))
    if bad.any():
        problems = Complaints(name)
        place = ", ".join(f"{v[bad][0]:.4g}" for v in positions_um(x_cm))
        problems.add(
            f"the function gives {result[bad][0]:g} at ({place}) µm",
            "positive values" if inf else "finite values of at least 0",
        )
        problems.raise_if_any()
    return result
