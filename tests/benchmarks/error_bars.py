"""Do the error bars hold? Problems with known answers and random sizes, each solved to a random target.

    python tests/benchmarks/error_bars.py [number per kind] [--seed N] [--skip-3d]

The truth must lie within value ± bar in at least 98 %, and the bar must on median be no wider than five times the
true error. The answers: conformal map of a strip contact on a slab (classical), through the excess density and as a
resistor; the collection probability of a base and two-point boundary value problems in closed form, on sections and on
thin three-dimensional strips; a contact fed through a sheet (H. H. Berger, J. Electrochem. Soc. 119, 507 (1972)); a
corner contact by the limit of five independent families of meshes; a disc on a slab from a Fredholm equation.
"""

import argparse
import dataclasses
import math
import sys
import time
import warnings
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np
import pandas as pd

import fem_carriers as fc
from fem_carriers.cell.light import Monochromatic
from fem_carriers.constants import ELEMENTARY_CHARGE_C

sys.path += [str(Path(__file__).parents[1]), str(Path(__file__).parents[1] / "verification")]
from simple_cells import BARE_METAL, cell_of, constant_base
from test_terminals import strip_resistance

D = 30.0
METAL = {"layer": fc.DopedLayer("n", 100), "contact": fc.Contact("metal")}
TARGETS_PERCENT = (0.03, 1.0)
SMOOTH_PERCENT = (1e-4, 0.03)
"""Without a singular edge the coarsest meshes already reach more."""


@dataclasses.dataclass(frozen=True)
class Case:
    """A number and its truth.

    Parameters
    ----------
    kind : str
    solve : callable
        Takes a target in percent; gives (value, bar, unknowns).
    truth : float
    uncertain : float
        Relative uncertainty of the truth itself.
    """

    kind: str
    solve: Callable[[float], tuple[float, float, int]]
    truth: float
    uncertain: float = 0.0


def log(draw: np.random.Generator, low: float, high: float) -> float:
    return float(np.exp(draw.uniform(np.log(low), np.log(high))))


def collected(cell: fc.UnitCell, name: str, scale: float, voltage_V: float = 0.0, **limits: int) -> Callable:
    """Collected current or mean density of the excess-carrier form, times a scale."""

    def solve(percent: float) -> tuple[float, float, int]:
        solution = fc.solve_excess(cell, voltage_V, target_error_percent=percent, progress=False, **limits)
        value, bar = solution.headline[name], solution.uncertainty[name]
        return value * scale, bar * abs(scale), solution.problem.space.size

    return solve


def terminal(cell: fc.UnitCell, voltages: dict[str, float], name: str, scale: float) -> Callable:
    """A terminal current of the bipolar form, times a scale."""

    def solve(percent: float) -> tuple[float, float, int]:
        solution = fc.solve_bipolar(cell, voltages, target_error_percent=percent, progress=False)
        return solution.headline[name] * scale, solution.uncertainty[name] * abs(scale), solution.problem.space.size

    return solve


def slab_sizes(draw: np.random.Generator) -> tuple[float, float, float]:
    height = log(draw, 20, 300)
    length = height * log(draw, 0.4, 6)
    return length, height, length * log(draw, 0.03, 0.9)


def strip_of_carriers(draw: np.random.Generator, deep: bool = False) -> Case:
    """Carriers per second from a strip at Δn0 to a sink on the rear: D Δn0 over the resistance of the slab."""
    L, h, a = slab_sizes(draw)
    front = fc.Face(fc.Surface(), [fc.Strip("strip", 2 * a, **METAL)])
    cell = fc.UnitCell(constant_base(D, thickness_um=h), 2 * L, 40.0 if deep else None, front=front, rear=BARE_METAL)
    eq = cell.base.equilibrium()
    density = (-(eq.n0 + eq.p0) + math.sqrt((eq.n0 + eq.p0) ** 2 + 4 * eq.ni**2 * math.expm1(0.2 / eq.VT))) / 2
    to_conductance = -1e-3 * (L * 1e-4) / (ELEMENTARY_CHARGE_C * D * density)
    kind = "strip, carriers, 3-D" if deep else "strip, carriers"
    return Case(kind, collected(cell, "collected_metal_mA_per_cm2", to_conductance, 0.2), 1 / strip_resistance(L, h, a))


