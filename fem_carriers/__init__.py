"""Finite-element carrier transport for contact and grid layout studies of solar cells.

Public names are imported when first used, so ``import fem_carriers as fc`` is quick.
"""

from importlib import import_module
from typing import Any

_WHERE = {
    "Base": "cell.base",
    "DopedLayer": "cell.surface",
    "Contact": "cell.surface",
    "Surface": "cell.surface",
    "Strip": "cell.patches",
    "Dot": "cell.patches",
    "Rectangle": "cell.patches",
    "Polygon": "cell.patches",
    "Face": "cell.face",
    "UnitCell": "cell.unit_cell",
    "Light": "cell.light",
    "LitRectangle": "cell.masks",
    "HalfPlane": "cell.masks",
    "Spot": "cell.masks",
    "AbsorptionTable": "materials.absorption",
    "read_absorption_csv": "materials.absorption",
    "Mesh": "meshing.mesh",
    "read_mesh": "meshing.imported",
    "check_mesh": "meshing.checkup",
    "Problem": "transport.problem",
    "problem": "transport.build",
    "solve_excess": "analysis.solve",
    "solve_bipolar": "analysis.bipolar",
    "Through": "analysis.terminals",
    "current_voltage": "analysis.curve",
    "series_resistance_two_lights_ohm_cm2": "analysis.series_resistance",
    "contact_current": "analysis.contact_current",
    "collection_probability": "analysis.solve",
    "lateral_losses": "analysis.profiles",
    "Solution": "analysis.solution",
    "Ledger": "analysis.ledger",
    "write_fields": "files.fields",
    "write_table": "files.tables",
    "sweep": "studies.sweep",
    "best_point": "studies.best",
    "changed": "studies.paths",
    "known_paths": "studies.paths",
    "view": "output.window",
    "plot_sweep": "output.plots",
    "plot_curve": "output.power",
    "plot_losses": "output.power",
    "plot_map": "output.maps",
    "plot_line": "output.plots",
    "plot_lateral_losses": "output.plots",
    "InputError": "errors",
    "MeshError": "errors",
    "SolverError": "errors",
    "BalanceError": "errors",
    "SweepInterrupted": "errors",
    "ModelWarning": "errors",
    "FemCarriersError": "errors",
}

__all__ = list(_WHERE)
__version__ = "0.1.0"


def __getattr__(name: str) -> Any:
    if name not in _WHERE:
        raise AttributeError(f"module 'fem_carriers' has no attribute {name!r}")
    value = getattr(import_module(f".{_WHERE[name]}", __name__), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted([*globals(), *__all__])
