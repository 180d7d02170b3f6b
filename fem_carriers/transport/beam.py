"""What a beam of any absorption contributes to given channels, without assembling its generation.

∫ G φ = ∫ Φ·∇φ − ∮ Φ·ν φ is linear in the net photon flux Φ(d) against depth: the fields φ are gathered once into
weights over the depths of the quadrature points, and every wavelength is then one product of them with its flux. The
sums are those of `generation`, so the result is that of the assembled load to round-off.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import MeshError
from .generation import absorbing_layers, crossing, facing_facets, inside, inside_mask, lit_region

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

    from ..cell.light import Source
    from .generation import LitPlane
    from .problem import Problem

SAME_DEPTH = 4e-15
"""Depths that differ by less than this share of the deepest one are one."""
CHUNK = 2_000_000
"""Depths times wavelengths that are held at a time."""


@dataclass(frozen=True, eq=False)
class BeamWeights:
    """Weights of a beam's net flux against depth.

    Parameters
    ----------
    depth_cm : (m,) array
    weights : (k, m) array
        ∫ G φ of each field per net flux at these depths; the last row is for φ = 1.
    entering : (m,) array
        Entering photons per second per net flux at these depths, on this mesh.
    lit_cm2, region_cm2, deepest_cm : float
        Area that lets light in, area that light falls on, and the largest depth.
    layers : list of (float, (k,) array)
        Depth of a layer that absorbs, and what is lost in it per photon flux absorbed there.
    """

    depth_cm: NDArray[np.float64]
    weights: NDArray[np.float64]
    entering: NDArray[np.float64]
    lit_cm2: float
    region_cm2: float
    deepest_cm: float
    layers: list[tuple[float, NDArray[np.float64]]]

    def responses(self, net: Callable[[Any], Any]) -> tuple[Any, Any, Any]:
        """Rates per second of several beams.

        Parameters
        ----------
        net : function
            Depths (m, 1) in cm to net fluxes (m, n_beams), 1/(cm² s), in the direction of entry.

        Returns
        -------
        rates : (k − 1, n_beams) array
            ∫ G φ of every field.
        absorbed, lost : (n_beams,) arrays
            Photons absorbed, and of these lost in layers.
        """
        sums: Any = 0.0
        rows = max(1, CHUNK // 1000)
        for first in range(0, self.depth_cm.size, rows):
            part = slice(first, first + rows)
            flux = net(self.depth_cm[part, None])
            sums = sums + np.concatenate([self.weights[:, part] @ flux, self.entering[None, part] @ flux])
        gathered, entering = sums[:-1], sums[-1]
        surface = net(np.zeros((1, 1)))[0]
        scale = np.where(entering > 0, self.lit_cm2 * surface / np.where(entering > 0, entering, 1.0), 0.0)
        lost: Any = np.zeros_like(gathered)
        for depth, weights in self.layers:
            lost = lost + np.outer(weights, surface - net(np.array([[depth]]))[0])
        return (gathered - lost)[:-1] * scale, gathered[-1] * scale, lost[-1] * scale


def beam_weights(problem: Problem, source: Source, fields: Sequence[NDArray[np.float64]]) -> BeamWeights:
    """Gather fields into weights over depth for light that enters as `source` does.

    Parameters
    ----------
    problem : Problem
    source : Source
        Its plane, mask and shading count; its strength and absorption do not.
    fields : sequence of (n,) arrays

    Returns
    -------
    BeamWeights

    Raises
    ------
    MeshError
        Light falls between the points of the mesh.
    """
    plane, space = problem.lit_planes[source.enters], problem.space
    region = lit_region(source, plane)
    everything = [*fields, np.ones(space.size)]
    depth, in_bulk = _bulk_weights(problem, plane, region, fields)
    skin_depth, on_skin, entering = _skin_weights(problem, plane, region, everything)
    weights = np.concatenate([np.vstack([in_bulk, np.zeros(depth.size)]), on_skin], axis=1)
    if region.area > 0 and not entering.any():
        raise MeshError("Light falls between the points of the mesh. Try a finer mesh.")
    depth, (weights, entering) = _grouped(
        np.concatenate([depth, skin_depth]), [weights, np.concatenate([np.zeros(depth.size), entering])]
    )
    layers = [(d, np.array([f @ load for f in everything])) for d, load in absorbing_layers(problem, plane, region)]
    whole = problem.cell is None and not source.mask
    lit, fallen = region.area * 1e-8, inside_mask(source, plane, plane.total).area * 1e-8
    fallen = max(problem.cell_area_cm2, lit) if whole else fallen
    deepest = float(plane.depth_cm(problem.mesh.cells.p).max())
    return BeamWeights(depth, weights, entering, lit, fallen, deepest, layers)


def _bulk_weights(
    problem: Problem, plane: LitPlane, region: Any, fields: Sequence[NDArray[np.float64]]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Depths of the quadrature points and the weights of ∫ Φ·∇φ there; equal depths taken together."""
    bulk = problem.space.bulk
    x, dx = bulk.x_cm, bulk.dx
    lit = inside(region, *plane.plane_um(x)) * dx
    depth = np.maximum(plane.depth_cm(x), 0.0).ravel()
    rows = [(np.einsum("d,dcq->cq", plane.inward, bulk.gradients(field)) * lit).ravel() for field in fields]
    depth, (rows,) = _grouped(depth, [np.array(rows).reshape(len(fields), -1)])
    return depth, rows


def _skin_weights(
    problem: Problem, plane: LitPlane, region: Any, fields: Sequence[NDArray[np.float64]]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Depths on the boundary, the weights of −∮ Φ·ν φ there, and those of the entering photons."""
    skin = problem.space.facets(facing_facets(problem.space, plane))
    x = np.asarray(skin.global_coordinates())
    through = crossing(skin, plane, region)
    depth = np.maximum(plane.depth_cm(x), 0.0).ravel()
    rows = np.array([(-through * skin.dx * np.asarray(skin.interpolate(f))).ravel() for f in fields])
    entering = np.where(through < 0, -through * skin.dx, 0.0).ravel()
    return depth, rows, entering


def _grouped(depth: NDArray[np.float64], rows: list[NDArray[np.float64]]) -> tuple[Any, list[Any]]:
    """Columns of equal depth summed up."""
    size = float(depth.max(initial=0.0)) or 1.0
    _, first, group = np.unique(np.round(depth / (SAME_DEPTH * size)), return_index=True, return_inverse=True)
    n = first.size

    def summed(row: NDArray[np.float64]) -> Any:
        return np.bincount(group, row, n)

    return depth[first], [np.array([summed(r) for r in row]) if row.ndim == 2 else summed(row) for row in rows]
