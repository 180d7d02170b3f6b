"""Fast assembly against scikit-fem's own, on bent cells and in fixed patterns."""

from __future__ import annotations

import numpy as np
import pytest
from simple_cells import box_mesh

from fem_carriers.transport import bulk as bulk_module
from fem_carriers.transport.bulk import AffineBulk, MappedBulk, StockBulk
from fem_carriers.transport.pattern import Pattern
from fem_carriers.transport.spaces import Space

AXES = [np.array([0, 10, 25, 45.0]), np.array([0, 12, 30.0]), np.array([0, 4, 12, 20.0])]


def bent(p):
    """No cell stays a parallelogram; in three dimensions faces are no longer flat."""
    x = p / p.max(axis=1, keepdims=True)
    return p + 1e-4 * np.array([np.sin(3 * x[(i + 1) % len(p)] + x[i] * x[-1 - i]) for i in range(len(p))])


def bent_space(kind, order):
    axes = AXES if kind == "hexahedron" else AXES[::2]
    return Space(box_mesh(kind, *axes, move=bent), order)


def same(a, b):
    assert np.abs(a - b).max() <= 1e-13 * np.abs(b).max()


@pytest.mark.parametrize("order", [1, 2])
@pytest.mark.parametrize("kind", ["quad", "hexahedron"])
def test_bent_cells(kind, order):
    """Source of truth: scikit-fem 12, with the same quadrature."""
    space = bent_space(kind, order)
    fast, stock = space.bulk, StockBulk(space.numbering, space.quadrature_order)
    assert isinstance(fast, MappedBulk)
    rng = np.random.default_rng(5)
    scalar, vector = rng.uniform(0.5, 2, (3, *fast.dx.shape)), rng.normal(size=(3, *fast.x_cm.shape))
    u = rng.normal(size=space.size)
    same(fast.x_cm, stock.x_cm)
    same(fast.dx, stock.dx)
    same(fast.values(u), stock.values(u))
    same(fast.gradients(u), stock.gradients(u))
    same(fast.gradients(u + 1j * u[::-1]).imag, stock.gradients(u[::-1]))
    same(fast.load(vector[0], scalar[0]), stock.load(vector[0], scalar[0]))
    same(fast.load(vector[0] * 1j, scalar[0]), stock.load(vector[0] * 1j, scalar[0]))
    terms = {"diffusion": scalar[0], "carried": vector[1], "slope": scalar[1], "along": vector[2]}
    for chosen in (["diffusion"], ["carried"], ["slope"], ["along"], ["carried", "slope"], list(terms)):
        given = {name: terms[name] for name in chosen}
        same(fast.matrix(**given).toarray(), stock.matrix(**given).toarray())


def test_bent_cells_integrate_their_volume():
    """∫ 1 against the cell sizes of the mesh, which scikit-fem integrates."""
    space = bent_space("hexahedron", 2)
    volume = np.asarray(space.bulk.dx).sum()
    assert volume == pytest.approx(space.mesh.volume_cm3(), rel=1e-12)
    assert space.bulk.load(rate=np.ones(space.bulk.dx.shape)).sum() == pytest.approx(volume, rel=1e-12)


@pytest.mark.parametrize("kind", ["tetra", "hexahedron"])
def test_portions_do_not_matter(kind, monkeypatch):
    """One cell at a time gives what all cells at once give."""
    space = Space(box_mesh(kind, *AXES), 2)
    rng = np.random.default_rng(6)
    bulk = AffineBulk(space.numbering, space.quadrature_order)
    D, u = rng.uniform(1, 2, bulk.dx.shape), rng.normal(size=space.size)
    flux = rng.normal(size=bulk.x_cm.shape)
    once = [bulk.matrix(D, flux, D).toarray(), bulk.load(flux, D), bulk.gradients(u)]
    monkeypatch.setattr(bulk_module, "CHUNK_BYTES", 1.0)
    for a, b in zip(once, [bulk.matrix(D, flux, D).toarray(), bulk.load(flux, D), bulk.gradients(u)], strict=True):
        same(a, b)


def test_pattern_holds_every_pair_once(monkeypatch):
    """Against SciPy's sums of duplicate entries, for random cells and portions that split few rows."""
    from scipy.sparse import coo_matrix

    monkeypatch.setattr("fem_carriers.transport.pattern.CHUNK_ENTRIES", 50)
    rng = np.random.default_rng(7)
    dofs = np.array([rng.choice(40, 6, replace=False) for _ in range(60)])
    pattern = Pattern(dofs, 40)
    local = rng.normal(size=(60, 36))
    data = np.zeros(pattern.entries)
    pattern.add(data, slice(0, 25), local[:25])
    pattern.add(data, slice(25, 60), local[25:])
    rows, columns = np.repeat(dofs, 6, axis=1).ravel(), np.tile(dofs, (1, 6)).ravel()
    expected = coo_matrix((local.ravel(), (rows, columns)), shape=(40, 40)).tocsr()
    expected.sum_duplicates()
    matrix = pattern.matrix(data)
    assert matrix.has_canonical_format
    assert np.array_equal(matrix.indices, expected.indices)
    assert np.array_equal(matrix.indptr, expected.indptr)
    same(matrix.toarray(), expected.toarray())
