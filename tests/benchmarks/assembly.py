"""Re-assembly of all Newton blocks: the fast assembly against scikit-fem's forms, as a ratio in one run.

    python tests/benchmarks/assembly.py

The four blocks of the bipolar form, dFm/dΔn (diffusion, drift, recombination), dFm/df (conductivity), dFM/dΔn (drift,
recombination) and dFM/df (conductivity), with coefficients that vary from point to point, on quadratic elements. Both
use the same quadrature; the fixed pattern is built once beforehand, as in a solution, and its time printed.
"""

import time
from collections.abc import Callable

import numpy as np
import skfem

from fem_carriers.meshing.mesh import Mesh
from fem_carriers.transport.bulk import StockBulk
from fem_carriers.transport.spaces import Space

REPEATS = 3


def bent(cells: skfem.Mesh) -> skfem.Mesh:
    """Points moved so that no cell is a parallelepiped."""
    return type(cells)(cells.p + 0.1 * np.sin(3 * np.roll(cells.p, 1, axis=0)) * cells.p, cells.t)


def meshes() -> dict[str, skfem.Mesh]:
    """Unit cubes."""
    axes = lambda steps: [np.linspace(0, 1, steps + 1)] * 3
    return {
        "P2 tets": skfem.MeshTet.init_tensor(*axes(24)),
        "quadratic hexahedra, parallel to the axes": skfem.MeshHex.init_tensor(*axes(28)),
        "quadratic hexahedra, bent": bent(skfem.MeshHex.init_tensor(*axes(28))),
    }


def seconds(action: Callable[[], object], repeats: int) -> tuple[float, object]:
    """Shortest processor time of a few repeats, and the last result."""
    times = []
    for _ in range(repeats):
        start = time.process_time()
        result = action()
        times.append(time.process_time() - start)
    return min(times), result


def main() -> None:
    """Print one line per mesh."""
    for name, cells in meshes().items():
        space = Space(Mesh(cells), 2)
        fast, stock = space.bulk, StockBulk(space.numbering, space.quadrature_order)
        rng = np.random.default_rng(0)
        D, vector = rng.uniform(1, 2, fast.dx.shape), rng.normal(size=fast.x_cm.shape)
        assert stock.dx.shape == D.shape
        terms = [(D, vector, D), (D,), (None, vector, D), (D,)]
        pattern_s, _ = seconds(lambda bulk=fast: bulk.pattern.entries, 1)
        fast_s, quick = seconds(lambda bulk=fast, terms=terms: [bulk.matrix(*t) for t in terms], REPEATS)
        stock_s, slow = seconds(lambda bulk=stock, terms=terms: [bulk.matrix(*t) for t in terms], 1)
        differ = max(abs(a - b).max() / abs(b).max() for a, b in zip(quick, slow, strict=True))
        print(
            f"{name}: {cells.t.shape[1]} cells, {space.size} unknowns; fast {fast_s:.2f} s, stock {stock_s:.2f} s, "
            f"ratio {stock_s / fast_s:.1f}; pattern {pattern_s:.2f} s once; they differ by {differ:.0e}",
            flush=True,
        )


if __name__ == "__main__":
    main()
