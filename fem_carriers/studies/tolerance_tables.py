"""Percentiles and shares of the variance as tables with error bars."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from .spread import Learned, Scatter, variance_shares

if TYPE_CHECKING:
    import pandas as pd


def percentile_table(scatter: Scatter, learned: Learned, draws: Any, percentiles: Sequence[float]) -> pd.DataFrame:
    """Percentiles with bars: of the surrogate, of the number of samples, of the points' meshes; added up."""
    import pandas as pd

    each = np.percentile(np.array(draws), percentiles, axis=1)  # (percentiles, scrambles)
    sampling = 2 * each.std(axis=1, ddof=1) / np.sqrt(len(draws))
    bar = np.nan_to_num(learned.bar)
    return pd.DataFrame(
        {
            "percentile": list(percentiles),
            scatter.quantity: each.mean(axis=1),
            f"error_bar_{scatter.quantity}": learned.miss + sampling + bar,
            f"of_surrogate_{scatter.quantity}": learned.miss,
            f"of_sampling_{scatter.quantity}": sampling,
            f"of_discretisation_{scatter.quantity}": learned.bar,
        }
    )


def share_table(scatter: Scatter, learned: Learned, design: Any) -> pd.DataFrame:
    """Shares of the variance with bars: of the number of samples, and of the surrogate."""
    import pandas as pd

    alone, total, bars = (100 * v for v in variance_shares(scatter, learned.surrogate, design))
    bars = bars + 100 * learned.miss / 2 / (learned.spread or 1.0)  # an error of that size may belong to any input
    table = pd.DataFrame(
        {"input": scatter.inputs, "alone_percent": alone, "total_percent": total, "error_bar_percent": bars}
    )
    return table.sort_values("total_percent", ascending=False, ignore_index=True)
