"""Disks: which are reached through a network, when one is full, and locks that end with the process."""

from __future__ import annotations

import errno
import os
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

NETWORK_KINDS = (
    "nfs", "cifs", "smb", "smbfs", "ncpfs", "afs", "9p", "ceph", "lustre", "gpfs", "beegfs", "glusterfs", "orangefs",
    "pvfs2", "panfs", "webdav", "davfs", "afpfs", "ocfs2", "gfs2", "fuse.",
)  # fmt: skip
"""Beginnings of the names of file systems that other machines can write to at the same time."""
FULL = (errno.ENOSPC, errno.EDQUOT, errno.EFBIG) if hasattr(errno, "EDQUOT") else (errno.ENOSPC, errno.EFBIG)
"""Errors of a disk that is full, of a used-up quota, and of a file that may not grow."""


def is_full(error: BaseException) -> bool:
    """Whether an error says that there is no room on the disk."""
    return isinstance(error, OSError) and error.errno in FULL


def file_system(path: Path) -> str:
    """Name of the file system that holds a path, such as ``ext4``; empty if the system does not tell."""
    if os.name == "nt":
        return _windows_kind(path)
    path, best, kind = path.resolve(), "", ""
    for place, name in _mounts():
        if (path == Path(place) or Path(place) in path.parents) and len(place) >= len(best):
            best, kind = place, name
    return kind


def is_network_disk(path: Path) -> bool:
    """Whether a path lies on a disk that is reached through a network (False if the system does not tell)."""
    return file_system(path).startswith(NETWORK_KINDS)


def _mounts() -> Iterator[tuple[str, str]]:
    """(folder, file system) of everything mounted."""
    table = Path("/proc/self/mountinfo")
    if table.exists():
        for line in table.read_text(encoding="utf-8", errors="replace").splitlines():
            before, _, after = line.partition(" - ")
            yield before.split()[4].replace("\\040", " "), after.split()[0]
    elif sys.platform == "darwin":
        with suppress(OSError):
            for line in subprocess.run(["/sbin/mount"], capture_output=True, text=True).stdout.splitlines():
                place, _, options = line.partition(" on ")[2].rpartition(" (")
                yield place, options.split(",")[0].rstrip(")")


def _windows_kind(path: Path) -> str:
    """ "smb" for a share or a drive letter that stands for one."""
    import ctypes

    drive = str(path.resolve().drive)
    remote = drive.startswith("\\\\") or ctypes.windll.kernel32.GetDriveTypeW(f"{drive}\\") == 4  # type: ignore[attr-defined]
    return "smb" if remote else ""


@contextmanager
def only_one(path: Path) -> Iterator[bool]:
    """Hold a lock on a file while the block runs; False if another process holds it. It ends with the process."""
    with open(path, "ab") as file:
        yield _locked(file.fileno())


def _locked(number: int) -> bool:
    try:
        if os.name == "nt":
            import msvcrt

            msvcrt.locking(number, msvcrt.LK_NBLCK, 1)  # type: ignore[attr-defined]
        else:
            import fcntl

            fcntl.flock(number, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        return False
    return True
