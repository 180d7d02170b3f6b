"""Random two-dimensional designs: how many give a whole current-voltage curve, and why the others are refused.

    python tests/benchmarks/random_designs.py [number] [--hard] [--seed N]

Every parameter is drawn log-uniformly: lifetime 0.1 µs–30 ms, doping 1e14–1e18 cm⁻³, J0 0.1–5000 fA/cm², sheet
resistance 10–5000 Ω/sq, contact resistivity 0.01–100 mΩ·cm², S 0 or 1–1e7 cm/s, 0.01–10 suns, pitch 100–2000 µm, finger
0.5–30 % of it; the temperature uniformly from 275 to 360 K, where all silicon models hold. Front junction with fingers,
or interdigitated rear contacts. `--hard` draws the doping from 1e10 and up to 100 suns. At least 99.5 % (hard: 90 %)
must give a curve; all others must be refused with a named reason.
"""

import argparse
import sys
import time
import warnings
from collections import Counter
from concurrent.futures import ProcessPoolExecutor

import numpy as np

import fem_carriers as fc
from fem_carriers.meshing.fineness import smallest_feature_um

FIRST_STEP = 0.02
"""First step of the mesh over the smallest feature (default 1/400): this tests the solver, not the mesh."""
TEMPERATURES_K = (275.0, 360.0)
"""Where all silicon models used here hold."""


def random_cell(seed: int, hard: bool) -> fc.UnitCell:
    """A unit cell drawn from the ranges above."""
    draw = np.random.default_rng(seed)

    def log(low: float, high: float) -> float:
        return float(np.exp(draw.uniform(np.log(low), np.log(high))))

    kind = str(draw.choice(["p", "n"]))
    base = fc.Base(
        kind,
        doping_per_cm3=log(1e10 if hard else 1e14, 1e18),
        thickness_um=log(50, 300),
        lifetime_us=log(0.1, 3e4),
        temperature_K=draw.uniform(*TEMPERATURES_K),
    )
    light = fc.Light.sunlight(0.03, path="rear_mirror", suns=log(0.01, 100 if hard else 10))
    pitch = log(100, 2000)
    layer = {k: fc.DopedLayer(k, log(10, 5000)) for k in "pn"}
    opposite = {"p": "n", "n": "p"}[kind]

    def surface(name: str, **more: object) -> dict[str, object]:
        bare = more.get("layer") is None and "contact" not in more
        if bare and draw.random() < 0.5:
            return {"srv_cm_per_s": 0.0 if draw.random() < 0.3 else log(1, 1e7)} | more
        return {"J0_fA_per_cm2": log(0.1, 5000)} | more

    def contact(name: str) -> fc.Contact:
        return fc.Contact(name, log(0.01, 100))

    width = pitch * log(0.005, 0.3)
    if draw.random() < 0.7:
        front = fc.Face(
            fc.Surface(**surface("front", layer=layer[opposite])),
            [fc.Strip("finger", width, J0_fA_per_cm2=log(0.1, 5000), contact=contact("front"))],
        )
        rear_layer = layer[kind] if draw.random() < 0.5 else None
        rear = fc.Face(
            fc.Surface(**surface("rear", layer=rear_layer)),
            [fc.Strip("metal", pitch * log(0.005, 1.0), J0_fA_per_cm2=log(0.1, 5000), contact=contact("rear"))],
        )
    else:
        front = fc.Face(fc.Surface(**surface("front")))
        share = draw.uniform(0.3, 0.8)
        gap = draw.uniform(0.02, 0.1)
        emitter, field = share * pitch, (1 - share - gap) * pitch
        rear = fc.Face(
            fc.Surface(**surface("rear")),
            [
                fc.Strip("emitter", emitter, J0_fA_per_cm2=log(0.1, 5000), layer=layer[opposite]),
                fc.Strip("emitter_metal", 0.3 * emitter, J0_fA_per_cm2=log(0.1, 5000), contact=contact("front")),
                fc.Strip("field", field, pitch / 2, J0_fA_per_cm2=log(0.1, 5000), layer=layer[kind]),
                fc.Strip("field_metal", 0.3 * field, pitch / 2, J0_fA_per_cm2=log(0.1, 5000), contact=contact("rear")),
            ],
        )
    return fc.UnitCell(base, pitch, front=front, rear=rear, light=light)


def outcome(job: tuple[int, bool]) -> tuple[int, str]:
    """ "curve", or the named reason of the refusal; anything else is a failure of the test."""
    warnings.simplefilter("ignore", fc.ModelWarning)
    seed, hard = job
    try:
        cell = random_cell(seed, hard)
        problem = fc.problem(cell, first_step_um=FIRST_STEP * smallest_feature_um(cell), growth=3.0)
        curve = fc.current_voltage(problem)
        numbers = curve.table.to_numpy()
        if not np.isfinite(numbers).all() or not 0 < curve.fill_factor_percent < 100:
            return seed, "silent failure"
        _ = curve.maximum_power.solution, curve.short_circuit.solution, curve.open_circuit.solution
        return seed, "curve"
    except fc.SolverError as refused:
        return seed, refused.outcome
    except Exception as error:
        return seed, f"unexpected {type(error).__name__}: {error}"


def run(number: int, hard: bool, seed: int, processes: int = 2) -> Counter[str]:
    """Outcomes of `number` designs, with the seeds of those without a curve."""
    jobs = [(seed + i, hard) for i in range(number)]
    counts: Counter[str] = Counter()
    with ProcessPoolExecutor(processes) as pool:
        for done, (which, text) in enumerate(pool.map(outcome, jobs), 1):
            counts[text] += 1
            if text != "curve":
                print(f"design {which}: {text}")
            if done % 50 == 0:
                print(f"{done} of {number}: {counts['curve']} curves", file=sys.stderr)
    return counts


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("number", type=int, nargs="?", default=1000)
    parser.add_argument("--hard", action="store_true")
    parser.add_argument("--seed", type=int, default=0)
    chosen = parser.parse_args()
    start = time.perf_counter()
    counts = run(chosen.number, chosen.hard, chosen.seed)
    needed = 90.0 if chosen.hard else 99.5
    share = 100 * counts["curve"] / chosen.number
    print(f"{share:.1f} % of {chosen.number} designs gave a curve (needed: {needed} %); {dict(counts)}")
    print(f"{(time.perf_counter() - start) / chosen.number:.2f} s per design")
    unnamed = [k for k in counts if k.startswith(("unexpected", "silent"))]
    return int(share < needed or bool(unnamed))


if __name__ == "__main__":
    raise SystemExit(main())