def strip_of_current(draw: np.random.Generator) -> Case:
    """A resistor: current from a strip to the full rear through a conducting slab."""
    L, h, a = slab_sizes(draw)
    kind = str(draw.choice(["p", "n"]))
    base = constant_base(doping_type=kind, thickness_um=h)
    eq = base.equilibrium()
    conductivity = ELEMENTARY_CHARGE_C * (eq.p0 * eq.mu_p if kind == "p" else eq.n0 * eq.mu_n)
    front = fc.Face(fc.Surface(), [fc.Strip("strip", 2 * a, contact=fc.Contact("front"))])
    cell = fc.UnitCell(base, 2 * L, front=front, rear=fc.Surface(contact=fc.Contact("rear")))
    scale = 1e-3 * L * 1e-4 / (1e-4 * conductivity)
    voltages = {"front": -1e-4, "rear": 0.0}
    return Case(
        "strip, current", terminal(cell, voltages, "current_front_mA_per_cm2", scale), 1 / strip_resistance(L, h, a)
    )


def collection(draw: np.random.Generator, dimension: int = 2) -> Case:
    """Quantum efficiency ∫ α exp(−αx) φ dx of a base behind a full junction, φ of the textbook."""
    from scipy.integrate import quad

    W, length, S = log(draw, 50, 300) * 1e-4, log(draw, 20, 1000) * 1e-4, log(draw, 10, 1e6)
    alpha = log(draw, 50, 2000)
    s = S * length / D
    factor = (s * math.cosh(W / length) + math.sinh(W / length)) / (s * math.sinh(W / length) + math.cosh(W / length))
    phi = lambda x: math.cosh(x / length) - factor * math.sinh(x / length)
    truth = quad(lambda x: alpha * math.exp(-alpha * x) * phi(x), 0, W, epsabs=1e-13, epsrel=1e-12)[0]
    source = Monochromatic(flux_per_cm2_s=1e15, absorption_per_cm=alpha, shaded=False)
    base = constant_base(D, length**2 / D * 1e6, thickness_um=W * 1e4)
    faces = {"front": fc.Surface(**METAL), "rear": fc.Surface(srv_cm_per_s=S)}
    cell = cell_of(base, 50, dimension, light=fc.Light((source,)), **faces)
    scale = 1e-3 / (ELEMENTARY_CHARGE_C * 1e15)
    return Case(f"collection, {dimension}-D", collected(cell, "collected_metal_mA_per_cm2", scale), truth)


def two_surfaces(draw: np.random.Generator, dimension: int = 2) -> Case:
    """Mean Δn of D Δn″ − Δn/τ + αΦ exp(−αx) = 0 between two recombining faces."""
    W, tau, alpha = log(draw, 50, 300) * 1e-4, log(draw, 1, 1000) * 1e-6, log(draw, 50, 3000)
    S1, S2 = log(draw, 1, 1e5), log(draw, 1, 1e5)
    length = math.sqrt(D * tau)
    P = alpha * 1e15 / (D / length**2 - D * alpha**2)  # the particular solution P exp(−αx); D u″ − u/τ = −G
    up, down = lambda x: math.exp((x - W) / length), lambda x: math.exp(-x / length)
    rows = [
        [D / length * up(0) - S1 * up(0), -D / length - S1],
        [-D / length - S2, (D / length - S2) * down(W)],
    ]
    tail = math.exp(-alpha * W)
    a, b = np.linalg.solve(rows, [(D * alpha + S1) * P, (S2 - D * alpha) * P * tail])
    mean = ((a + b) * length * (1 - math.exp(-W / length)) + P * (1 - tail) / alpha) / W
    base = constant_base(D, tau * 1e6, thickness_um=W * 1e4)
    faces = {"front": fc.Surface(srv_cm_per_s=S1), "rear": fc.Surface(srv_cm_per_s=S2)}
    light = fc.Light((Monochromatic(flux_per_cm2_s=1e15, absorption_per_cm=alpha, shaded=False),))
    cell = cell_of(base, 50, dimension, light=light, **faces)
    return Case(f"two surfaces, {dimension}-D", collected(cell, "mean_excess_density_per_cm3", 1.0), mean)


