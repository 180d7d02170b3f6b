"""A slab between two ideal sinks is lit on one half only: how much arrives at each end?

−D Δn″ = G for 0 < x < W/2 and 0 beyond, Δn = 0 at both ends, no recombination. The density is a parabola in the lit
half and a straight line in the dark half; value and slope are continuous between them, so that 3/4 of the carriers
leave at the lit end and 1/4 at the dark end, and the density is highest at 3W/8 with 9 G W²/(128 D).

The picture goes to the folder `results` where the script is run.
"""

import math
from pathlib import Path

import fem_carriers as fc

WIDTH_UM, RATE_PER_CM3_S = 200, 1e16  # low injection, where D is constant


def main():
    results = Path("results")
    results.mkdir(exist_ok=True)
    base = fc.Base(
        "p", doping_per_cm3=1e17, thickness_um=50, lifetime_us=math.inf, auger=None, radiative_cm3_per_s=0,
        mobility_n_cm2_per_Vs=1200, mobility_p_cm2_per_Vs=400,
    )  # fmt: skip
    sink = fc.Surface(srv_cm_per_s=math.inf)
    cell = fc.UnitCell(
        base,
        pitch_um=2 * WIDTH_UM,  # the modelled half of it is the slab
        sides={"x_min": sink, "x_max": sink},
        light=fc.Light.uniform(RATE_PER_CM3_S, mask=fc.HalfPlane(WIDTH_UM / 2)),
    )
    solution = fc.solve_excess(cell)
    line = solution.along_line((0, 25), (WIDTH_UM, 25), points=201)
    lit, dark = (solution.ledger.share(end) for end in ("x_min", "x_max"))
    top = line.loc[line["excess_density_per_cm3"].idxmax()]
    print(f"lit end {lit:.9f}, dark end {dark:.9f} of the generated carriers")
    (mean,), (bar,) = solution.headline.values(), solution.uncertainty.values()
    print(f"mean density {fc.with_bar(mean, bar)} /cm³")
    print(f"highest density {top['excess_density_per_cm3']:.4e} /cm³ at x = {top['x_um']:g} µm")
    fc.plot_line(line, log=False, picture=results / "half_lit_slab.png")
    return lit, dark, top


if __name__ == "__main__":
    main()
