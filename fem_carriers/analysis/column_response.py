"""What a photon that enters at a point of the plan contributes: the collection probability weighted with absorption."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from ..transport.generation import inside
from ..transport.probe import Probe
from ..units import UM

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..transport.generation import LitPlane
    from ..transport.problem import Problem
    from .weak_light import Beams

MOST_LEVELS = 400
FLUX_POINTS = 60
"""Quadrature points of the photon flux per depth interval, dense towards its ends."""
COLUMNS = 10_000
"""Points of the plan that are treated at a time."""


@dataclass(frozen=True, eq=False)
class ColumnResponse:
    """Carriers collected per photon that enters at a point of the lit face.

    g = ∫ −Φ′(d) φ dd over the depth, with φ quadratic between depths of the mesh: Φ(0) φ(0) − Φ(W) φ(W) + ∫ Φ φ′ dd.

    Parameters
    ----------
    problem : Problem
    beams : Beams
        Of a single wavelength.
    field : (n,) array
        φ at the nodes.
    """

    problem: Problem
    beams: Beams
    field: NDArray[np.float64]

    @property
    def plane(self) -> LitPlane:
        """The face that light enters."""
        return self.problem.lit_planes[self.beams.source.enters]

    @cached_property
    def probe(self) -> Probe:
        """Values of φ at points."""
        return Probe(self.problem.space)

    @cached_property
    def depths_cm(self) -> NDArray[np.float64]:
        """Depths at which φ is taken: those of the mesh and the middles between them, (2 m + 1,)."""
        depth = self.plane.depth_cm(self.problem.mesh.cells.p)
        deepest = float(depth.max())
        levels = np.unique(np.round(depth / deepest, 9)) * deepest
        if levels.size > MOST_LEVELS:
            levels = deepest * np.linspace(0, 1, MOST_LEVELS) ** 2
        return np.sort(np.concatenate([levels, 0.5 * (levels[1:] + levels[:-1])]))

    @cached_property
    def weights(self) -> NDArray[np.float64]:
        """Share of the light absorbed about each depth; they sum to what is absorbed of what entered."""
        depth = self.depths_cm
        net = self.beams.net(float(depth[-1]))
        weights = np.zeros(depth.size)
        ends = net(depth[[0, -1], None])[:, 0]
        weights[0], weights[-1] = ends[0], -ends[1]
        t, w = np.polynomial.legendre.leggauss(FLUX_POINTS)
        slopes = np.stack([t - 0.5, -2 * t, t + 0.5])  # of the three parabolas on (−1, 1)
        low, high = depth[:-2:2], depth[2::2]
        at = 0.5 * (low + high)[:, None] + 0.5 * (high - low)[:, None] * t
        flux = net(at.reshape(-1, 1)).reshape(at.shape)
        parts = np.einsum("kq,lq,q->kl", flux, slopes, w)
        for i in range(3):
            weights[i : i + 2 * low.size : 2] += parts[:, i]
        return weights

    def at(self, x_um: Any, y_um: Any) -> tuple[Any, Any]:
        """Carriers collected, and photons let in, per photon that falls on points (n,) of the face.

        Raises
        ------
        InputError
            The piece does not reach its full depth below a point.
        """
        lit = inside(self.plane.clear, np.asarray(x_um), np.asarray(y_um)) * (1 - self.beams.reflectance[0])
        found = np.zeros(lit.size)
        on = np.flatnonzero(lit)
        for first in range(0, on.size, COLUMNS):
            part = on[first : first + COLUMNS]
            found[part] = lit[part] * self._below(x_um[part], y_um[part])
        return found, lit

    def _below(self, x_um: Any, y_um: Any) -> Any:
        flat = self.problem.mesh.dimension == 2
        depth = self.depths_cm
        z = self.plane.origin_cm[-1] + self.plane.inward[-1] * depth
        rows = [np.repeat(v * UM, depth.size) for v in ((x_um,) if flat else (x_um, y_um))]
        points = np.stack([*rows, np.tile(z, x_um.size)])
        try:
            values = self.probe.values(self.field, points).reshape(x_um.size, depth.size)
        except ValueError:
            problems = Complaints("scan")
            problems.add("a piece that is not equally thick below the lit face", "a plate with parallel faces")
            problems.raise_if_any()
        return values @ self.weights - self._lost_in_layers(x_um, y_um) * values[:, 0]

    def _lost_in_layers(self, x_um: Any, y_um: Any) -> Any:
        """Share of the entering light whose carriers are lost in an absorbing layer."""
        lost = np.zeros(np.shape(x_um))
        for shape, surface in self._lit_surfaces():
            layer = surface.layer
            if layer is None or layer.absorbing_depth_um == 0 or layer.collection == 1:
                continue
            deepest = float(self.depths_cm[-1])
            ends = self.beams.net(deepest)(np.array([[0.0], [min(layer.absorbing_depth_um * UM, deepest)]]))
            lost += (1 - layer.collection) * float(ends[0, 0] - ends[1, 0]) * inside(shape, x_um, y_um)
        return lost

    def _lit_surfaces(self) -> list[tuple[Any, Any]]:
        """Outline and surface of everything on the lit face."""
        enters = self.beams.source.enters
        if self.problem.cell is not None:
            return [(r.shape, r.surface) for r in self.problem.cell.layout(enters).regions]
        name = self.problem.lit_name(enters)
        return [(self.plane.total, self.problem.surfaces[name])] if name in self.problem.surfaces else []