def half_lit(draw: np.random.Generator, dimension: int = 2) -> Case:
    """Share of the carriers at the lit end of a slab between two sinks, lit from x = 0 to a."""
    W, length = log(draw, 50, 500), log(draw, 20, 1000)
    a = draw.uniform(0.2, 0.8) * W
    w, lit = W / length, a / length
    end = (math.cosh(w) - math.cosh(w - lit)) / math.sinh(w) / lit  # ∫0..a sinh((W − x)/L)/sinh(W/L) dx / a
    junctions = {"x_min": fc.Surface(**METAL), "x_max": BARE_METAL}
    light = fc.Light.uniform(1e16, mask=fc.HalfPlane(a))
    base = constant_base(D, (length * 1e-4) ** 2 / D * 1e6, thickness_um=10)
    cell = cell_of(base, W, dimension, sides=junctions, light=light)
    scale = 1e-3 * cell.area_cm2 / (ELEMENTARY_CHARGE_C * 1e16 * a * 1e-4 * 10e-4 * (1 if dimension == 2 else 20e-4))
    return Case(f"half-lit, {dimension}-D", collected(cell, "collected_metal_mA_per_cm2", scale), end)


def fed_contact(draw: np.random.Generator) -> Case:
    """Sheet and contact in series, fed from one side: Rs g + √(ρc Rs) coth(d/LT), ρc over Rs from 1 to 100 µm²."""
    sheet, d, gap = log(draw, 20, 500), log(draw, 5, 100), log(draw, 20, 200)
    rho = sheet * (log(draw, 0.1, 3) * d * 1e-4) ** 2
    width = d / 2 + gap + 20
    base = constant_base(doping_per_cm3=0.0, ni_per_cm3=1e4, thickness_um=5, material="generic", lifetime_us=1.0)
    patches = [
        fc.Strip("probe", d, contact=fc.Contact("probe", rho * 1e3)),
        fc.Strip("feed", 40, center_um=width, contact=fc.Contact("feed")),
    ]
    cell = fc.UnitCell(base, 2 * width, front=fc.Face(fc.Surface(layer=fc.DopedLayer("p", sheet)), patches))
    transfer = math.sqrt(rho / sheet)
    resistance = sheet * gap * 1e-4 + math.sqrt(rho * sheet) / math.tanh(d * 0.5e-4 / transfer)
    scale = -1e-3 * width * 1e-4 / 1e-4
    return Case(
        "fed contact",
        terminal(cell, {"probe": 1e-4, "feed": 0.0}, "current_probe_mA_per_cm2", scale),
        1 / resistance,
    )


def corner(draw: np.random.Generator) -> Case:
    front = fc.Face(fc.Surface(), [fc.Rectangle("corner", 40, 150, **METAL)])
    base = constant_base(D, 500e-4**2 / D * 1e6)
    cell = fc.UnitCell(base, 1200, 600, front=front, light=fc.Light.uniform(1e16))
    scale = 1e-3 / (ELEMENTARY_CHARGE_C * 1e16 * 180e-4)
    return Case("corner, 3-D", collected(cell, "collected_metal_mA_per_cm2", scale), 0.29221, 1e-4)


