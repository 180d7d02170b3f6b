"""What a study will take, without running it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from ..errors import FemCarriersError
from .point import guarded
from .progress import duration
from .store import read_store
from .study_file import Study
from .workers import available_cores

TRIED_CELLS = 200
"""Points whose cells are built, spread over the study."""
TRIED_MESHES = 5
"""Points whose cells are meshed as well."""
SECONDS_PER_UNKNOWN = {2: 4e-4, 3: 4e-4}
"""Time of a current-voltage curve per unknown by dimension, around 3,000 (2-D) and 20,000 unknowns (3-D)."""
GROWTH = {2: 1.1, 3: 1.4}
"""Power with which time grows with the unknowns."""
TYPICAL = {2: 3e3, 3: 2e4}
SHARE_OF_A_CURVE = {"collected_current": 0.2}
PROCESS_MB = 350.0


@dataclass(frozen=True)
class Forecast:
    """What is known of a study before it runs.

    Parameters
    ----------
    points, finished : int
        Of the study (of a search the most it may take); of them in the store.
    refused : tuple of (point, reason)
        Cells that are not allowed, among those tried.
    tried : int
    unknowns : (int, int)
        Fewest and most, among the cells that were meshed.
    seconds_per_point : float
        On one core.
    measured : bool
        From finished points instead of a rule of thumb.
    memory_per_process_MB : float
    processes : int
    """

    points: int
    finished: int
    refused: tuple[tuple[int, str], ...]
    tried: int
    unknowns: tuple[int, int]
    seconds_per_point: float
    measured: bool
    memory_per_process_MB: float
    processes: int

    @property
    def seconds(self) -> float:
        """For all that is missing."""
        return (self.points - self.finished) * self.seconds_per_point / self.processes

    def __str__(self) -> str:
        basis = "measured on finished points" if self.measured else "rule of thumb, right within a factor of 4"
        memory = self.memory_per_process_MB
        lines = [
            f"points: {self.points}",
            f"finished: {self.finished}",
            f"unknowns: {self.unknowns[0]} to {self.unknowns[1]}" if self.unknowns[1] else "unknowns: no mesh",
            f"time per point: {duration(self.seconds_per_point)} on one core ({basis})",
            f"time: {duration(self.seconds)} on {self.processes} {'process' if self.processes == 1 else 'processes'}",
            f"memory: {memory * self.processes:.0f} MB, {memory:.0f} MB per process",
        ]
        if self.refused:
            lines.append(f"cells refused: {len(self.refused)} of {self.tried} tried")
            lines += [f"  point {i}: {reason}" for i, reason in self.refused[:10]]
        return "\n".join(lines)


def forecast(study: Study, processes: int | None = None) -> Forecast:
    """Number of points, time and memory of a study; nothing is solved.

    Cells of up to 200 points are built, and up to 5 are meshed. Times of finished points are used where there are any.

    Parameters
    ----------
    study : Study
    processes : int, optional
        Default is one per core.

    Returns
    -------
    Forecast
    """
    finished, seconds = _from_store(study)
    refused, cells = [], []
    tried = _spread(len(study.plan), TRIED_CELLS)
    for i in tried:
        cell, point = guarded(study.cell_at, i)
        refused += [(i, point.failure)] if cell is None else []
        cells += [] if cell is None else [cell]
    sizes = [size for k in _spread(len(cells), TRIED_MESHES) if (size := _unknowns(study, cells[k]))]
    dimension = study.cell.dimension
    measured = math.isfinite(seconds)
    if not measured:
        times = [_seconds(study, size, dimension) for size in sizes]
        seconds = sum(times) / len(times) if times else 0.0
    memory = PROCESS_MB + max((_memory_MB(size, dimension) for size in sizes), default=0.0)
    counts = (min(sizes, default=0), max(sizes, default=0))
    return Forecast(
        study.most_points, finished, tuple(refused), len(tried), counts, seconds, measured, memory,
        processes or available_cores(),
    )  # fmt: skip


def _from_store(study: Study) -> tuple[int, float]:
    """Points of this study that are finished, and their mean time (NaN if unknown)."""
    try:
        with read_store(study.store_path) as store:
            keys = set(study.plan.keys)
            done = keys & store.finished()
            return sum(key in done for key in study.plan.keys), store.seconds_per_point() if done else math.nan
    except FemCarriersError:
        return 0, math.nan


def _spread(count: int, most: int) -> list[int]:
    """Up to `most` numbers below `count`, first and last among them."""
    if count <= most:
        return list(range(count))
    return sorted({round(i * (count - 1) / (most - 1)) for i in range(most)})


def _unknowns(study: Study, cell: Any) -> int:
    from ..transport.build import problem

    options = {k: v for k, v in study.accuracy.items() if k in ("first_step_um", "growth", "level", "order")}
    built, _ = guarded(lambda: problem(cell, **options).space.size)
    return int(built or 0) * (1 if study.compute == "collected_current" else 2)


def _seconds(study: Study, unknowns: int, dimension: int) -> float:
    """t = c N (N/N0)^(p − 1)."""
    c, p, N0 = (table[dimension] for table in (SECONDS_PER_UNKNOWN, GROWTH, TYPICAL))
    return float(SHARE_OF_A_CURVE.get(study.compute, 1.0) * c * unknowns * (unknowns / N0) ** (p - 1))


def _memory_MB(unknowns: int, dimension: int) -> float:
    """Of the factors of the Jacobian: nested dissection takes N ln N in two and N^(4/3) in three dimensions."""
    if dimension == 2:
        return 5e-4 * unknowns * math.log(max(unknowns, 2))
    return float(2000 * (unknowns / 135e3) ** (4 / 3))
