"""Generation as the divergence of a photon flux: ∫ G v = ∫ Φ·∇v − ∮ Φ·ν v, exact in total on any mesh."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell.light import RateFunction, UniformRate
from ..constants import ELEMENTARY_CHARGE_C
from ..errors import MeshError
from ..units import MA, UM
from .photons import PhotonFlux, photon_flux
from .spaces import evaluate

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from ..cell.base import Base
    from ..cell.light import Light, Source
    from .problem import Problem
    from .spaces import Space


@dataclass(frozen=True, eq=False)
class LitPlane:
    """A flat surface that light enters at right angles.

    Parameters
    ----------
    origin_cm : (dimension,) array
        A point of the plane.
    inward : (dimension,) array
        Unit normal into the cell.
    clear : shapely geometry
        Where light may enter, in plane coordinates (µm): x, y for a plane at right angles to z.
    total : shapely geometry
        The whole plane, in the same coordinates.
    """

    origin_cm: NDArray[np.float64]
    inward: NDArray[np.float64]
    clear: Any
    total: Any

    def depth_cm(self, x_cm: Any) -> Any:
        """Distance below the plane of points (dimension, ...)."""
        return np.einsum("d...,d->...", x_cm - _as_column(self.origin_cm, x_cm), self.inward)

    def plane_um(self, x_cm: Any) -> tuple[Any, Any]:
        """Plane coordinates of points (dimension, ...), µm; in 2-D the second one is half of the unit depth."""
        along = [np.einsum("d...,d->...", x_cm, t) * 1e4 for t in tangents(self.inward)]
        return along[0], along[1] if len(along) == 2 else np.full_like(along[0], 5e3)


@dataclass(frozen=True)
class Optics:
    """Where the photons went, mA/cm² of cell area; incident is the sum of the other currents."""

    incident: float = 0.0
    shaded: float = 0.0
    reflected: float = 0.0
    escaped: float = 0.0
    parasitic: float = 0.0
    generated: float = 0.0
    incident_power_mW_per_cm2: float = 0.0

    def __add__(self, other: Optics) -> Optics:
        return Optics(*(getattr(self, f) + getattr(other, f) for f in self.__dataclass_fields__))


def tangents(inward: NDArray[np.float64]) -> list[NDArray[np.float64]]:
    """Orthonormal directions in the plane: x (and y) where the normal is ±z."""
    if inward.size == 2:
        return [np.array([abs(inward[1]), -inward[0] * np.sign(inward[1] or 1.0)])]
    if abs(inward[2]) > 1 - 1e-12:
        return [np.array([1.0, 0, 0]), np.array([0, 1.0, 0])]
    first = np.cross(inward, [0, 0, 1.0])
    first /= np.linalg.norm(first)
    return [first, np.cross(inward, first)]


def assemble_generation(problem: Problem) -> tuple[NDArray[np.float64], Optics]:
    """Load vector ∫ G v in 1/s (per cm of depth in 2-D), and where the photons went.

    Parameters
    ----------
    problem : Problem

    Returns
    -------
    (n,) array, Optics
    """
    load, optics = np.zeros(problem.space.size), Optics()
    for source in problem.light.sources if problem.light is not None else ():
        if isinstance(source, UniformRate | RateFunction):
            part = _rate_load(problem.space, source, problem.lit_planes)
            current = _current(float(part.sum()), problem.cell_area_cm2)
            optics += Optics(incident=current, generated=current)
        else:
            part, share = _beam_load(problem, source, problem.lit_planes[source.enters])
            optics += share
        load += part
    return load, optics


def lit_region(source: Source, plane: LitPlane) -> Any:
    """Where this source's light falls: the plane, less metal if shaded, inside the mask; plane coordinates in µm."""
    return inside_mask(source, plane, plane.clear if source.shaded else plane.total)


def inside_mask(source: Source, plane: LitPlane, region: Any) -> Any:
    """The part of a region of the plane that the source's mask lets light through to, as shapely geometry in µm."""
    from shapely import union_all

    if not source.mask:
        return region
    return region.intersection(union_all([m.outline(plane.inward.size) for m in source.mask]))


