"""Integrals over a surface: as scikit-fem's forms give them, on every kind of cell, bent ones and complex rates too."""

from __future__ import annotations

import numpy as np
import pytest
from simple_cells import box_mesh

from fem_carriers.transport.balance import load_form, mass_matrix
from fem_carriers.transport.spaces import Space


@pytest.mark.parametrize("order", [1, 2])
@pytest.mark.parametrize("kind", ["triangle", "quad", "tetra", "hexahedron"])
def test_integrals_over_a_surface_are_those_of_the_stock_forms(kind, order):
    from scipy.sparse import csr_matrix

    axes = [[0, 3, 10], [0, 1, 7, 20]] + ([[0, 5, 6]] if kind in ("tetra", "hexahedron") else [])
    bend = lambda p: p + 2e-5 * np.sin(3e3 * np.roll(p, 1, axis=0)) * (p[0] > 0)
    space = Space(box_mesh(kind, *axes, move=bend), order)
    basis, skin = space.surfaces["x_max"], space.skins["x_max"]
    u = np.random.default_rng(0).normal(size=space.size)
    at_points = np.asarray(basis.interpolate(u))
    assert skin.values(u) == pytest.approx(at_points, abs=1e-13)
    for rate in (at_points**2, at_points + 1j * at_points**3):
        stock = load_form(rate.dtype).assemble(basis, rate=rate)
        assert np.abs(skin.load(rate) - stock).max() < 1e-13 * np.abs(stock).max()
    entries, rows, columns = skin.mass(1 + at_points**2)
    stock = mass_matrix(basis, 1 + at_points**2)
    assert abs(csr_matrix((entries, (rows, columns)), shape=stock.shape) - stock).max() < 1e-13 * abs(stock).max()


def test_surfaces_are_made_when_they_are_used():
    space = Space(box_mesh("quad", [0, 5, 10], [0, 5, 10]), 2)
    assert set(space.surfaces) == {"x_min", "x_max", "z_min", "z_max"}
    assert space.surfaces["z_max"] is space.surfaces["z_max"]
    with pytest.raises(KeyError):
        space.surfaces["lid"]
