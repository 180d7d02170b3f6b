"""Carriers in a field: how far do they get with it and against it?

In low injection the minority electrons of a p-type slab obey D Δn″ + µE Δn′ − Δn/τ + G = 0. Away from a narrow lit
stripe Δn falls as exp(−|x|/L) with the two roots of D/L² ∓ v/L − 1/τ = 0, v = µ|E|:

    L = 2D / (√(v² + 4D/τ) ∓ v),   − with the drift (downstream), + against it (upstream).

The picture goes to the folder `results` where the script is run.
"""

import math
import warnings
from pathlib import Path

import numpy as np

import fem_carriers as fc

FIELD_V_PER_CM, LIFETIME_US = 8.0, 10.0
UPSTREAM_UM, DOWNSTREAM_UM, STRIPE_UM = 300.0, 1700.0, 20.0


def decay_length_um(solution, start_um, end_um):
    """Distance over which Δn falls by e, from a straight line through ln Δn."""
    line = solution.along_line((start_um, 10), (end_um, 10), points=40)
    slope = np.polyfit(line["distance_um"], np.log(line["excess_density_per_cm3"]), 1)[0]
    return -1 / slope


def main():
    results = Path("results")
    results.mkdir(exist_ok=True)
    base = fc.Base(
        "p", doping_per_cm3=1e16, thickness_um=20, lifetime_us=LIFETIME_US, auger=None, radiative_cm3_per_s=0,
        mobility_n_cm2_per_Vs=1160, mobility_p_cm2_per_Vs=400,
    )  # fmt: skip
    stripe = fc.LitRectangle((UPSTREAM_UM - STRIPE_UM / 2, UPSTREAM_UM + STRIPE_UM / 2))
    cell = fc.UnitCell(
        base,
        2 * (UPSTREAM_UM + DOWNSTREAM_UM),  # the modelled half of it is the slab
        sides={"x_max": fc.Surface(srv_cm_per_s=math.inf)},  # carriers that arrive at the far end leave there
        light=fc.Light.uniform(1e17, mask=stripe),
    )
    # Electrons drift against the field: E towards −x carries them to larger x.
    problem, lengths = fc.problem(cell, level=-2).refined().refined(), []
    for _ in range(2):  # cells shorter than the decay length against the drift, then halved ones
        problem = problem.refined()
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", fc.ModelWarning)  # the first of the two is a little too coarse
            solution = fc.solve_excess(problem, field_V_per_cm=(-FIELD_V_PER_CM, 0.0))
        down = decay_length_um(solution, UPSTREAM_UM + 100, UPSTREAM_UM + 1000)
        lengths.append((down, decay_length_um(solution, UPSTREAM_UM - 20, UPSTREAM_UM - 110)))
    found = lengths[-1]
    bars = [abs(a - b) for a, b in zip(*lengths[-2:], strict=True)]
    D, v, tau = base.equilibrium().Dn, base.mobility_n_cm2_per_Vs * FIELD_V_PER_CM, LIFETIME_US * 1e-6
    root = math.sqrt(v**2 + 4 * D / tau)
    exact = tuple(2 * D / (root - sign * v) * 1e4 for sign in (1, -1))
    for way, length, bar, formula in zip(("downstream", "upstream"), found, bars, exact, strict=True):
        print(f"{way}: decay length {fc.with_bar(length, bar)} µm, formula {formula:.3f} µm")
    line = solution.along_line((0, 10), (UPSTREAM_UM + DOWNSTREAM_UM - 100, 10), points=1001)
    fc.plot_line(line, log=True, picture=results / "drift_field.png")
    return found, exact


if __name__ == "__main__":
    main()
