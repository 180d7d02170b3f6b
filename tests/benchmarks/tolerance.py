"""Percentiles of the efficiency under print scatter by `tolerance`, against brute force with ten times the evaluations.

Run: ``python tests/benchmarks/tolerance.py`` (several minutes). Finger width, contact resistivity, lifetime and the
misalignment of the finger on its heavily doped strip scatter; the whole period is modelled. Brute force solves every
quasi-random sample. Passes if all percentiles agree within 1 % of their values, and within a fifth of the standard
deviation, which is the harder test: efficiencies scatter little.
"""

from __future__ import annotations

import sys

import numpy as np

import fem_carriers as fc
from fem_carriers.studies.sampling import LogNormal, Measured, Normal, samples
from fem_carriers.studies.tolerance import PERCENTILES, tolerance

EFFICIENCY = "efficiency_percent"
INPUTS = {
    "front.finger.width_um": Normal(30, 3, lowest=15, highest=45),
    "front.finger.contact.contact_resistivity_mohm_cm2": LogNormal(2.0, 1.5),
    "base.lifetime_us": Measured([180, 240, 260, 290, 300, 310, 330, 360, 420]),
    "front.finger.center_um": Normal(0, 12, lowest=-35, highest=35),
}
MESH = {"first_step_um": 5.0, "growth": 2.6}


def key_points(problem: fc.Problem) -> object:
    """Short circuit, open circuit and maximum power alone."""
    return fc.current_voltage(problem, [])


def described() -> fc.UnitCell:
    """Fingers on heavily doped strips, which a misplaced finger nearly leaves."""
    wafer = fc.Base("p", resistivity_ohm_cm=1.0, thickness_um=150, lifetime_us=300)
    strip = fc.Strip("strip", width_um=120, J0_fA_per_cm2=120, layer=fc.DopedLayer("n", 60))
    finger = fc.Strip("finger", width_um=30, J0_fA_per_cm2=700, contact=fc.Contact("front", 2))
    front = fc.Face(fc.Surface(J0_fA_per_cm2=25, layer=fc.DopedLayer("n", 140)), [strip, finger])
    rear = fc.Face(
        fc.Surface(J0_fA_per_cm2=9), [fc.Strip("line", 45, J0_fA_per_cm2=450, contact=fc.Contact("rear", 1))]
    )
    light = fc.Light.sunlight(reflectance=0.02, path="lambertian")
    return fc.UnitCell(wafer, pitch_um=1200, front=front, rear=rear, light=light, symmetry="periodic")


def main() -> int:
    """Tolerance, brute force, compare."""
    cell = described()
    found = tolerance(cell, INPUTS, compute=key_points, progress=False, **MESH)
    print(found, flush=True)
    count = 10 * len(found.table)
    rows = samples(list(INPUTS.values()), count, "sobol", seed=77)
    variables = {name: list(column) for name, column in zip(INPUTS, rows.T, strict=True)}
    table = fc.sweep(cell, variables, compute=key_points, paired=True, progress=False, **MESH)
    values = table[EFFICIENCY].dropna().to_numpy()
    brute = np.percentile(values, PERCENTILES)
    off = found.percentiles[EFFICIENCY].to_numpy() - brute
    print(f"brute force, {len(values)} of {count} points:", np.round(brute, 4))
    print("difference:", np.round(off, 4), "standard deviation:", round(float(values.std()), 4))
    print("surrogate at the samples, rms error:", _surrogate_error(found, rows, table))
    relative = np.abs(off) / brute
    good = bool((relative < 0.01).all() and (np.abs(off) < 0.2 * values.std()).all())
    print(f"largest difference {100 * relative.max():.3f} % of the value:", "pass" if good else "FAIL")
    return 0 if good else 1


def _surrogate_error(found, rows, table) -> float:
    """Against every brute-force point."""
    predicted = found.learned.surrogate.mean(found.scatter.with_design(rows))
    return float(np.sqrt(np.nanmean((predicted - table[EFFICIENCY].to_numpy()) ** 2)))


if __name__ == "__main__":
    sys.exit(main())
