"""What makes a point the same point: a key from every input, the versions, and the code that computes numbers."""

from __future__ import annotations

import dataclasses
import hashlib
import inspect
import json
import textwrap
from collections.abc import Callable, Iterable, Mapping, Sequence
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..cell.patches import BELOW
from ..errors import Complaints
from .paths import CENTER, REPLACES, places_of

if TYPE_CHECKING:
    from ..cell.unit_cell import UnitCell

PACKAGES = ("numpy", "scipy", "scikit-fem")
"""Packages whose version is part of every key."""
CODE = ("constants.py", "units.py", "materials", "cell", "meshing", "transport", "analysis", "studies/columns.py")
"""Files of this package that decide what a number is."""


def digest(value: Any) -> str:
    """SHA-256 of a value's plain form, in hexadecimal; see `plain_form`."""
    text = json.dumps(plain_form(value), sort_keys=True, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()


def point_key(subject: str, values: Mapping[str, Any]) -> str:
    """Key of a point: 32 hexadecimal digits from the digest of what is computed and the values of the variables.

    Whole numbers and floats of the same value give the same key.
    """
    return digest([subject, values])[:32]


@cache
def versions() -> dict[str, str]:
    """Versions of this package and of those that compute, and a digest of the code that decides the numbers."""
    from importlib.metadata import version

    from .. import __version__

    code = hashlib.sha256(b"".join(f.read_bytes() for f in _code_files())).hexdigest()[:16]
    return {"fem_carriers": __version__, "code": code} | {name: version(name) for name in PACKAGES}


def _code_files() -> list[Path]:
    root = Path(__file__).parents[1]
    return [f for place in CODE for f in sorted((root / place).glob("*.py") if "." not in place else [root / place])]


def cell_form(cell: UnitCell, variables: Iterable[str] = ()) -> Any:
    """Plain form of a cell without the inputs at `variables`, and without those which they replace.

    Parameters
    ----------
    cell : UnitCell
    variables : iterable of str
        Paths whose values are stated point by point.

    Returns
    -------
    object
        For `digest`.
    """
    form = plain_form(cell)
    for place in places_of(cell, variables).values():
        owner = form
        for name in _steps(cell, place.node):
            owner = owner[name]
        if place.name in CENTER:
            owner["center_um"][CENTER[place.name]] = "variable"
        else:
            owner |= {name: "variable" for name in (place.name, *REPLACES.get(place.name, ())) if name in owner}
            owner["variables"] = sorted({*owner.get("variables", ()), place.name})
    return form


def _steps(cell: UnitCell, node: Sequence[str]) -> list[Any]:
    """The way to a description through the plain form of the cell."""
    if node[:1] == ("light",):
        return ["light", "sources", int(node[1])]
    if node[:1] not in {("front",), ("rear",)}:
        return list(node)
    patches = [patch.name for patch in getattr(cell, node[0]).patches]
    return [node[0], *(["patches", patches.index(node[1])] if node[1] else ["surface"]), *node[2:]]


def plain_form(value: Any) -> Any:
    """A value in lists, mappings, texts and floats, with everything that tells it from another one.

    Raises
    ------
    InputError
        Something that cannot be recognised again later, such as a lambda.
    """
    if value is None or isinstance(value, bool | str):
        return value
    if value is BELOW:
        return {"taken from": "below"}
    if isinstance(value, int | float):
        return float(value)
    if isinstance(value, Mapping):
        return {str(k): plain_form(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [plain_form(v) for v in value]
    return _form_of_object(value)


def _form_of_object(value: Any) -> Any:
    if hasattr(value, "dtype") and hasattr(value, "tobytes"):
        if value.ndim == 0:
            return plain_form(value.item())
        data = hashlib.sha256(value.tobytes()).hexdigest()
        return {"shape": list(value.shape), "dtype": str(value.dtype), "sha256": data}
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        fields = {f.name: plain_form(getattr(value, f.name)) for f in dataclasses.fields(value)}
        return fields | {"": type(value).__qualname__}
    if isinstance(value, Path):
        return str(value)
    if callable(value):
        return function_form(value)
    problems = Complaints("store")
    problems.add(f"an input of type {type(value).__name__}", "numbers, texts, lists, tables and descriptions")
    problems.raise_if_any()


def function_form(function: Callable[..., Any]) -> Any:
    """A function by its name, and (outside of this package) by its text.

    What it calls is not looked into.

    Raises
    ------
    InputError
        A lambda, or a function that refers to variables around it.
    """
    name = f"{getattr(function, '__module__', '')}.{getattr(function, '__qualname__', repr(function))}"
    if name.startswith("fem_carriers."):
        return {"function": name}
    problems = Complaints("store")
    sound = "<" not in name and getattr(function, "__closure__", None) is None and inspect.isfunction(function)
    given = f"function {name}, which cannot be recognised when a run is resumed"
    problems.unless(sound, given, "a function defined by `def` at the top of a module", "numbers, or no store")
    problems.raise_if_any()
    try:
        text = textwrap.dedent(inspect.getsource(function))
    except OSError:
        text = ""
        problems.add(f"function {name} without source text", "a function defined in a file")
    problems.raise_if_any()
    return {"function": name.removeprefix("__main__."), "source": hashlib.sha256(text.encode()).hexdigest()}