def inside(region: Any, a_um: Any, b_um: Any) -> Any:
    """1 inside `region`, 0 outside, for arrays of plane coordinates."""
    from shapely import intersects_xy, prepare

    prepare(region)
    return intersects_xy(region, a_um.ravel(), b_um.ravel()).reshape(a_um.shape).astype(float)


def _rate_load(space: Space, source: Any, planes: Mapping[str, LitPlane]) -> NDArray[np.float64]:
    """∫ G v for a source given as a rate."""
    x = space.bulk.x_cm
    rate = source.rate_per_cm3_s if isinstance(source, UniformRate) else source.rate
    values = evaluate("Light.function", rate, x, zero=True, inf=False) * np.ones(x.shape[1:])
    if source.needs_plane:
        plane = planes[source.enters]
        values = values * inside(lit_region(source, plane), *plane.plane_um(x))
    return np.asarray(space.bulk.load(rate=values))


def _beam_load(problem: Problem, source: Source, plane: LitPlane) -> tuple[NDArray[np.float64], Optics]:
    """∫ Φ·∇v − ∮ Φ·ν v for a source that enters through a plane, scaled to its exact entering flux."""
    from skfem import LinearForm

    space = problem.space
    flux = photon_flux(source, problem.base, float(plane.depth_cm(space.mesh.cells.p).max()))
    region = lit_region(source, plane)
    skin = space.facets(facing_facets(space, plane))
    depth = np.maximum(plane.depth_cm(np.asarray(skin.global_coordinates())), 0.0)
    through = flux.net(depth) * crossing(skin, plane, region)  # negative where light enters
    load = space.bulk.load(flux=_photons(space.bulk.x_cm, plane, region, flux))
    load = load - LinearForm(lambda v, w: w.through * v).assemble(skin, through=through)
    entering = float(-(through * skin.dx)[through < 0].sum())
    lit_cm2 = region.area * 1e-8
    wanted = lit_cm2 * float(flux.net(np.zeros(1))[0])
    if wanted > 0 and entering <= 0:
        raise MeshError(
            "Light falls between the points of the mesh, which is too coarse for its mask. Try a finer mesh, or give "
            "the light to the unit cell before it is meshed."
        )
    scale = wanted / entering if entering > 0 else 0.0
    load, lost = load * scale, _layer_loss(problem, plane, region, flux) * scale
    budget = _optics(problem, flux, plane, source, (lit_cm2, float(load.sum()), float(lost.sum())))
    return load - lost, budget


def _layer_loss(problem: Problem, plane: LitPlane, region: Any, flux: PhotonFlux) -> NDArray[np.float64]:
    """∮ (1 − collection) [Φ(0) − Φ(depth)] v over layers that absorb: carriers generated and lost in the layer."""
    total = np.zeros(problem.space.size)
    for depth_cm, lost in absorbing_layers(problem, plane, region):
        ends = flux.net(np.array([0.0, depth_cm]))
        total += (ends[0] - ends[1]) * lost
    return total


def absorbing_layers(problem: Problem, plane: LitPlane, region: Any) -> list[tuple[float, NDArray[np.float64]]]:
    """(Depth in cm, ∮ (1 − collection) v over the lit part) of every layer at the plane that absorbs and loses."""
    from skfem import LinearForm

    found = []
    for name, surface in problem.surfaces.items():
        layer = surface.layer
        if layer is None or layer.absorbing_depth_um == 0 or layer.collection == 1:
            continue
        basis = problem.space.surfaces[name]
        x = np.asarray(basis.global_coordinates())
        if np.abs(plane.depth_cm(x)).max() > 1e-6 * np.ptp(problem.mesh.cells.p):
            continue  # on another face than the light enters
        deepest = float(plane.depth_cm(problem.mesh.cells.p).max())
        lost = (1 - layer.collection) * inside(region, *plane.plane_um(x))
        load = LinearForm(lambda v, w: w.lost * v).assemble(basis, lost=lost)
        found.append((min(layer.absorbing_depth_um * UM, deepest), np.asarray(load)))
    return found


def _photons(x: Any, plane: LitPlane, region: Any, flux: PhotonFlux) -> Any:
    """Φ at points x (dimension, n_cells, n_points) in cm, 1/(cm² s)."""
    size = flux.net(np.maximum(plane.depth_cm(x), 0.0)) * inside(region, *plane.plane_um(x))
    return size * plane.inward[:, None, None]


