"""Plan-view triangles through depths to tets, and grids to quads and hexahedra; in cm."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import MeshError
from ..units import UM

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .plan_view import PlanMesh, QuadPlan

PRISM_TETS = ((0, 1, 2, 5), (0, 1, 5, 4), (0, 4, 5, 3))
"""Tets of a prism with lower corners 0, 1, 2 in ascending rank and upper corners 3, 4, 5 above them."""


def extrude(plan: PlanMesh, depths_um: NDArray[np.float64], rank: NDArray[np.int64] | None = None) -> Any:
    """Tets between horizontal copies of a plan-view mesh.

    Each triangle gives one prism per layer, cut into three tets. On a prism's side face the diagonal starts at the
    lower copy of the corner with the lower rank, the same seen from both prisms that share the face (Dompierre et al.,
    "How to subdivide pyramids, prisms and hexahedra into tetrahedra", 8th International Meshing Roundtable, 1999).

    Parameters
    ----------
    plan : PlanMesh
        Triangles, in µm.
    depths_um : (n_levels,) float array
        Ascending heights z of the levels, in µm.
    rank : (n_points,) array, optional
        Order of the plan's points; the point number by default. For matching diagonals on opposite periodic sides,
        points that are images of each other get equal rank (see `periodic_rank`); corners of one triangle must differ.

    Returns
    -------
    skfem.MeshTet
        In cm, all volumes positive. Point i of level k is number k·n_points + i; the three tets of triangle j in layer
        k are numbers 3 (k·n_triangles + j) + 0, 1, 2.

    Raises
    ------
    MeshError
        For fewer than two or not ascending depths, or equal ranks within a triangle.
    """
    from skfem import MeshTet

    depths_um = _ascending("depths_um", depths_um)
    n_points = plan.points_um.shape[1]
    order = np.arange(n_points) if rank is None else np.asarray(rank)
    corners = np.take_along_axis(plan.triangles, np.argsort(order[plan.triangles], axis=0, kind="stable"), axis=0)
    if (np.diff(order[corners], axis=0) <= 0).any():
        raise MeshError(
            "two corners of a plan-view triangle have the same rank; allowed are ranks that differ within every "
            "triangle. Try more triangles across the period."
        )
    prism = np.vstack([corners, corners + n_points])  # (6, n_triangles) between levels 0 and 1
    tets = np.stack([prism[list(corner)] for corner in PRISM_TETS], axis=2)  # (4, n_triangles, 3)
    _orient(tets, plan)
    layers = tets[:, None] + n_points * np.arange(depths_um.size - 1)[:, None, None]
    points = np.vstack([np.tile(plan.points_um, depths_um.size), np.repeat(depths_um, n_points)])
    return MeshTet(points * UM, layers.reshape(4, -1))


def extrude_quads(plan: QuadPlan, depths_um: NDArray[np.float64]) -> Any:
    """Hexahedra between horizontal copies of a plan-view mesh of quads.

    Parameters
    ----------
    plan : QuadPlan
        In µm.
    depths_um : (n_levels,) float array
        Ascending heights z of the levels, in µm.

    Returns
    -------
    skfem.MeshHex
        In cm. Point i of level k is number k·n_points + i.

    Raises
    ------
    MeshError
        For fewer than two or not ascending depths.
    """
    from skfem import MeshHex

    depths_um = _ascending("depths_um", depths_um)
    n_points = plan.points_um.shape[1]
    around = {(0, 0): 0, (1, 0): 1, (1, 1): 2, (0, 1): 3}  # corners of a quad by reference coordinates
    cells = np.stack(
        [plan.quads[around[int(x), int(y)]] + n_points * int(z) for x, y, z in MeshHex.elem.refdom.p.T]
    )  # between levels 0 and 1
    layers = cells[:, None] + n_points * np.arange(depths_um.size - 1)[:, None]
    points = np.vstack([np.tile(plan.points_um, depths_um.size), np.repeat(depths_um, n_points)])
    return MeshHex(points * UM, layers.reshape(8, -1))


def _orient(tets: NDArray[np.int64], plan: PlanMesh) -> None:
    """Make the volumes positive in place: clockwise sorted corners give mirrored tets."""
    a, b, c = (plan.points_um[:, tets[i, :, 0]] for i in range(3))
    mirrored = (b[0] - a[0]) * (c[1] - a[1]) < (b[1] - a[1]) * (c[0] - a[0])
    tets[2:, mirrored] = tets[:1:-1, mirrored]


def periodic_rank(plan: PlanMesh, periodic_x: bool, periodic_y: bool) -> NDArray[np.int64]:
    """Ranks in which points on opposite periodic sides are equal.

    Parameters
    ----------
    plan : PlanMesh
        Its opposite sides carry the same points.
    periodic_x, periodic_y : bool
        Whether x_min and x_max (y_min and y_max) are the same line.

    Returns
    -------
    (n_points,) int array
        Number of the image with the smallest coordinates, in lexicographic order.
    """
    place = plan.points_um.copy()
    for axis in np.flatnonzero([periodic_x, periodic_y]):
        place[axis, place[axis] == place[axis].max()] = place[axis].min()
    return np.asarray(np.unique(place, axis=1, return_inverse=True)[1]).reshape(-1)


def tensor_mesh(*axes_um: NDArray[np.float64]) -> Any:
    """Axis-parallel quads or hexahedra on the product of two or three grids.

    Parameters
    ----------
    *axes_um : (n,) float arrays
        Ascending x, z (quads) or x, y, z (hexahedra), in µm.

    Returns
    -------
    skfem.MeshQuad or skfem.MeshHex
        In cm.

    Raises
    ------
    MeshError
        For another number of axes, or an axis that does not ascend.
    """
    from skfem import MeshHex, MeshQuad

    if len(axes_um) not in (2, 3):
        raise MeshError(f"{len(axes_um)} axes; allowed are two (x, z) or three (x, y, z)")
    kind = MeshQuad if len(axes_um) == 2 else MeshHex
    names = "xz" if len(axes_um) == 2 else "xyz"
    axes = [_ascending(f"{n}_um", axis) * UM for n, axis in zip(names, axes_um, strict=True)]
    return kind.init_tensor(*axes)


def _ascending(name: str, values: NDArray[np.float64]) -> NDArray[np.float64]:
    values = np.asarray(values, dtype=float)
    if values.ndim != 1 or values.size < 2 or not np.isfinite(values).all() or not (np.diff(values) > 0).all():
        raise MeshError(f"{name} = {values}; allowed are at least two finite numbers in ascending order")
    return values
