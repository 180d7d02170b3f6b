"""The photon flux of a problem's beams at any points."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell.light import RateFunction, UniformRate
from .generation import inside, lit_region
from .photons import photon_flux

if TYPE_CHECKING:
    from collections.abc import Callable

    from ..cell.light import Source
    from .problem import Problem

Beam = tuple["Source", "Callable[[Any], Any]"]


def beams_of(problem: Problem) -> list[Beam]:
    """Sources that enter through a plane, with their net flux against depth in cm.

    Parameters
    ----------
    problem : Problem

    Returns
    -------
    list of (Source, function)
    """
    found = []
    for source in problem.light.sources if problem.light is not None else ():
        if not isinstance(source, UniformRate | RateFunction):
            deepest = float(problem.lit_planes[source.enters].depth_cm(problem.mesh.cells.p).max())
            found.append((source, photon_flux(source, problem.base, deepest).net))
    return found


def photons_at(problem: Problem, beams: list[Beam], x_cm: Any) -> Any:
    """Φ in 1/(cm² s), shape of the points x_cm (dimension, n_cells, n_points); G = −∇·Φ.

    Parameters
    ----------
    problem : Problem
    beams : list
        From `beams_of`.
    x_cm : array
    """
    total = np.zeros(x_cm.shape)
    for source, net in beams:
        plane = problem.lit_planes[source.enters]
        size = net(np.maximum(plane.depth_cm(x_cm), 0.0)) * lit(problem, source, x_cm)
        total += size * plane.inward[:, None, None]
    return total


def lit(problem: Problem, source: Source, x_cm: Any) -> Any:
    """1 below the lit part of a source's plane, 0 elsewhere."""
    plane = problem.lit_planes[source.enters]
    return inside(lit_region(source, plane), *plane.plane_um(x_cm))
