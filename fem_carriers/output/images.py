"""Where copies of the modelled piece go: mirror images of a modelled piece, translated periods."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..errors import Complaints

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..transport.problem import Problem

MOST_COPIES = 12


@dataclass(frozen=True)
class Image:
    """x' = sign·x + offset on the three axes.

    Parameters
    ----------
    sign : (3,) tuple
        −1 on a mirrored axis.
    offset_um : (3,) tuple
    """

    sign: tuple[int, int, int]
    offset_um: tuple[float, float, float]

    @property
    def inverted(self) -> bool:
        """True if it turns right-handed cells into left-handed ones."""
        return bool(np.prod(self.sign) < 0)

    def points(self, points_um: NDArray[np.float64]) -> NDArray[np.float64]:
        """Positions (n, 3) in µm."""
        return np.asarray(points_um * np.array(self.sign) + np.array(self.offset_um))

    def vectors(self, vectors: NDArray[np.float64]) -> NDArray[np.float64]:
        """Components (n, 3)."""
        return np.asarray(vectors * np.array(self.sign))


ITSELF = Image((1, 1, 1), (0.0, 0.0, 0.0))


def images(problem: Problem, copies: tuple[int, int]) -> list[Image]:
    """Images of the piece, the piece itself first.

    Parameters
    ----------
    problem : Problem
        Of a unit cell, unless copies is (1, 1).
    copies : (int, int)
        Pieces shown along x and y, counted with the piece itself: (2, 1) shows the modelled piece and its mirror
        image, which is one whole unit cell in x.

    Returns
    -------
    list of Image

    Raises
    ------
    InputError
        Copies of an imported mesh, across a real edge, or along y of a cross section.
    """
    problems = Complaints("copies")
    good = isinstance(copies, tuple | list) and len(copies) == 2
    good = good and all(isinstance(n, int | np.integer) and 1 <= n <= MOST_COPIES for n in copies)
    if not problems.unless(bool(good), f"copies = {copies!r}", f"two whole numbers from 1 to {MOST_COPIES}, (x, y)"):
        problems.raise_if_any()
    if problem.cell is None:
        problems.unless(
            tuple(copies) == (1, 1), f"copies = {copies!r} of an imported mesh", "(1, 1); only unit cells repeat"
        )
    problems.raise_if_any()
    along = [_along(problem, axis, n, problems) for axis, n in zip("xy", copies, strict=True)]
    problems.raise_if_any()
    found = [Image((sx, sy, 1), (ox, oy, 0.0)) for sx, ox in along[0] for sy, oy in along[1]]
    return sorted(found, key=lambda image: image != ITSELF)


def most_copies(problem: Problem, axis: str) -> int:
    """How many pieces may be shown along "x" or "y"."""
    cell = problem.cell
    if cell is None or (axis == "y" and problem.mesh.dimension == 2):
        return 1
    real = sum(f"{axis}_{end}" in cell.sides for end in ("min", "max"))
    return {0: MOST_COPIES, 1: 2, 2: 1}[real]


def _along(problem: Problem, axis: str, n: int, problems: Complaints) -> list[tuple[int, float]]:
    """(sign, offset in µm) of n images along one axis."""
    most = most_copies(problem, axis)
    if n > most:
        why = "a cross section" if axis == "y" and problem.mesh.dimension == 2 else "the real edges of this cell"
        problems.add(f"{n} copies along {axis}", f"at most {most}, because of {why}")
    if n == 1 or n > most or problem.cell is None:
        return [(1, 0.0)]
    low, high = (float(f(problem.mesh.points_um["xy".index(axis)])) for f in (np.min, np.max))
    start = 0 if f"{axis}_min" in problem.cell.sides else -(n // 2)
    size = high - low
    if axis in problem.periodic_axes:
        return [(1, i * size) for i in range(start, start + n)]
    return [(1, i * size) if i % 2 == 0 else (-1, low + high + i * size) for i in range(start, start + n)]
