"""Time to an error of 0.1 %: the package against a uniform mesh and against a general-purpose library.

    python tests/benchmarks/compare.py                   # everything; a Markdown table at the end
    python tests/benchmarks/compare.py corner curves     # some: wide, narrow, corner, curves, sweep
    python tests/benchmarks/compare.py --references      # how the true values were obtained
    python tests/benchmarks/compare.py --threads 2       # wall time on two threads instead of processor time on one

(a) is what a careful person writes first: linear elements of one size, scikit-fem, SciPy's direct solver. Where it
cannot reach 0.1 % its time is extrapolated by the observed orders of error and time, and the table says so. (b) is
ngsolve with quadratic elements, its adaptive loop and the fastest of its solvers; skipped where it is not installed.
For comparison, the same library with cubic elements on anisotropic layers along the singular edges, set up by hand.

The package stops when its own error bar is below 0.1 %. (a) and (b) have no bar: their time is that of the first mesh
from which on the error, known by hindsight, stays below; "package, by hindsight" is the package measured in that way.
Contenders alternate within one process; times are medians, ratios what to trust.
"""

from __future__ import annotations

import argparse
import dataclasses
import math
import os
import statistics
import sys
import time
import warnings
from collections.abc import Callable
from typing import Any

TARGET = 0.1
UNIFORM_3D = (0.4, 0.28, 0.2, 0.14)
UNIFORM_2D = {"fingers on a full layer": (1, 2, 3), "interdigitated rear": (1, 2, 3)}
SOLVERS = ("pardiso", "sparsecholesky", "bddc", "multigrid")


@dataclasses.dataclass(frozen=True)
class Row:
    """One line of the table; error and bar in percent, `times` how many times longer than the package."""

    problem: str
    contender: str
    unknowns: float
    error: float
    seconds: float
    times: float = math.nan
    note: str = ""


class Clock:
    """Processor or wall seconds."""

    def __init__(self, threads: int) -> None:
        self.now = time.process_time if threads == 1 else time.perf_counter

    def of(self, action: Callable[[], Any]) -> tuple[float, Any]:
        start = self.now()
        result = action()
        return self.now() - start, result


def first_to_stay(points: list[tuple[float, float, float]]) -> tuple[float, float, float] | None:
    """Of (unknowns, error, seconds) the first from which on the error stays below the target."""
    good = None
    for point in reversed(points):
        if point[1] > TARGET:
            break
        good = point
    return good


def uniform_row(name: str, points: list[tuple[float, float, float]]) -> Row:
    """(a) at the target: measured, or extrapolated from the last two meshes."""
    found = first_to_stay(points)
    shown = ", ".join(f"{error:.2g} % in {seconds:.2g} s" for _, error, seconds in points)
    if found is not None:
        return Row(name, "(a) uniform", found[0], found[1], found[2], note=f"measured: {shown}")
    (n1, e1, t1), (n2, e2, t2) = points[-2:]
    error_order, time_order = (-math.log(b / a) / math.log(n2 / n1) for a, b in ((e1, e2), (t2, t1)))
    growth = (e2 / TARGET) ** (1 / error_order)
    note = f"extrapolated from {shown}; error ~ N^-{error_order:.2f}, time ~ N^{time_order:.2f}"
    return Row(name, "(a) uniform", n2 * growth, TARGET, t2 * growth**time_order, note=note)


