"""Small pieces shared by the tests: a base of constant diffusivity, bare metal, junctions, boxes of any cells."""

from __future__ import annotations

import math

import numpy as np

import fem_carriers as fc
from fem_carriers.constants import thermal_voltage_V

VT = thermal_voltage_V(298.15)
BARE_METAL = fc.Surface(srv_cm_per_s=math.inf)


def junction(terminal: str | None = "junction") -> fc.Surface:
    """A layer of the type opposite to a p-type base, with a contact unless `terminal` is None."""
    return fc.Surface(layer=fc.DopedLayer("n", 100), contact=None if terminal is None else fc.Contact(terminal))


def constant_base(D_cm2_per_s=30.0, lifetime_us=math.inf, **changes) -> fc.Base:
    """A base whose electrons and holes diffuse alike, so that D does not depend on injection; p-type, 1e16, 180 µm."""
    mobility = D_cm2_per_s / VT
    given = {
        "doping_type": "p", "doping_per_cm3": 1e16, "thickness_um": 180.0, "lifetime_us": lifetime_us,
        "mobility_n_cm2_per_Vs": mobility, "mobility_p_cm2_per_Vs": mobility, "ni_per_cm3": 9.65e9, "auger": None,
        "radiative_cm3_per_s": 0.0,
    }  # fmt: skip
    return fc.Base(**given | changes)


def box_mesh(kind: str, *axes_um, move=None) -> fc.Mesh:
    """Cells of one kind on a tensor grid, sides named x_min, x_max, …, z_max; `move` displaces the points (cm)."""
    import skfem

    axes = [np.asarray(a, dtype=float) * 1e-4 for a in axes_um]
    classes = {
        "triangle": skfem.MeshTri1, "quad": skfem.MeshQuad1, "tetra": skfem.MeshTet1, "hexahedron": skfem.MeshHex1,
    }  # fmt: skip
    cells = classes[kind].init_tensor(*axes)
    facets = cells.boundary_facets()
    centre = cells.p[:, cells.facets[:, facets]].mean(axis=1)
    surfaces = {}
    for i, axis in enumerate("xz" if len(axes) == 2 else "xyz"):
        for name, position in ((f"{axis}_min", axes[i][0]), (f"{axis}_max", axes[i][-1])):
            surfaces[name] = facets[np.abs(centre[i] - position) < 1e-9 * np.ptp(axes[i])]
    if move is not None:
        cells = type(cells)(move(cells.p), cells.t)
    return fc.Mesh(cells, surfaces, {"base": np.arange(cells.t.shape[1])})


def cell_of(base, length_um, dimension, **faces) -> fc.UnitCell:
    """A strip of `length_um` in x; in 3-D 20 µm wide in y between mirror planes."""
    return fc.UnitCell(base, 2 * length_um, None if dimension == 2 else 40.0, **faces)


def point(dimension, x_um, z_um) -> list[float]:
    """A point in the middle of such a strip."""
    return [x_um, z_um] if dimension == 2 else [x_um, 10.0, z_um]
