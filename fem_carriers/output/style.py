"""Colours that colour-blind readers can tell apart, and when a scale is logarithmic."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

OKABE_ITO = ("#0072B2", "#E69F00", "#009E73", "#CC79A7", "#56B4E9", "#D55E00", "#F0E442", "#999999")
"""Qualitative colours of M. Okabe and K. Ito, "Color universal design" (2008); black is left for text and lines."""

DARK = "#222222"
LOG_ENDINGS = ("_per_cm3", "_per_cm3_s", "_flux_mA_per_cm2")
LOG_DECADES = 2.0
"""Densities, rates and fluxes that span more than this are shown on a logarithmic scale."""
LEFT_OUT = 0.01
"""Share of the volume, lowest values first, that a logarithmic scale leaves out; they get its lowest colour."""


def log_by_default(name: str, values: NDArray[Any], weights: NDArray[Any] | None = None) -> bool:
    """True for a density, rate or flux whose positive values span more than `LOG_DECADES` (see `log_range`)."""
    if not name.endswith(LOG_ENDINGS) or not (values[np.isfinite(values)] > 0).any():
        return False
    low, high = log_range(values, weights)
    return bool(np.log10(high / low) > LOG_DECADES)


def log_range(values: NDArray[Any], weights: NDArray[Any] | None = None) -> tuple[float, float]:
    """Largest value, and the positive one that all but `LEFT_OUT` of the weight exceeds.

    Densities fall to zero at collecting contacts; without this a few nodes there would take up the whole scale.
    """
    weights = np.ones(values.shape) if weights is None else weights
    good = np.isfinite(values) & (values > 0)
    if not good.any():
        return 0.1, 1.0
    order = np.argsort(values[good])
    rising, share = values[good][order], np.cumsum(weights[good][order])
    low = float(rising[np.searchsorted(share, LEFT_OUT * share[-1])])
    high = float(rising[-1])
    return (low, high) if high > low * 1.001 else (low * 0.9, high * 1.1)


def linear_range(values: NDArray[Any]) -> tuple[float, float]:
    """Smallest and largest finite value, with some room if they are the same."""
    good = values[np.isfinite(values)]
    if not good.size:
        return 0.0, 1.0
    low, high = float(good.min()), float(good.max())
    margin = 0.01 * abs(high) or 1.0
    return (low, high) if high > low else (low - margin, high + margin)


def font_file() -> str:
    """A font with superscripts and Greek letters (DejaVu Sans, which comes with matplotlib)."""
    import matplotlib

    return str(Path(matplotlib.get_data_path()) / "fonts" / "ttf" / "DejaVuSans.ttf")
