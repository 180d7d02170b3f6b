"""Files that are either complete or absent."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable
from pathlib import Path

from ..errors import Complaints


def target(what: str, path: str | Path, suffixes: tuple[str, ...]) -> Path:
    """The path, if its suffix is one of `suffixes` and its folder exists.

    Raises
    ------
    InputError
    """
    problems = Complaints(what)
    path = Path(path)
    allowed = " or ".join(suffixes)
    problems.unless(
        path.suffix in suffixes, f"path {str(path)!r}", f"a name ending in {allowed}", path.stem + suffixes[0]
    )
    problems.unless(path.parent.is_dir(), f"folder {str(path.parent)!r}", "an existing folder", "create it first")
    problems.raise_if_any()
    return path


def write_atomically(path: Path, write: Callable[[Path], object]) -> Path:
    """Let `write` make a file of that name in a temporary folder beside `path`, then move it into place.

    Other files that `write` makes beside it move first, so that `path` never refers to something absent.

    Parameters
    ----------
    path : Path
    write : callable
        Given the temporary path.

    Returns
    -------
    Path
    """
    with tempfile.TemporaryDirectory(prefix=".writing-", dir=path.parent) as folder:
        write(Path(folder) / path.name)
        for made in sorted(Path(folder).iterdir(), key=lambda p: p.name == path.name):
            os.replace(made, path.parent / made.name)
    return path
