"""The design that is best on average over the scatter of the inputs, and the one that is best at nominal inputs."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from .spread import Learned, Scatter

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from .tolerance import BestDesign

STEPS, DRAWS, REPEATS = 61, 512, 64
SHOWN = (5.0, 50.0, 95.0)


def best_designs(scatter: Scatter, learned: Learned) -> tuple[BestDesign, BestDesign, pd.DataFrame | None]:
    """Best design at nominal inputs, best on average, and (of one design variable) what happens over its range.

    Parameters
    ----------
    scatter : Scatter
        With designs; the quantity is maximized.
    learned : Learned

    Returns
    -------
    BestDesign, BestDesign, DataFrame or None
    """
    designs = scatter.designs
    assert designs is not None
    grid = designs.values(_grid(len(designs.names)))
    inputs = scatter.drawn(DRAWS, scatter.seed + 1)
    nominal = np.concatenate([scatter.with_design(scatter.medians[None], design) for design in grid])
    data = _repeated(learned)
    at_nominal = learned.surrogate.mean(nominal, data)
    on_average = np.array([learned.surrogate.mean(scatter.with_design(inputs, g), data).mean(axis=0) for g in grid])
    best = tuple(_best(scatter, learned, grid, curves) for curves in (at_nominal, on_average))
    return best[0], best[1], _over_range(scatter, learned, grid, inputs) if len(designs.names) == 1 else None


def _grid(d: int) -> NDArray[np.float64]:
    """Designs in the unit cube: a line, a raster, or quasi-random points."""
    if d == 1:
        return np.linspace(0, 1, STEPS)[:, None]
    if d == 2:
        line = np.linspace(0, 1, 21)
        return np.stack(np.meshgrid(line, line, indexing="ij"), axis=-1).reshape(-1, 2)
    from scipy.stats import qmc

    return np.asarray(qmc.Sobol(d, seed=0).random(1024))


def _repeated(learned: Learned) -> NDArray[np.float64]:
    """The points' values, and copies with errors as large as the surrogate's residuals and the bars, (n, 1 + repeats).

    The tops of the curves through the copies tell how well the place of the top is known.
    """
    values = learned.surrogate.values
    size = np.hypot(learned.miss, np.nan_to_num(learned.bar)) / 2
    errors = size * np.random.default_rng(3).standard_normal((len(values), REPEATS))
    return np.hstack([values[:, None], values[:, None] + errors])


def _best(scatter: Scatter, learned: Learned, grid: Any, curves: NDArray[np.float64]) -> BestDesign:
    from .tolerance import BestDesign

    assert scatter.designs is not None
    names = scatter.designs.names
    places = np.array([_top(scatter, grid, curve) for curve in curves.T])
    bars = np.quantile(np.abs(places[1:] - places[0]), 0.95, axis=0)
    heights = curves.max(axis=0)
    height_bar = np.quantile(np.abs(heights[1:] - heights[0]), 0.95) + np.nan_to_num(learned.bar)
    return BestDesign(
        dict(zip(names, places[0].tolist(), strict=True)), dict(zip(names, bars.tolist(), strict=True)),
        float(heights[0]), float(height_bar),
    )  # fmt: skip


def _top(scatter: Scatter, grid: Any, curve: NDArray[np.float64]) -> NDArray[np.float64]:
    """Place of the largest value; of one variable by the parabola through it and its neighbours."""
    k = int(np.argmax(curve))
    assert scatter.designs is not None
    if grid.shape[1] > 1 or k in (0, len(grid) - 1):
        return np.asarray(grid[k])
    left, middle, right = curve[k - 1 : k + 2]
    bend = left - 2 * middle + right
    shift = 0.5 * (left - right) / bend if bend < 0 else 0.0
    unit = scatter.designs.unit(grid[k][None])[0] + shift / (len(grid) - 1)
    return np.asarray(scatter.designs.values(unit[None])[0])


def _over_range(scatter: Scatter, learned: Learned, grid: Any, inputs: NDArray[np.float64]) -> pd.DataFrame:
    """Nominal value, mean and percentiles against the design variable."""
    import pandas as pd

    assert scatter.designs is not None
    q, rows = scatter.quantity, []
    for design in grid:
        values = learned.surrogate.mean(scatter.with_design(inputs, design))
        nominal = learned.surrogate.mean(scatter.with_design(scatter.medians[None], design))[0]
        low, middle, high = np.percentile(values, SHOWN)
        rows.append((design[0], nominal, values.mean(), low, middle, high))
    names = [f"{w}_{q}" for w in ("nominal", "mean", "percentile_5", "percentile_50", "percentile_95")]
    return pd.DataFrame(rows, columns=[scatter.designs.names[0], *names])