def linear(short: str, clock: Clock, repeats: int, threads: int) -> list[Row]:
    """One of the three-dimensional problems."""
    import general_library as library
    import uniform_linear
    from compare_cells import linear_problems

    import fem_carriers as fc

    problem = linear_problems()[short]

    def package() -> tuple[int, float, float]:
        solution = fc.solve_excess(problem.cell, target_error_percent=TARGET, progress=False)
        share, bar = solution.ledger.share("metal"), solution.uncertainty["collected_metal_mA_per_cm2"]
        bar_percent = 100 * bar / solution.collected_mA_per_cm2["metal"]
        return solution.problem.space.size, 100 * abs(share / problem.truth - 1), bar_percent

    def other(options: dict[str, Any]) -> tuple[int, float, float]:
        unknowns, error, busy, wall = library.seconds_to(problem, TARGET, **options)
        return unknowns, error, busy if threads == 1 else wall

    package()  # loads the libraries
    options = None
    if library.available():
        library.threads(threads)
        choices = [{"goal": g, "solver": s} for g in (False, True) for s in (SOLVERS if not g else SOLVERS[:2])]
        tried = [(other(choice), choice) for choice in choices]
        options = min(tried, key=lambda pair: pair[0][2])[1]
    mine, theirs, hindsight = [], [], []
    for _ in range(repeats):
        mine.append(clock.of(package))
        hindsight.append(package_by_hindsight(problem, clock))
        if options is not None:
            theirs.append(other(options))
    ours = statistics.median(seconds for seconds, _ in mine)
    unknowns, error, bar = mine[0][1]
    rows = [Row(problem.name, "package", unknowns, error, ours, 1.0, f"error bar {bar:.2g} %")]
    known = statistics.median(h[2] for h in hindsight)
    rows.append(Row(problem.name, "package, by hindsight", *hindsight[0][:2], known, known / ours))
    if options is None:
        print("ngsolve is not installed: (b) is skipped", flush=True)
    else:
        seconds = statistics.median(t[2] for t in theirs)
        kind = f"{'goal-oriented, ' if options['goal'] else ''}{options['solver']}"
        note = f"{seconds / known:.1f} times the package by hindsight"
        rows.append(Row(problem.name, f"(b) ngsolve, {kind}", *theirs[0][:2], seconds, seconds / ours, note))
        layered = [clock.of(lambda: library.geometric(problem, 3, 5)) for _ in range(repeats)]
        seconds, (n, share) = statistics.median(t for t, _ in layered), layered[0][1]
        error, note = 100 * abs(share / problem.truth - 1), "layers, order and mesh size chosen by hand; no estimate"
        rows.append(Row(problem.name, "ngsolve, cubic on layers", n, error, seconds, seconds / ours, note))
    points = []
    for largest in UNIFORM_3D:
        n, share, busy, wall = uniform_linear.solve(problem, largest)
        points.append((n, 100 * abs(share / problem.truth - 1), busy if threads == 1 else wall))
    row = uniform_row(problem.name, points)
    return [*rows, dataclasses.replace(row, times=row.seconds / ours)]


def package_by_hindsight(problem: Any, clock: Clock) -> tuple[int, float, float]:
    """Unknowns, error and time of all levels up to the first from which on the error stays below the target."""
    import fem_carriers as fc

    points, total, level = [], 0.0, -4.0
    while True:
        seconds, solution = clock.of(lambda at=level: fc.solve_excess(fc.problem(problem.cell, level=at)))
        total += seconds
        points.append(
            (solution.problem.space.size, 100 * abs(solution.ledger.share("metal") / problem.truth - 1), total)
        )
        found = first_to_stay(points)
        if found is not None and (points[-1][1] < 0.5 * TARGET or len(points) > points.index(found) + 1):
            return found
        level += 1.0


def curves(clock: Clock, repeats: int, threads: int) -> list[Row]:
    """The two-dimensional current-voltage curves."""
    import uniform_bipolar as uniform

    import fem_carriers as fc

    rows = []
    for section in (uniform.local_junctions(), uniform.fingers_on_layer(), uniform.interdigitated()):
        fine = fc.current_voltage(fc.problem(section.cell, level=1))
        names = ["jsc_mA_per_cm2", "voc_V", "fill_factor_percent", "maximum_power_mW_per_cm2"]
        truth = {name: fine.summary[name] for name in names}
        worst = lambda values, truth=truth: max(100 * abs(values[n] / t - 1) for n, t in truth.items())
        run = lambda cell=section.cell: fc.current_voltage(cell, target_error_percent=TARGET, progress=False)
        mine = [clock.of(run) for _ in range(repeats)]
        ours, curve = statistics.median(seconds for seconds, _ in mine), mine[0][1]
        bar = max(100 * curve.uncertainty[n] / truth[n] for n in names)
        unknowns = 2 * curve.maximum_power.state.system.space.size
        name = f"curve, {section.name}"
        rows.append(Row(name, "package", unknowns, worst(curve.summary), ours, 1.0, f"error bar {bar:.2g} %"))
        points = []
        for division in UNIFORM_2D.get(section.name, (1, 2, 3, 4)):
            n, values, busy, wall = uniform.curve(section, division)
            points.append((n, worst(values), busy if threads == 1 else wall))
        row = uniform_row(name, points)
        rows.append(dataclasses.replace(row, times=row.seconds / ours))
    return rows


