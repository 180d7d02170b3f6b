"""The spot of a light beam, and the plan it sweeps over: mirror images, repeats and real edges of the piece."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..errors import Complaints

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..transport.problem import Problem

SHAPES = ("gaussian", "top_hat")
SIGMAS = 5.0
"""A Gaussian spot is cut off at this many standard deviations."""
STEPS_PER_DIAMETER = {"gaussian": 4, "top_hat": 24}
"""Pieces per diameter into which the plan is cut, with three Gauss points each."""
POINTS, WEIGHTS = np.polynomial.legendre.leggauss(3)


@dataclass(frozen=True)
class BeamSpot:
    """A round spot, in a cross section a line along y.

    Parameters
    ----------
    diameter_um : float
        Gaussian: at 1/e² of the peak intensity, four standard deviations (ISO 11146-1). Top hat: of the disc.
    shape : {"gaussian", "top_hat"}
    """

    diameter_um: float
    shape: str = "gaussian"

    def __post_init__(self) -> None:
        problems = Complaints("light-beam spot")
        checks.positive(problems, "spot_diameter_um", self.diameter_um)
        checks.one_of(problems, "spot_shape", self.shape, SHAPES)
        problems.raise_if_any()

    @property
    def reach_um(self) -> float:
        """Distance from the centre beyond which there is no light."""
        return SIGMAS * self.diameter_um / 4 if self.shape == "gaussian" else 0.55 * self.diameter_um

    @property
    def step_um(self) -> float:
        """Largest piece of the plan that is integrated at once."""
        return self.diameter_um / STEPS_PER_DIAMETER[self.shape]

    def intensity(self, distance_um: Any) -> Any:
        """Intensity at a distance from the centre, not normalised."""
        if self.shape == "gaussian":
            return np.exp(-8 * (distance_um / self.diameter_um) ** 2)
        inside = (self.diameter_um / 2 - distance_um) / self.step_um
        return np.clip(inside + 0.5, 0.0, 1.0)  # the rim is as wide as a step


@dataclass(frozen=True, eq=False)
class Sweep:
    """Integration points along one axis of the plan, which the spot sweeps over.

    Parameters
    ----------
    at_um : (n,) array
        Positions, rising; also beyond the piece.
    in_piece_um : (n,) array
        Position in the piece that each stands for; within the piece also where there is no cell.
    there : (n,) bool array
        False beyond a real edge of the cell.
    weights_um : (n,) array
    """

    at_um: NDArray[np.float64]
    in_piece_um: NDArray[np.float64]
    there: NDArray[np.bool_]
    weights_um: NDArray[np.float64]


def sweep_over(
    piece_um: tuple[float, float], ends: tuple[str, str], breaks_um: NDArray[np.float64],
    centres_um: NDArray[np.float64], spot: BeamSpot,
) -> Sweep:  # fmt: skip
    """Integration points over a piece and its images, wherever a spot reaches.

    Parameters
    ----------
    piece_um : (float, float)
        Lower and upper side.
    ends : pair of {"mirror", "periodic", "edge"}
        What these sides are.
    breaks_um : array
        Positions in the piece where the response may have a kink or jump.
    centres_um : array
        Centres of the spots.
    spot : BeamSpot
    """
    low, high = piece_um
    inner = breaks_um[(breaks_um > low + 1e-9) & (breaks_um < high - 1e-9)]
    edges = np.unique(np.concatenate([[0.0], inner - low, [high - low]]))
    parts = [
        _interval(number, edges, low, ends, window, spot.step_um)
        for window in windows(centres_um, spot.reach_um)
        for number in range(math.floor((window[0] - low) / edges[-1]), math.floor((window[1] - low) / edges[-1]) + 1)
    ]
    return Sweep(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def windows(centres_um: NDArray[np.float64], reach_um: float) -> list[tuple[float, float]]:
    """Intervals that the spots cover, rising and apart."""
    found: list[tuple[float, float]] = []
    for centre in np.unique(centres_um):
        low, high = float(centre - reach_um), float(centre + reach_um)
        if found and low <= found[-1][1]:
            found[-1] = (found[-1][0], high)
        else:
            found.append((low, high))
    return found


def _interval(
    number: int, edges: Any, low: float, ends: tuple[str, str], window: tuple[float, float], step: float
) -> tuple[Any, Any, Any, Any]:
    """Positions, those in the piece, whether there is a cell, and weights, in one image of the piece."""
    length = float(edges[-1])
    there, mirrored = image(number, ends)
    start = low + number * length
    first, last = (min(max(end - start, 0.0), length) for end in window)
    along = np.sort(length - edges) if mirrored else edges
    cut = np.unique(np.concatenate([[first], along[(along > first) & (along < last)], [last]]))
    counts = np.maximum(1, np.ceil(np.diff(cut) / step - 1e-9).astype(int))
    pieces = [np.linspace(a, b, n + 1)[:-1] for a, b, n in zip(cut, cut[1:], counts, strict=False)]
    grid = np.concatenate([*pieces, cut[-1:]])
    middle, half = 0.5 * (grid[1:] + grid[:-1]), 0.5 * np.diff(grid)
    place = (middle[:, None] + half[:, None] * POINTS).ravel()
    inside = low + (length - place if mirrored else place)
    return start + place, inside, np.full(place.size, there), (half[:, None] * WEIGHTS).ravel()


def image(number: int, ends: tuple[str, str]) -> tuple[bool, bool]:
    """Whether a tile of the plan holds an image of the piece, and whether that is mirrored; the piece is number 0."""
    if ends == ("periodic", "periodic"):
        return True, False
    lowest = {"mirror": -math.inf if ends[1] == "mirror" else -1, "edge": 0}[ends[0]]
    highest = {"mirror": math.inf if ends[0] == "mirror" else 1, "edge": 0}[ends[1]]
    return lowest <= number <= highest, number % 2 == 1


def side_kinds(problem: Problem, axis: str) -> tuple[str, str]:
    """What the lower and upper side along an axis are; those of imported meshes count as real edges."""
    cell = problem.cell
    if cell is None:
        return "edge", "edge"
    if axis in cell.periodic_axes:
        return "periodic", "periodic"
    low, high = ("edge" if f"{axis}_{end}" in cell.sides else "mirror" for end in ("min", "max"))
    return low, high
