"""How much memory is left, and a refusal before it runs out."""

from __future__ import annotations

import os
import sys
from pathlib import Path

from ..errors import SolverError

SPARE_SHARE = 0.1
"""Of the available memory that is left to others."""

CONTROL_GROUPS = (
    ("/sys/fs/cgroup", "memory.max", "memory.current"),
    ("/sys/fs/cgroup/memory", "memory.limit_in_bytes", "memory.usage_in_bytes"),
)
"""Folder, limit and use of a container's memory on Linux."""


def available_bytes() -> float:
    """Memory that can be taken without swapping; infinite where the system does not tell.

    On Linux the smaller of what the kernel reports as available and what a container's limit leaves; elsewhere on Unix
    all physical memory; on Windows the available physical memory.
    """
    if sys.platform == "win32":
        return _windows_bytes()
    found = [b for b in (_meminfo_bytes(), _container_bytes()) if b is not None]
    if found:
        return min(found)
    try:
        return float(os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES"))
    except (ValueError, OSError):
        return float("inf")


def check_memory(needed_bytes: float, what: str) -> None:
    """Refuse what would not fit.

    Raises
    ------
    SolverError
        "not enough memory", with what is needed, what is there, and what to try.
    """
    allowed = (1 - SPARE_SHARE) * available_bytes()
    if needed_bytes > allowed:
        raise SolverError(
            "not enough memory",
            f"Needed for {what}: {needed_bytes / 1e9:.3g} GB; allowed is {allowed / 1e9:.3g} GB "
            f"({100 * SPARE_SHARE:.0f} % of the free memory are left to others). Try a larger first_step_um or growth, "
            "order=1, a smaller piece of the pattern, or closing other programs.",
        )


def factor_bytes(unknowns: int, *, two_carriers: bool = False, stock: bool = False) -> float:
    """Memory of the factors of quadratic elements in three dimensions, where it matters: c n^(4/3) entries.

    Fits to tets and hexahedra of 5,000 to 50,000 unknowns, within a fifth: c = 18 for one and 28 for two carriers
    with Pardiso in double precision, c = 40 with SuperLU, which also stores indices.
    """
    entries: float = (40 if stock else 28 if two_carriers else 18) * float(unknowns) ** (4 / 3)
    return entries * (12 if stock else 8)


def _meminfo_bytes() -> float | None:
    try:
        lines = Path("/proc/meminfo").read_text(encoding="ascii").splitlines()
        return next(1024.0 * int(line.split()[1]) for line in lines if line.startswith("MemAvailable"))
    except (OSError, StopIteration, ValueError):
        return None


def _container_bytes() -> float | None:
    """What the limit of a control group leaves (version 2, then 1); None without a limit."""
    for folder, limit, used in CONTROL_GROUPS:
        try:
            numbers = [int(Path(folder, name).read_text(encoding="ascii")) for name in (limit, used)]
            reclaimable = _reclaimable_bytes(Path(folder, "memory.stat"))
        except (OSError, ValueError):  # no such file, or the word "max"
            continue
        return float(numbers[0] - numbers[1] + reclaimable)
    return None


def _reclaimable_bytes(statistics: Path) -> int:
    """File pages that a control group counts as used and gives up when asked."""
    pairs = (line.split() for line in statistics.read_text(encoding="ascii").splitlines())
    return sum(int(value) for name, value in pairs if name == "inactive_file")


def _windows_bytes() -> float:
    import ctypes

    class Status(ctypes.Structure):
        _fields_ = [("length", ctypes.c_uint32), ("load", ctypes.c_uint32)] + [
            (name, ctypes.c_uint64) for name in ("total", "free", "page_total", "page_free", "virtual", "v_free", "ext")
        ]

    status = Status(length=ctypes.sizeof(Status))
    ctypes.windll.kernel32.GlobalMemoryStatusEx(ctypes.byref(status))  # type: ignore[attr-defined]
    return float(status.free)
