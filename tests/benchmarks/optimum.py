"""The optimum of pitch and finger width by `optimum`, against a brute-force map of the same cell.

Run: ``python tests/benchmarks/optimum.py [POINTS]`` (default 13 pitches × 11 widths; several minutes). Passes if the
search took at most 25 evaluations, and the top of the map (a bicubic spline through it, in logarithms) is within the
bars of value and place.
"""

from __future__ import annotations

import sys
import time

import numpy as np
from scipy.interpolate import RectBivariateSpline

import fem_carriers as fc
from fem_carriers.studies.optimum import optimum

PITCH, WIDTH = "pitch_um", "front.finger.width_um"
RANGES = {PITCH: (500.0, 3000.0), WIDTH: (10.0, 60.0)}
STEP_UM = 2.0


def described() -> fc.UnitCell:
    """Fingers of a rather resistive paste on a lightly diffused front, lines on the rear."""
    wafer = fc.Base("p", resistivity_ohm_cm=0.9, thickness_um=150, lifetime_us=400)
    layer, metal = fc.DopedLayer("n", 130), fc.Contact("front", 6)
    front = fc.Face(
        fc.Surface(J0_fA_per_cm2=28, layer=layer), [fc.Strip("finger", width_um=28, J0_fA_per_cm2=750, contact=metal)]
    )
    line = fc.Strip("line", width_um=45, J0_fA_per_cm2=450, contact=fc.Contact("rear", 1))
    rear = fc.Face(fc.Surface(J0_fA_per_cm2=9), [line])
    light = fc.Light.sunlight(reflectance=0.02, path="lambertian")
    return fc.UnitCell(wafer, pitch_um=1200, front=front, rear=rear, light=light)


def main(points: int) -> int:
    """Map, search, compare."""
    cell = described()
    begun = time.perf_counter()
    found = optimum(cell, RANGES, first_step_um=STEP_UM, progress=False)
    search_s = time.perf_counter() - begun
    print(found, f"{search_s:.0f} s", sep="\n", flush=True)
    axes = {PITCH: np.geomspace(*RANGES[PITCH], points), WIDTH: np.geomspace(*RANGES[WIDTH], points - 2)}
    table = fc.sweep(cell, axes, compute=fc.current_voltage, first_step_um=STEP_UM, progress=False)
    values = table["efficiency_percent"].to_numpy().reshape(points, points - 2)
    pitch, width, best = top_of_map(*axes.values(), values)
    print(f"map of {values.size}: {best:.4f} % at pitch {pitch:.1f} µm, width {width:.2f} µm")
    misses = {PITCH: pitch - found.location[PITCH], WIDTH: width - found.location[WIDTH]}
    good = abs(best - found.value) <= found.value_bar and len(found.table) <= 25
    good &= all(abs(miss) <= found.location_bar[name] for name, miss in misses.items())
    print("within the bars" if good else "OUTSIDE of the bars", misses, best - found.value)
    return 0 if good else 1


def top_of_map(pitches: np.ndarray, widths: np.ndarray, values: np.ndarray) -> tuple[float, float, float]:
    """Place and value of the top of a bicubic spline."""
    spline = RectBivariateSpline(np.log(pitches), np.log(widths), values)
    fine = [np.linspace(np.log(a[0]), np.log(a[-1]), 2001) for a in (pitches, widths)]
    dense = spline(*fine)
    i, j = np.unravel_index(np.argmax(dense), dense.shape)
    return float(np.exp(fine[0][i])), float(np.exp(fine[1][j])), float(dense[i, j])


if __name__ == "__main__":
    sys.exit(main(int(sys.argv[1]) if len(sys.argv) > 1 else 13))
