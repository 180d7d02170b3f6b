"""Small validators shared by the descriptions; each adds a complaint instead of raising."""

from __future__ import annotations

import dataclasses
import math
import numbers
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from collections.abc import Mapping

    from ..errors import Complaints

Position = Callable[..., Any]
"""``f(x_um, y_um, z_um)`` on arrays, returning an array; in 2-D y_um is zero."""
Varying = float | Position
"""A number, or a function of position."""


def is_number(value: object) -> bool:
    """True for a real number, NumPy's included, that is not NaN (and not a bool)."""
    return isinstance(value, numbers.Real) and not isinstance(value, bool) and not math.isnan(value)


def positive(
    problems: Complaints, name: str, value: object, *, inf: bool = False, zero: bool = False, try_: str = ""
) -> bool:
    """Complain unless `value` is a positive number (or zero, or infinite, where allowed)."""
    allowed = "a number of at least 0" if zero else "a number above 0"
    allowed += " (math.inf allowed)" if inf else ", finite"
    good = (
        is_number(value)
        and (value > 0 or (zero and value == 0))  # type: ignore[operator]
        and (inf or math.isfinite(value))  # type: ignore[arg-type]
    )
    return problems.unless(good, f"{name} = {value!r}", allowed, try_)


def varying(problems: Complaints, name: str, value: object, *, inf: bool = False, zero: bool = False) -> bool:
    """Like `positive`, but a function of position passes (its values are checked when they are used)."""
    return callable(value) or positive(
        problems, name, value, inf=inf, zero=zero, try_="a number or f(x_um, y_um, z_um)"
    )


def finite(problems: Complaints, name: str, value: object) -> bool:
    """Complain unless `value` is a finite number."""
    good = is_number(value) and math.isfinite(value)  # type: ignore[arg-type]
    return problems.unless(good, f"{name} = {value!r}", "a finite number")


def pair(problems: Complaints, name: str, value: object) -> bool:
    """Complain unless `value` is a pair of finite numbers."""
    good = isinstance(value, tuple | list) and len(value) == 2 and all(is_number(v) and math.isfinite(v) for v in value)
    return problems.unless(good, f"{name} = {value!r}", "a pair of finite numbers (x, y)")


def one_of(problems: Complaints, name: str, value: object, allowed: tuple[object, ...]) -> bool:
    """Complain unless `value` is one of `allowed`."""
    return problems.unless(value in allowed, f"{name} = {value!r}", " or ".join(map(repr, allowed)))


def exactly_one(problems: Complaints, what: str, given: Mapping[str, object], try_: str = "") -> bool:
    """Complain unless exactly one of the named inputs is not None."""
    present = [f"{k} = {v!r}" for k, v in given.items() if v is not None]
    text = " and ".join(present) if present else f"none of {', '.join(given)}"
    return problems.unless(len(present) == 1, f"{what}: {text}", f"exactly one of {', '.join(given)}", try_)


def name_of(problems: Complaints, what: str, value: object) -> bool:
    """Complain unless `value` is a usable name: an identifier-like string without dots."""
    good = isinstance(value, str) and value.replace("-", "_").isidentifier()
    return problems.unless(good, f"{what} name {value!r}", "letters, digits, _ and -, not starting with a digit")


def stated_repr(self: Any) -> str:
    """``Name(field=value, …)`` of a dataclass, with the fields that differ from their defaults only."""
    shown = []
    for f in dataclasses.fields(self):
        value = getattr(self, f.name)
        default = f.default_factory() if f.default_factory is not dataclasses.MISSING else f.default
        if value != default:
            shown.append(f"{f.name}={value!r}")
    return f"{type(self).__name__}({', '.join(shown)})"
