"""Field files of the points of a study, named by their content."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from pathlib import Path

from ..files.atomic import write_atomically
from ..files.disks import is_full
from .store import StoreError


def field_folder(store: Path) -> Path:
    """Folder of the field files of a store: ``sweep_fields`` beside ``sweep.sqlite``."""
    return store.with_name(f"{store.stem}_fields")


def keep_fields(folder: Path, files: Mapping[str, bytes]) -> str:
    """Write the field files of a point, each complete or absent, the main one last.

    Parameters
    ----------
    folder : Path
        Made if it is not there.
    files : mapping of str to bytes
        Contents by the end of the name, ``".vtu"`` among them.

    Returns
    -------
    str
        Name of the main file: a digest of its content.

    Raises
    ------
    StoreError
        No room on the disk.
    """
    stem = hashlib.sha256(files[".vtu"]).hexdigest()[:24]
    try:
        folder.mkdir(exist_ok=True)
        for end in sorted(files, key=lambda e: e == ".vtu"):
            _write(folder / f"{stem}{end}", files[end])
    except OSError as error:
        if is_full(error):
            raise StoreError(f"no room for field files in {folder} ({error}); make room and run again") from error
        raise
    return f"{stem}.vtu"


def _write(path: Path, content: bytes) -> None:
    if not path.exists():
        write_atomically(path, lambda p: p.write_bytes(content))
