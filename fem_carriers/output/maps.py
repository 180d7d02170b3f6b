"""A sweep of two variables as a map."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from .canvas import check_columns, finish, need, new_figure
from .labels import label
from .style import DARK

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from numpy.typing import NDArray


def plot_map(
    table: pd.DataFrame, x: str, y: str, picture: str | Path | None = None, *, value: str = "efficiency_percent"
) -> Figure:
    """A result against two variables: one cell per point with its number, the largest one framed.

    Parameters
    ----------
    table : pandas.DataFrame
        Of a sweep: one row per point; points without a result stay empty.
    x, y : str
        Columns of the variables.
    picture : str or Path, optional
        File to save to: .png, .pdf or .svg.
    value : str
        Column to show.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        A missing or non-numeric column, several rows for one point, no result, or a picture that cannot be written.
    """
    check_columns("plot_map", table, [x, y, value])
    repeated = bool(table.duplicated([x, y]).any())
    need("plot_map", not repeated, f"several rows of the same {x} and {y}", "one row per point")
    grid = table.pivot(index=y, columns=x, values=value)
    numbers = grid.to_numpy(dtype=float)
    need("plot_map", bool(np.isfinite(numbers).any()), "a table without a single finite result", "one or more results")
    rows, columns = numbers.shape
    figure, axes = new_figure(1, (max(5.0, 2.2 + 0.75 * columns), max(2.8, 1.4 + 0.55 * rows)))
    ax = axes[0]
    image = ax.imshow(numbers, origin="lower", aspect="auto", cmap="viridis")
    ax.set_xticks(range(columns), [f"{v:.4g}" for v in grid.columns])
    ax.set_yticks(range(rows), [f"{v:.4g}" for v in grid.index])
    ax.set_xlabel(label(x))
    ax.set_ylabel(label(y))
    ax.grid(visible=False)
    _write_numbers(ax, numbers)
    figure.colorbar(image, ax=ax, label=label(value))
    return finish(figure, picture)


def _write_numbers(ax: Axes, numbers: NDArray[np.float64]) -> None:
    """The numbers in their cells, dark on light and light on dark; a frame around the largest."""
    from matplotlib.patches import Rectangle

    decimals = max(0, 3 - int(np.floor(np.log10(np.nanmax(np.abs(numbers)) or 1.0))))  # four digits of the largest
    middle = 0.5 * (np.nanmin(numbers) + np.nanmax(numbers))
    for (row, column), number in np.ndenumerate(numbers):
        if np.isfinite(number):
            color = DARK if number > middle else "white"
            ax.text(column, row, f"{number:.{decimals}f}", ha="center", va="center", color=color, fontsize=9)
    row, column = np.unravel_index(np.nanargmax(numbers), numbers.shape)
    corner = (float(column) - 0.5, float(row) - 0.5)
    ax.add_patch(Rectangle(corner, 1, 1, fill=False, edgecolor="#D55E00", linewidth=3, clip_on=False))
