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
    "collection_probability": "analysis.collection",
    "lateral_losses": "analysis.profiles",
    "Solution": "analysis.solution",
    "Ledger": "analysis.ledger",
    "write_fields": "files.fields",
    "write_table": "files.tables",
    "sweep": "studies.sweep",
    "best_point": "studies.best",
    "distinguishable": "studies.best",
    "with_bar": "analysis.accuracy",
    "with_bars": "studies.columns",
    "changed": "studies.paths",
    "known_paths": "studies.paths",
    "cell_curve": "grid.cell_curve",
    "cell_at": "grid.cell_curve",
    "GridLayout": "grid.layout",
    "Grid": "grid.layout",
    "interdigitated_layout": "grid.layout",
    "CellOutline": "grid.outline",
    "MetalLine": "grid.metal",
    "Fingers": "grid.parts",
    "Busbars": "grid.parts",
    "Wires": "grid.parts",
    "PerimeterBusbar": "grid.parts",
    "CollectionPoints": "grid.parts",
    "Breaks": "grid.parts",
    "CellCurrent": "grid.cell_current",
    "diode_current": "grid.diodes",
    "current_from_table": "grid.tables",
    "current_from_curve": "grid.tables",
    "Region": "grid.local_laws",
    "EdgeRecombination": "grid.local_laws",
    "PlanDrawing": "grid.drawing",
    "drawing_curve": "grid.drawing_curve",
    "drawing_at": "grid.drawing_curve",
    "InnerSurface": "cell.inner",
    "quantum_efficiency": "analysis.quantum_efficiency",
    "scan_line": "analysis.scan",
    "scan_map": "analysis.scan",
    "currents_under": "analysis.light_currents",
    "plot_quantum_efficiency": "output.response",
    "plot_scan_line": "output.response",
    "plot_scan_map": "output.response",
    "run_study": "studies.study_run",
    "read_results": "studies.study_run",
    "read_study": "studies.study_file",
    "forecast": "studies.forecast",
    "view_field_file": "output.field_file",
    "StoreError": "studies.store",
    "ClusterError": "studies.cluster",
    "Bounds": "analysis.bounds",
    "collected_bounds": "analysis.bounds",
    "Printing": "grid.printing",
    "grid_maximum_power": "grid.operating",
    "unit_cell_laws": "studies.unit_cell_laws",
    "best_layout": "studies.grid_choice",
    "plot_plan": "output.plan",
    "plot_repeat_unit": "output.plan",
    "plot_grid_losses": "output.plan_power",
    "plot_trade": "output.plan_power",
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