def crossing(skin: Any, plane: LitPlane, region: Any) -> Any:
    """Share of the beam's density that leaves (negative: enters) at the quadrature points of boundary facets.

    What leaves is scaled to what enters, since every ray does both; where a shadow runs through facets of the far side
    the quadrature alone would not see to that.
    """
    x = np.asarray(skin.global_coordinates())
    through = np.einsum("d,dij->ij", plane.inward, np.asarray(skin.normals)) * inside(region, *plane.plane_um(x))
    out, into = ((np.maximum(sign * through, 0.0) * skin.dx).sum() for sign in (1, -1))
    return np.where(through > 0, through * (into / out if out > 0 else 1.0), through)


def facing_facets(space: Space, plane: LitPlane) -> NDArray[np.int64]:
    """Boundary facets that the beam crosses."""
    cells = space.mesh.cells
    boundary = cells.boundary_facets()
    corners = cells.p[:, cells.facets[:, boundary]]
    sides = corners[:, 1:] - corners[:, :1]
    flat = len(sides) == 2
    across = np.array([-sides[1, 0], sides[0, 0]]) if flat else np.cross(sides[:, 0], sides[:, 1], axis=0)
    return np.asarray(boundary[np.abs(plane.inward @ across) > 1e-9 * np.linalg.norm(across, axis=0)])


def _optics(
    problem: Problem, flux: PhotonFlux, plane: LitPlane, source: Source, sums: tuple[float, float, float]
) -> Optics:
    """Photon budget of one beam from (lit area, absorbed, lost in layers).

    Light outside of a mask never reaches the cell and is not counted as incident. On an imported mesh without a mask
    light falls on the whole cell area; what the lit surface does not cover is shaded.
    """
    lit_cm2, absorbed, lost = sums
    area_cm2 = problem.cell_area_cm2
    whole = problem.cell is None and not source.mask
    region_cm2 = max(area_cm2, lit_cm2) if whole else inside_mask(source, plane, plane.total).area * 1e-8
    incident, into = flux.incident * region_cm2, flux.incident * lit_cm2
    reflected = flux.reflected * lit_cm2
    return Optics(
        incident=_current(incident, area_cm2),
        shaded=_current(incident - into, area_cm2),
        reflected=_current(reflected, area_cm2),
        escaped=_current(into - reflected - absorbed, area_cm2),
        parasitic=_current(lost, area_cm2),
        generated=_current(absorbed - lost, area_cm2),
        incident_power_mW_per_cm2=flux.power_mW_per_cm2 * region_cm2 / area_cm2,
    )


def _current(per_second: float, area_cm2: float) -> float:
    """Carriers per second as mA/cm²."""
    return ELEMENTARY_CHARGE_C * per_second / area_cm2 / MA


def generation_rate(x_cm: Any, light: Light | None, planes: Mapping[str, LitPlane], base: Base) -> Any:
    """G at points (dimension, ...), for pictures and profiles: −dΦ/dd by central differences, cm⁻³s⁻¹.

    Balances use `assemble_generation`; next to a surface that absorbs strongly the rate at a point says little.
    """
    x, total = np.asarray(x_cm), np.zeros(np.shape(x_cm)[1:])
    for source in light.sources if light is not None else ():
        lit: Any = 1.0
        if source.needs_plane:
            plane = planes[source.enters]
            lit = inside(lit_region(source, plane), *plane.plane_um(x))
        if isinstance(source, UniformRate | RateFunction):
            rate = source.rate_per_cm3_s if isinstance(source, UniformRate) else source.rate
            total += evaluate("Light.function", rate, x, zero=True, inf=False) * lit
            continue
        depth = np.maximum(plane.depth_cm(x), 0.0)
        thickness = float(depth.max())
        flux, step = photon_flux(source, base, thickness), 1e-3 * (depth + 1e-6)
        above, below = np.maximum(depth - step, 0.0), np.minimum(depth + step, thickness)
        total += (flux.net(above) - flux.net(below)) / (below - above) * lit
    return total


def _as_column(point: NDArray[np.float64], x: Any) -> Any:
    return point.reshape(point.shape + (1,) * (np.ndim(x) - 1))