def disc(draw: np.random.Generator) -> Case:
    """Radius over resistance and conductivity; a piece of half width a + 12 h stands for the infinite slab."""
    ratio, expected = [(0.25, 0.2227843658), (0.5, 0.1975412163), (1.0, 0.1566630921)][draw.integers(3)]
    h = 100.0
    a = ratio * h
    front = fc.Face(fc.Surface(), [fc.Dot("disc", 2 * a, **METAL)])
    pitch = 2 * (a + 12 * h)
    cell = fc.UnitCell(constant_base(D, thickness_um=h), pitch, pitch, front=front, rear=BARE_METAL)
    eq = cell.base.equilibrium()
    density = (-(eq.n0 + eq.p0) + math.sqrt((eq.n0 + eq.p0) ** 2 + 4 * eq.ni**2 * math.expm1(0.2 / eq.VT))) / 2
    scale = -1e-3 * (pitch * 1e-4) ** 2 / (ELEMENTARY_CHARGE_C * D * density * a * 1e-4)
    return Case("disc, 3-D", collected(cell, "collected_metal_mA_per_cm2", scale, 0.2), 1 / expected)


Kind = Callable[[np.random.Generator], Case]
FLAT: dict[Kind, tuple[float, float]] = {
    strip_of_carriers: TARGETS_PERCENT,
    strip_of_current: TARGETS_PERCENT,
    collection: SMOOTH_PERCENT,
    two_surfaces: SMOOTH_PERCENT,
    half_lit: SMOOTH_PERCENT,
    fed_contact: SMOOTH_PERCENT,
}
DEEP: dict[Kind, tuple[float, float]] = {
    lambda draw: strip_of_carriers(draw, deep=True): (0.1, 2.0),
    lambda draw: collection(draw, 3): SMOOTH_PERCENT,
    lambda draw: two_surfaces(draw, 3): SMOOTH_PERCENT,
    lambda draw: half_lit(draw, 3): SMOOTH_PERCENT,
}


def cases(number: int, seed: int, skip_3d: bool) -> Iterator[tuple[Case, float]]:
    """Random cases with random targets in percent."""
    draw = np.random.default_rng(seed)
    kinds = [(kind, number, targets) for kind, targets in FLAT.items()]
    if not skip_3d:
        kinds += [(kind, max(number // 4, 1), targets) for kind, targets in DEEP.items()]
        kinds += [(corner, 1, (0.1, 1.0)), (disc, max(number // 5, 1), (1.0, 3.0))]
    for kind, count, targets in kinds:
        for _ in range(count):
            yield kind(draw), log(draw, *targets)


def run(number: int, seed: int, *, skip_3d: bool = False) -> pd.DataFrame:
    """One row per case."""
    rows = []
    for case, percent in cases(number, seed, skip_3d):
        start = time.perf_counter()
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", fc.ModelWarning)
            value, bar, unknowns = case.solve(percent)
        error = abs(value - case.truth) / abs(case.truth)
        relative = bar / abs(case.truth)
        rows.append(
            {
                "kind": case.kind,
                "target_percent": percent,
                "unknowns": unknowns,
                "error_percent": 100 * error,
                "bar_percent": 100 * relative,
                "inside": error <= relative + case.uncertain,
                "bar_over_error": relative / max(error, 1e-15),
                "seconds": time.perf_counter() - start,
            }
        )
    return pd.DataFrame(rows)


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("number", type=int, nargs="?", default=12)
    parser.add_argument("--seed", type=int, default=0)
    parser.add_argument("--skip-3d", action="store_true")
    chosen = parser.parse_args()
    table = run(chosen.number, chosen.seed, skip_3d=chosen.skip_3d)
    print(table.to_string(float_format="{:.3g}".format))
    groups = table.groupby("kind").agg(
        cases=("inside", "size"), inside=("inside", "sum"), median_bar_over_error=("bar_over_error", "median")
    )
    print(groups.to_string(float_format="{:.3g}".format))
    share, width = 100 * table.inside.mean(), table.bar_over_error.median()
    print(f"inside: {share:.1f} % of {len(table)} (needed: 98 %); median bar over error: {width:.2f} (at most 5)")
    return int(share < 98 or width > 5)


if __name__ == "__main__":
    raise SystemExit(main())
