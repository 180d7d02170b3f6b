"""Mesh files through meshio: what it overlooks is checked before, and whatever it does wrong becomes a `MeshError`."""

from __future__ import annotations

import contextlib
import io
import warnings
from pathlib import Path
from typing import Any

from ..errors import MeshError

_MUST_CONTAIN = {
    ".msh": (b"$EndNodes", b"$EndElements"),
    ".vtu": (b"</VTKFile>",),
    ".xdmf": (b"</Xdmf>",),
    ".xmf": (b"</Xdmf>",),
}
"""What a complete file contains, by ending."""


def load(path: Path) -> Any:
    """Read a mesh file.

    Parameters
    ----------
    path : Path

    Returns
    -------
    meshio.Mesh
        As read, unchecked.

    Raises
    ------
    MeshError
        If the file is missing, empty, a web page, incomplete or unreadable.
    """
    data = _bytes_of(path)
    _require_complete(path, data)
    return _read_quietly(path, "gmsh" if data.lstrip().startswith(b"$") else None)


def _bytes_of(path: Path) -> bytes:
    try:
        data = path.read_bytes()
    except OSError as error:
        raise MeshError(f"{path}: {error.strerror or error}. Try an existing, readable mesh file.") from error
    if not data.strip():
        raise MeshError(f"{path}: the file is empty. Try exporting the mesh again.")
    return data


def _require_complete(path: Path, data: bytes) -> None:
    start = data[:1000].lstrip().lower()
    if start.startswith(b"<!doctype html") or b"<html" in start:
        raise MeshError(f"{path}: this is a web page (HTML), not a mesh. Try downloading the mesh file itself.")
    ending = path.suffix.lower()
    is_ansys = ending == ".msh" and not data.lstrip().startswith(b"$")  # another format with the same ending
    for mark in () if is_ansys else _MUST_CONTAIN.get(ending, ()):
        if mark not in data:
            raise MeshError(
                f"{path}: the file is incomplete, {mark.decode()} is missing. Try copying or exporting it again."
            )
    if ending == ".vtu" and data.count(b"<Piece") > 1:
        raise MeshError(f"{path}: the file has {data.count(b'<Piece')} pieces; allowed is one. Try merging the pieces.")
    if data.startswith(b"$MeshFormat") and data.split(maxsplit=3)[1:3] in ([b"2.2", b"0"], [b"2", b"0"]):
        _check_msh2_elements(path, data)


def _check_msh2_elements(path: Path, data: bytes) -> None:
    """MSH 2 in text: as many elements as announced, and no node 0, which meshio would take for the last node."""
    section = data.split(b"$Elements", 1)[1].split(b"$EndElements", 1)[0]
    announced, *lines = [line for line in section.splitlines() if line.strip()] or [b"0"]
    if announced.strip() != str(len(lines)).encode():
        raise MeshError(
            f"{path}: {announced.strip().decode(errors='replace')} elements are announced but {len(lines)} are listed. "
            "Try exporting the mesh again."
        )
    for line in lines:
        words = line.split()
        if b"0" in words[3:] and len(words) > 3 and words[2].isdigit() and b"0" in words[3 + int(words[2]) :]:
            raise MeshError(
                f"{path}: element {words[0].decode(errors='replace')} names node 0, which does not exist; nodes count "
                "from 1. Try exporting the mesh again."
            )


def _read_quietly(path: Path, file_format: str | None) -> Any:
    """Read; meshio may print, warn, leave the process or raise anything."""
    import meshio

    said = io.StringIO()
    try:
        with contextlib.redirect_stdout(said), contextlib.redirect_stderr(said), warnings.catch_warnings():
            warnings.simplefilter("ignore")
            warnings.filterwarnings("error", message=".*could not be read to its end.*")
            return meshio.read(path, file_format)
    except (Exception, SystemExit) as error:
        printed = said.getvalue().split("Error: Couldn't read file")[0]
        reason = printed if isinstance(error, SystemExit) else f"{type(error).__name__}: {error}"
        reason = " ".join(reason.replace(str(path), path.name).split())[:300] or "not in the form its name promises"
        raise MeshError(
            f"{path}: the file cannot be read as a mesh ({reason}). Try exporting it again, as "
            "MSH 2.2 text with physical groups and without elements outside of them, or as VTU or XDMF."
        ) from error
