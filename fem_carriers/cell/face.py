"""A face of the cell: a surface with patches on it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from ..errors import Complaints
from . import checks
from .patches import Dot, Patch, Polygon, Rectangle, Strip
from .surface import Surface


@dataclass(frozen=True, repr=False)
class Face:
    """A face: its surface, and patches in the order they are laid on.

    Parameters
    ----------
    surface : Surface
        Where no patch lies. A contact stated here is transparent; metal that shades is a patch with its own contact.
    patches : sequence of Strip, Dot, Rectangle or Polygon
        A later patch may lie wholly inside an earlier one (metal on a wider layer); partial crossing is refused.
    """

    surface: Surface
    patches: Sequence[Patch] = ()

    __repr__ = checks.stated_repr

    def __post_init__(self) -> None:
        problems = Complaints("Face")
        alone = isinstance(self.patches, Strip | Dot | Rectangle | Polygon)
        object.__setattr__(self, "patches", (self.patches,) if alone else tuple(self.patches))
        if not isinstance(self.surface, Surface):
            problems.add(f"surface = {self.surface!r}", "a Surface", "fc.Surface(J0_fA_per_cm2=10)")
        for patch in self.patches:
            if not isinstance(patch, Strip | Dot | Rectangle | Polygon):
                problems.add(f"patch {patch!r}", "a Strip, Dot, Rectangle or Polygon")
        names = [getattr(p, "name", "") for p in self.patches]
        for name in sorted({n for n in names if names.count(n) > 1}):
            problems.add(f"{names.count(name)} patches named {name!r}", "one patch per name on a face")
        problems.raise_if_any()

    def patch(self, name: str) -> Patch:
        """The patch of that name.

        Raises
        ------
        KeyError
            No such patch.
        """
        for patch in self.patches:
            if patch.name == name:
                return patch
        raise KeyError(name)
