"""Light-beam scans: the current as a small spot moves over fingers, contacts, grain boundaries and edges."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from ..cell import checks
from ..errors import Complaints
from .column_response import ColumnResponse
from .operating_point import Given, operating_point, response_of
from .quantum_efficiency import chosen_terminals
from .solution import Solution
from .spot import BeamSpot, Sweep, side_kinds, sweep_over
from .weak_light import make_beams

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from ..transport.problem import Problem

VALUES = ("external_quantum_efficiency_percent", "internal_quantum_efficiency_percent", "shaded_percent")
MOST_COLUMNS = 4_000_000
"""Points of the plan, a few hundred bytes each and about a microsecond per depth."""


def scan_line(
    problem: Given,
    start_um: float | Sequence[float],
    end_um: float | Sequence[float],
    points: int = 201,
    *,
    spot_diameter_um: float,
    spot_shape: str = "gaussian",
    wavelength_nm: float | None = None,
    absorption_per_cm: float | None = None,
    terminal: str | None = None,
    reflectance: Any = None,
    path: str | None = None,
    enters: str | None = None,
    voltage_V: float | Mapping[str, Any] = 0.0,
    form: str = "excess",
) -> pd.DataFrame:
    """Current along a line as a weak spot of light moves over the lit face, per photon in the spot.

    One adjoint solve serves all positions. Beyond mirror planes the spot lights mirror images, beyond real edges
    nothing. The response is that of weak light: a laser of many suns needs its own solution (see `solve_bipolar`).

    Parameters
    ----------
    problem : Problem, UnitCell or Solution
        As for `quantum_efficiency`: a problem in the dark; a solution with its light as bias light.
    start_um, end_um : float or (x, y)
        Ends of the line: x in a cross section, (x, y) in 3-D.
    points : int
    spot_diameter_um : float
        Gaussian: at 1/e² of the peak intensity (ISO 11146-1). In a cross section the spot is a line along y.
    spot_shape : {"gaussian", "top_hat"}
    wavelength_nm, absorption_per_cm : float
        One of the two.
    terminal, reflectance, path, enters, voltage_V, form
        As for `quantum_efficiency`.

    Returns
    -------
    pandas.DataFrame
        distance_um, x_um (and y_um), external_quantum_efficiency_percent (collected per photon of the spot),
        internal_quantum_efficiency_percent (per photon neither shaded nor reflected; NaN where there is none),
        shaded_percent (of the spot: by metal, or beyond an edge).

    Raises
    ------
    InputError, SolverError, BalanceError
    """
    import pandas as pd

    solution, response, spot = prepared_scan(
        "scan_line", problem, BeamSpot(spot_diameter_um, spot_shape), wavelength_nm=wavelength_nm,
        absorption_per_cm=absorption_per_cm, terminal=terminal, reflectance=reflectance, path=path, enters=enters,
        voltage_V=voltage_V, form=form,
    )  # fmt: skip
    ends = _line_ends(solution.problem, start_um, end_um, points)
    share = np.linspace(0, 1, points)
    where = ends[0] + (ends[1] - ends[0]) * share[:, None]
    signals = spot_signals(response, spot, where)
    columns = {"distance_um": share * float(np.linalg.norm(ends[1] - ends[0])), "x_um": where[:, 0]}
    columns |= {"y_um": where[:, 1]} if where.shape[1] == 2 else {}
    return pd.DataFrame(columns | dict(zip(VALUES, signals, strict=True)))


def scan_map(
    problem: Given,
    x_um: Sequence[float],
    y_um: Sequence[float],
    *,
    spot_diameter_um: float,
    spot_shape: str = "gaussian",
    wavelength_nm: float | None = None,
    absorption_per_cm: float | None = None,
    terminal: str | None = None,
    reflectance: Any = None,
    path: str | None = None,
    enters: str | None = None,
    voltage_V: float | Mapping[str, Any] = 0.0,
    form: str = "excess",
) -> pd.DataFrame:
    """Current over a map of a 3-D piece; as `scan_line`, at every pair of the positions given.

    Returns
    -------
    pandas.DataFrame
        One row per position: x_um, y_um and the columns of `scan_line`.

    Raises
    ------
    InputError, SolverError, BalanceError
    """
    import pandas as pd

    solution, response, spot = prepared_scan(
        "scan_map", problem, BeamSpot(spot_diameter_um, spot_shape), wavelength_nm=wavelength_nm,
        absorption_per_cm=absorption_per_cm, terminal=terminal, reflectance=reflectance, path=path, enters=enters,
        voltage_V=voltage_V, form=form,
    )  # fmt: skip
    problems = Complaints("scan_map")
    problems.unless(solution.problem.mesh.dimension == 3, "a cross section", "a 3-D piece", "scan_line")
    axes = [np.atleast_1d(np.asarray(v, dtype=float)) for v in (x_um, y_um)]
    for name, axis in zip(("x_um", "y_um"), axes, strict=True):
        problems.unless(bool(np.isfinite(axis).all()) and axis.size > 0, f"{name} = {axis}", "finite positions")
    problems.raise_if_any()
    where = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 2)
    signals = spot_signals(response, spot, where)
    return pd.DataFrame({"x_um": where[:, 0], "y_um": where[:, 1]} | dict(zip(VALUES, signals, strict=True)))


def prepared_scan(
    what: str, given: Given, spot: BeamSpot, *, wavelength_nm: Any, absorption_per_cm: Any, terminal: str | None,
    reflectance: Any, path: str | None, enters: str | None, voltage_V: Any, form: str,
) -> tuple[Solution, ColumnResponse, BeamSpot]:  # fmt: skip
    """Operating point and response of every point of the plan."""
    solution = operating_point(what, given, voltage_V, form, dark=True)
    problem = solution.problem
    light = problem.light if isinstance(given, Solution) else getattr(given, "light", None)
    beams = make_beams(what, problem, light, wavelength_nm=wavelength_nm, absorption_per_cm=absorption_per_cm,
                       reflectance=reflectance, path=path, enters=enters)  # fmt: skip
    problems = Complaints(what)
    problems.unless(beams.absorption_per_cm.size == 1, "several wavelengths", "one wavelength for a scan")
    plane = problem.lit_planes[beams.source.enters]
    level = abs(plane.inward[-1]) > 1 - 1e-9
    problems.unless(bool(level), "light that does not enter along z", "a lit face at right angles to z")
    problems.raise_if_any()
    response = response_of(solution)
    field = sum(response.field(key) for key in chosen_terminals(what, response, terminal))
    return solution, ColumnResponse(problem, beams, np.asarray(field)), spot


def _line_ends(problem: Problem, start_um: Any, end_um: Any, points: Any) -> tuple[Any, Any]:
    problems = Complaints("scan_line")
    size = problem.mesh.dimension - 1
    ends = []
    for name, value in (("start_um", start_um), ("end_um", end_um)):
        try:
            place = np.atleast_1d(np.asarray(value, dtype=float))
        except (TypeError, ValueError):
            place = np.zeros(0)
        good = place.shape == (size,) and bool(np.isfinite(place).all())
        problems.unless(good, f"{name} = {value!r}", "x in a cross section, (x, y) in 3-D, in µm")
        ends.append(place)
    good = checks.is_number(points) and int(points) == points and points >= 2
    problems.unless(bool(good), f"points = {points!r}", "a whole number of at least 2")
    problems.raise_if_any()
    return ends[0], ends[1]


def spot_signals(response: ColumnResponse, spot: BeamSpot, where: NDArray[np.float64]) -> list[Any]:
    """External, internal and shaded, in percent, at spot centres (n, 1 or 2)."""
    sweeps = [_sweep(response, spot, where[:, i], axis) for i, axis in enumerate("xy"[: where.shape[1]])]
    collected, let_in = _plan(response, sweeps)
    sums = np.array([_under_spot(spot, sweeps, centre, (collected, let_in)) for centre in where])
    external, entering = 100 * sums[:, 0], sums[:, 1]
    passed = 1 - response.beams.reflectance[0]
    shaded = 100 * (1 - entering / passed) if passed > 0 else np.full(len(where), np.nan)
    return [external, external / np.where(entering > 1e-12, entering, np.nan), shaded]


def _sweep(response: ColumnResponse, spot: BeamSpot, centres: Any, axis: str) -> Sweep:
    """Integration points along an axis that all spots reach."""
    points = response.problem.mesh.points_um["xyz".index(axis)]
    breaks = np.concatenate([_grid_lines(response, axis), _outline_positions(response, axis)])
    piece = float(points.min()), float(points.max())
    return sweep_over(piece, side_kinds(response.problem, axis), breaks, centres, spot)


def _grid_lines(response: ColumnResponse, axis: str) -> NDArray[np.float64]:
    """Where cells meet, on grids of boxes; elsewhere the ends of planes inside."""
    if response.probe.table is not None:
        return np.asarray(response.probe.axes["xy".index(axis)] * 1e4)
    cell = response.problem.cell
    planes = cell.inner.values() if cell is not None else ()
    return np.array([p.position_um for p in planes if p.axis == axis], dtype=float)


def _outline_positions(response: ColumnResponse, axis: str) -> NDArray[np.float64]:
    """Corners of the lit area."""
    from shapely import get_coordinates

    return np.unique(np.round(get_coordinates(response.plane.clear)[:, "xy".index(axis)], 9))


def _plan(response: ColumnResponse, sweeps: list[Sweep]) -> tuple[Any, Any]:
    """Collected, and let in, per photon at every integration point of the plan."""
    columns = math.prod(s.at_um.size for s in sweeps)
    problems = Complaints("scan")
    given = f"a spot so small that it takes {columns:.2g} points of the plan"
    problems.unless(columns <= MOST_COLUMNS, given, f"up to {MOST_COLUMNS:g}", "a larger spot, or a smaller scan")
    problems.raise_if_any()
    folded = [np.unique(np.round(s.in_piece_um, 7), return_inverse=True) for s in sweeps]
    there = sweeps[0].there if len(sweeps) == 1 else np.outer(sweeps[0].there, sweeps[1].there)
    if len(sweeps) == 1:
        x = folded[0][0]
        grids = [g[folded[0][1]] for g in response.at(x, np.full_like(x, 5e3))]
    else:
        x, y = np.meshgrid(folded[0][0], folded[1][0], indexing="ij")
        found = [g.reshape(x.shape) for g in response.at(x.ravel(), y.ravel())]
        grids = [g[np.ix_(folded[0][1], folded[1][1])] for g in found]
    return grids[0] * there, grids[1] * there


def _under_spot(
    spot: BeamSpot, sweeps: list[Sweep], centre: NDArray[np.float64], grids: tuple[Any, Any]
) -> list[float]:
    """Averages of the grids over the spot."""
    parts, distances, weights = [], [], []
    for sweep, c in zip(sweeps, centre, strict=True):
        part = slice(*np.searchsorted(sweep.at_um, [c - spot.reach_um, c + spot.reach_um]))
        parts.append(part)
        distances.append(sweep.at_um[part] - c)
        weights.append(sweep.weights_um[part])
    if len(sweeps) == 1:
        light = spot.intensity(np.abs(distances[0])) * weights[0]
    else:
        light = spot.intensity(np.hypot(distances[0][:, None], distances[1])) * np.outer(*weights)
    return [float((light * g[tuple(parts)]).sum() / light.sum()) for g in grids]
