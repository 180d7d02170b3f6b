"""What a study can compute, by the name that stands in its file."""

from __future__ import annotations

import inspect
from collections.abc import Callable
from importlib import import_module
from typing import Any

QUANTITIES = {
    "collected_current": "studies.columns:collected_current",
    "current_voltage": "analysis.curve:current_voltage",
}
"""Place of the function: takes a UnitCell and the options of mesh and error."""
ACCURACY = ("first_step_um", "growth", "level", "order", "target_error_percent", "target_error", "largest_unknowns")
"""Names of such options; which of them a function takes, its signature tells."""


def quantity(name: str) -> Callable[..., Any]:
    """The function that computes a quantity."""
    module, _, function = QUANTITIES[name].partition(":")
    return getattr(import_module(f"fem_carriers.{module}"), function)  # type: ignore[no-any-return]


def accuracy_options(name: str) -> dict[str, inspect.Parameter]:
    """Options of mesh and error that a quantity takes, by name."""
    taken = inspect.signature(quantity(name)).parameters
    return {option: parameter for option, parameter in taken.items() if option in ACCURACY}
