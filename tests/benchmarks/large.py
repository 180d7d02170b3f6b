"""Large three-dimensional problems in the excess-carrier form: time, memory and iterations against size.

    python tests/benchmarks/large.py                                  # tets with 0.1, 0.3, 1 and 2 million unknowns
    python tests/benchmarks/large.py tets 0.1 0.3
    python tests/benchmarks/large.py hexahedra 0.03 0.1 0.3 1         # graded: factors, or a refusal by the forecast

The piece is a cube of silicon with uniform generation, a square junction contact on its front and recombination on its
rear. Tets are equal; hexahedra are graded geometrically towards the contact's edges, with equal ratios between
neighbouring steps. Every size runs in a process of its own, whose memory is its own. The last line is the exponent of
processor time against unknowns, and the growth of the iterations between the smallest and the largest problem.
"""

import math
import resource
import subprocess
import sys
import time
import warnings

import numpy as np

import fem_carriers as fc
from fem_carriers.errors import SolverError
from fem_carriers.meshing.mesh import Mesh
from fem_carriers.transport import steady
from fem_carriers.transport.excess import ExcessSystem
from fem_carriers.transport.solver import LinearSolver, one_carrier_solver

WIDTH_CM, CONTACT_CM = 150e-4, 50e-4


def growing(steps: int, ratio: float) -> np.ndarray:
    """From 0 to 1 in steps of which each is `ratio` times the one before."""
    positions = np.concatenate([[0], np.cumsum(ratio ** np.arange(steps))])
    return positions / positions[-1]


def axis_cm(steps: int, ratio: float) -> np.ndarray:
    """From 0 to the full width; equal steps, or steps that grow by `ratio` away from the contact's edge both ways."""
    if ratio == 1:
        return WIDTH_CM * growing(steps, 1.0)
    inner = max(2, round(steps / 2.5))
    left = CONTACT_CM * (1 - growing(inner, ratio)[::-1])
    return np.concatenate([left, CONTACT_CM + (WIDTH_CM - CONTACT_CM) * growing(steps - inner, ratio)[1:]])


def make_problem(kind: str, unknowns: float) -> fc.Problem:
    """A cube with about this many unknowns."""
    from skfem import MeshHex, MeshTet

    steps = 3 * round((unknowns ** (1 / 3) - 1) / 6)
    ratio = 1.0 if kind == "tets" else 2000 ** (1.5 / steps)
    x = axis_cm(steps, ratio)
    depth = WIDTH_CM * (1 - growing(steps, ratio)[::-1])  # fine at the front
    cells = (MeshTet if kind == "tets" else MeshHex).init_tensor(x, x, depth)
    middle = cells.p[:, cells.facets].mean(axis=1)
    front, rear = middle[2] > WIDTH_CM * (1 - 1e-9), middle[2] < 1e-9 * WIDTH_CM
    contact = front & (middle[0] < CONTACT_CM) & (middle[1] < CONTACT_CM)
    named = {"contact": contact, "front": front & ~contact, "rear": rear}
    mesh = Mesh(cells, {n: np.flatnonzero(f) for n, f in named.items()}, {"base": np.arange(cells.t.shape[1])})
    metal = fc.Surface(J0_fA_per_cm2=500, layer=fc.DopedLayer("n", 100), contact=fc.Contact("plus", 1))
    surfaces = {"contact": metal, "front": fc.Surface(J0_fA_per_cm2=10), "rear": fc.Surface(srv_cm_per_s=100)}
    base = fc.Base("p", doping_per_cm3=1e16, thickness_um=WIDTH_CM * 1e4, tau_n0_us=50, tau_p0_us=50)
    light = fc.Light.uniform(1e19)
    return fc.Problem(mesh, {"base": base}, surfaces, light=light, cell_area_cm2=WIDTH_CM**2)


def run(kind: str, unknowns: float) -> str:
    """Solve one problem; unknowns, seconds, bytes per unknown, iterations per solve, factorisations, what came out."""
    made: list[LinearSolver] = []

    def recorded(*arguments: object) -> LinearSolver:
        made.append(one_carrier_solver(*arguments))  # type: ignore[arg-type]
        return made[-1]

    steady.one_carrier_solver = recorded
    before, start = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss, time.perf_counter()
    busy = time.process_time()
    problem = make_problem(kind, unknowns)
    n = problem.space.size
    try:
        state = steady.solve_state(ExcessSystem(problem))
    except SolverError as refusal:
        return f"{n} {time.perf_counter() - start:.1f} refused: {refusal}"
    seconds, busy = time.perf_counter() - start, time.process_time() - busy
    memory = (resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before) * 1024 / n
    share = sum(state.leaving().values()) / state.system.load.sum()
    each = made[0].iterations / max(made[0].solutions, 1)
    return (
        f"{n} {seconds:.1f} {busy:.1f} {memory / 1000:.2f} {each:.1f} {made[0].factorisations} "
        f"{state.outcome.steps} {100 * share:.4f} {state.outcome.residual:.1e}"
    )


def main() -> None:
    """Run every size and print the table."""
    arguments = sys.argv[1:]
    if arguments[:1] == ["one"]:
        warnings.simplefilter("ignore", fc.ModelWarning)
        print(run(arguments[1], float(arguments[2])))
        return
    kind = arguments[0] if arguments else "tets"
    sizes = [float(a) for a in arguments[1:]] or [0.1, 0.3, 1.0, 2.0]
    print(
        "unknowns  seconds  processor seconds  kB per unknown  iterations per solve  factorisations  steps  collected %"
        "  residual"
    )
    rows = []
    for size in sizes:
        command = [sys.executable, __file__, "one", kind, str(size * 1e6)]
        line = subprocess.run(command, capture_output=True, text=True, check=True).stdout.strip()
        print(line, flush=True)
        if "refused" not in line:
            rows.append([float(word) for word in line.split()])
    if len(rows) > 1:
        first, last = rows[0], rows[-1]
        exponent = math.log(last[2] / first[2]) / math.log(last[0] / first[0])
        print(
            f"processor time grows as N^{exponent:.2f}; iterations by a factor of {last[4] / max(first[4], 1e-9):.2f}"
        )


if __name__ == "__main__":
    main()