def sweep() -> list[Row]:
    """Twelve pitches of the first curve's cell, AM1.5G, two processes; wall time."""
    import numpy as np

    import fem_carriers as fc

    wafer = fc.Base("p", resistivity_ohm_cm=1.0, thickness_um=160, lifetime_us=500)
    finger = fc.Strip("finger", 30, J0_fA_per_cm2=600, contact=fc.Contact("front", 2))
    line = fc.Strip("line", 60, J0_fA_per_cm2=500, contact=fc.Contact("rear", 1))
    front = fc.Face(fc.Surface(J0_fA_per_cm2=30, layer=fc.DopedLayer("n", 120)), [finger])
    rear = fc.Face(fc.Surface(J0_fA_per_cm2=8), [line])
    light = fc.Light.sunlight(0.03, path="lambertian")
    cell = fc.UnitCell(wafer, pitch_um=1300, front=front, rear=rear, light=light)
    pitches = [float(p) for p in np.geomspace(500, 3000, 12).round(-1)]
    start = time.perf_counter()
    table = fc.sweep(cell, {"pitch_um": pitches}, compute=fc.current_voltage, processes=2)
    seconds = time.perf_counter() - start
    worst = max(100 * (table["error_bar_efficiency_percent"] / table["efficiency_percent"]))
    note = f"wall time, load average {os.getloadavg()[0]:.1f} before"
    return [Row("sweep of 12 pitches, whole curves", "package", math.nan, worst, seconds, 1.0, note)]


def references() -> None:
    """Print what the true values rest on."""
    import general_library as library
    from compare_cells import linear_problems

    import fem_carriers as fc

    for short, problem in linear_problems().items():
        found = [f"stated {problem.truth:.5f}"]
        if library.available():
            for order, layers in ((3, 5), (4, 6)):
                n, share = library.geometric(problem, order, layers)
                found.append(f"ngsolve, order {order}, {layers} layers, {n} unknowns: {share:.5f}")
        solution = fc.solve_excess(fc.problem(problem.cell, level=1.0 if short == "corner" else 0.0))
        found.append(f"package, {solution.problem.space.size} unknowns: {solution.ledger.share('metal'):.5f}")
        print(f"{problem.name}: " + "; ".join(found), flush=True)


def markdown(rows: list[Row], threads: int) -> str:
    kind = "processor seconds on one thread" if threads == 1 else f"wall seconds on {threads} threads"
    lines = [f"| problem | by | unknowns | error % | {kind} | times longer | |", "|---|---|---|---|---|---|---|"]
    for r in rows:
        unknowns = "" if math.isnan(r.unknowns) else f"{r.unknowns:.3g}" if r.unknowns > 1e6 else f"{r.unknowns:.0f}"
        lines.append(
            f"| {r.problem} | {r.contender} | {unknowns} | {r.error:.2g} | {r.seconds:.3g} | {r.times:.3g} | {r.note} |"
        )
    return "\n".join(lines)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("parts", nargs="*", default=["wide", "narrow", "corner", "curves", "sweep"])
    parser.add_argument("--threads", type=int, default=1)
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--references", action="store_true")
    chosen = parser.parse_args()
    if os.environ.get("OMP_NUM_THREADS") != str(chosen.threads):  # libraries read this when they are loaded
        settings = {"OMP_NUM_THREADS": str(chosen.threads), "MKL_NUM_THREADS": str(chosen.threads)}
        os.execve(sys.executable, [sys.executable, *sys.argv], os.environ | settings)
    import fem_carriers as fc

    warnings.simplefilter("ignore", fc.ModelWarning)
    if chosen.references:
        references()
        return
    clock, rows = Clock(chosen.threads), []
    for part in chosen.parts:
        if part == "curves":
            found = curves(clock, chosen.repeats, chosen.threads)
        elif part == "sweep":
            found = sweep()
        else:
            found = linear(part, clock, chosen.repeats, chosen.threads)
        rows += found
        print(markdown(found, chosen.threads), flush=True)
    print(f"\nload average {os.getloadavg()[0]:.1f}, {os.cpu_count()} cores\n\n{markdown(rows, chosen.threads)}")


if __name__ == "__main__":
    main()
