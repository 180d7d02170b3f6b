"""Fields for any viewer: VTU or XDMF in µm, named surfaces beside it, provenance as JSON."""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from .atomic import target, write_atomically
from .vtk_cells import VtkCells, vtk_cells, vtk_facets

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..analysis.collection import CollectionProbability
    from ..analysis.solution import Solution
    from ..transport.problem import Problem

CELL_FIELDS = ("carrier_flux_mA_per_cm2", "diffusion_length_um")


def write_fields(
    solution: Solution | CollectionProbability, path: str | Path, *, fields: Sequence[str] | None = None
) -> Path:
    """Write fields on the mesh, in µm, for an ordinary viewer.

    Quadratic elements become quadratic cells (triangle6, quad9, tetra10, hexahedron27), so the file holds exactly the
    computed function. A 2-D cross section lies in the x–z plane at y = 0. An infinite diffusion length is written as
    NaN, which viewers can show. Four files at most, each complete or absent:

    - `path`: nodal fields as point data; `carrier_flux_mA_per_cm2` (3 components), `diffusion_length_um` and
      `volume_number` as cell data (an .xdmf keeps its numbers in an .h5 of the same stem);
    - ``<stem>_surfaces.vtu``: the facets of all named surfaces with the same point data, their `surface_number`, and
      per surface a 0/1 field ``is_<name>``;
    - ``<stem>.json``: version, units, ledger and its residual, voltages, and the names behind the numbers.

    Parameters
    ----------
    solution : Solution or CollectionProbability
    path : str or Path
        Ends in .vtu or .xdmf; the folder must exist.
    fields : sequence of str, optional
        Some of the nodal and cell fields; default are all.

    Returns
    -------
    Path
        The field file.

    Raises
    ------
    InputError
        Another suffix, no such folder, or an unknown field.
    """
    path = target("write_fields", path, (".vtu", ".xdmf"))
    names = _chosen(solution, fields)
    nodal = {n: v for n, v in solution.nodal_fields.items() if n in names}
    problem = solution.problem
    cell_data: dict[str, Any] = {n: v for n, v in cell_fields(solution).items() if n in names}
    cell_data["volume_number"] = _volume_numbers(problem)
    write_atomically(path, lambda p: _write_mesh(p, vtk_cells(problem.space), nodal, cell_data))
    if problem.mesh.surfaces:
        cells, numbers = _surface_cells(problem, nodal)
        write_atomically(path.with_name(f"{path.stem}_surfaces.vtu"), lambda p: _write_mesh(p, *cells, numbers))
    text = json.dumps(provenance(solution, [*nodal, *cell_data]), indent=1, allow_nan=False)
    write_atomically(path.with_suffix(".json"), lambda p: p.write_text(text, encoding="utf-8"))
    return path


def _chosen(solution: Solution | CollectionProbability, fields: Sequence[str] | None) -> list[str]:
    known = [*solution.nodal_fields, *CELL_FIELDS]
    names = known if fields is None else [fields] if isinstance(fields, str) else list(fields)
    problems = Complaints("write_fields")
    for name in names:
        problems.unless(name in known, f"field {name!r}", f"some of {', '.join(known)}")
    problems.raise_if_any()
    return names


def cell_fields(solution: Solution | CollectionProbability) -> dict[str, NDArray[np.float64]]:
    """Cell averages by name: the carrier flux, (n_cells, 3), and the diffusion length, (n_cells,), NaN if infinite."""
    flux = solution.carrier_flux_mA_per_cm2
    length = solution.diffusion_length_um
    zero = np.zeros_like(flux[0])
    return {
        "carrier_flux_mA_per_cm2": np.stack([flux[0], zero if len(flux) == 2 else flux[1], flux[-1]], axis=1),
        "diffusion_length_um": np.where(np.isfinite(length), length, np.nan),
    }


def provenance(solution: Solution | CollectionProbability, fields: Sequence[str]) -> dict[str, Any]:
    """What the fields come from, ready for JSON: version, units, ledger, voltages, names behind the numbers."""
    from .. import __version__

    ledger, problem = solution.ledger, solution.problem
    return {
        "package": "fem_carriers",
        "version": __version__,
        "length_unit": "um",
        "units": "stated in the name of every field",
        "axes": "x across the fingers, y along them (0 in a cross section), z from the rear to the front",
        "fields": list(fields),
        "element_order": problem.order,
        "unknowns": problem.space.size,
        "voltage_V": {name: float(v) for name, v in solution.voltage_V.items()},
        "generated_mA_per_cm2": ledger.generated_mA_per_cm2,
        "ledger_mA_per_cm2": [[kind, name, float(v)] for (kind, name), v in ledger.rows.items()],
        "ledger_relative_residual": _json_number(ledger.relative_residual),
        "volume_numbers": {str(i): name for i, name in enumerate(problem.mesh.volumes, 1)},
        "surface_numbers": {str(i): name for i, name in enumerate(problem.mesh.surfaces, 1)},
        "warnings": list(solution.warnings),
    }


def _json_number(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None


def _volume_numbers(problem: Problem) -> NDArray[np.int64]:
    numbers = np.zeros(problem.mesh.cells.t.shape[1], dtype=np.int64)
    for i, cells in enumerate(problem.mesh.volumes.values(), 1):
        numbers[cells] = i
    return numbers


def _surface_cells(problem: Problem, nodal: dict[str, Any]) -> tuple[tuple[VtkCells, dict[str, Any]], dict[str, Any]]:
    """Facets of all named surfaces on their own points, the nodal fields there, and the numbers of the surfaces."""
    surfaces = problem.mesh.surfaces
    everything = vtk_facets(problem.space, np.concatenate(list(surfaces.values())))
    used, nodes = np.unique(everything.nodes, return_inverse=True)
    cells = VtkCells(everything.points_um[used], nodes.reshape(everything.nodes.shape), everything.kind, problem.order)
    number = np.repeat(np.arange(1, len(surfaces) + 1), [len(f) for f in surfaces.values()])
    flags = {f"is_{name}": (number == i).astype(np.int64) for i, name in enumerate(surfaces, 1)}
    return (cells, {n: v[used] for n, v in nodal.items()}), {"surface_number": number} | flags


def _write_mesh(path: Path, cells: VtkCells, point_data: dict[str, Any], cell_data: dict[str, Any]) -> None:
    import meshio

    mesh = meshio.Mesh(
        cells.points_um,
        [(cells.meshio_name, cells.nodes)],
        point_data=point_data,
        cell_data={name: [values] for name, values in cell_data.items()},
    )
    mesh.write(path)
