"""How much current does a grain boundary cost, and how far from it does a light-beam scan see it?

A boundary across a cell takes S Δn carriers per area. The response to a small beam dips there, over about a diffusion
length √(Dτ) to either side. One solution of the adjoint of

    ∇·(D ∇Δn) − R(Δn) + G = 0,    Δn = 0 at the front junction,    U = S Δn at the boundary and at the rear

serves every position of the beam (C. Donolato, J. Appl. Phys. 54, 1314 (1983), for the half-space). A thicker wafer
than its diffusion length is taken, so that the contrast is that of the boundary and not of the rear.

Files go to the folder `results` where the script is run.
"""

from pathlib import Path

import numpy as np

import fem_carriers as fc
from fem_carriers.analysis.scan import scan_line
from fem_carriers.cell.inner import InnerSurface
from fem_carriers.output.response import plot_scan_line

VELOCITIES_CM_PER_S = [300, 3e3, 3e4, 1e6]
BEAM = {"wavelength_nm": 940, "spot_diameter_um": 10}
WIDTH_UM, BOUNDARY_UM = 600, 300
INTERNAL = "internal_quantum_efficiency_percent"


def cell(srv_cm_per_s):
    """A piece without fingers in it, 600 µm wide, with a boundary in its middle."""
    wafer = fc.Base("p", resistivity_ohm_cm=1.0, thickness_um=180, lifetime_us=5)
    front = fc.Surface(layer=fc.DopedLayer("n", sheet_resistance_ohm_per_sq=90), contact=fc.Contact("front"))
    boundary = InnerSurface(x_um=BOUNDARY_UM, srv_cm_per_s=srv_cm_per_s)
    light = fc.Light.sunlight(0.05)
    return fc.UnitCell(wafer, 2 * WIDTH_UM, front=front, rear=fc.Surface(srv_cm_per_s=1e4), light=light,
                       inner={"grain_boundary": boundary})  # fmt: skip


def contrast(scan):
    """Depth of the dip in percent of the response far away, and its full width at half of its depth in µm."""
    x, response = scan["x_um"].to_numpy(), scan[INTERNAL].to_numpy()
    dip = 1 - response / response[0]
    half = x[dip > dip.max() / 2]
    return 100 * dip.max(), float(half[-1] - half[0])


def lost_percent(scan):
    """Share of the current under uniform light that the boundary costs the piece."""
    response = scan[INTERNAL].to_numpy()
    return 100 * (1 - np.trapezoid(response, scan["x_um"]) / WIDTH_UM / response[0])


def main():
    results = Path("results")
    results.mkdir(exist_ok=True)
    scans, rows = {}, []
    for velocity in VELOCITIES_CM_PER_S:
        scan = scan_line(fc.problem(cell(velocity), level=2), 0, WIDTH_UM, 301, **BEAM)
        depth, width = contrast(scan)
        scans[f"S = {velocity:,.0f} cm/s"] = scan
        rows.append((velocity, depth, width, lost_percent(scan)))
        print(f"S = {velocity:8.0f} cm/s: contrast {depth:.2f} %, {width:.0f} µm wide; the boundary costs", end=" ")
        print(f"{rows[-1][3]:.2f} % of the current at 940 nm")
    coarser = contrast(scan_line(fc.problem(cell(velocity), level=1), 0, WIDTH_UM, 301, **BEAM))[0]
    print(f"contrast at the last S: {fc.with_bar(depth, abs(depth - coarser))} %, ± the change from a coarser mesh")
    fc.write_table(scan, results / "grain_boundary_scan.csv")
    plot_scan_line(scans, results / "grain_boundary_scan.png", value=INTERNAL)
    return rows, scans


if __name__ == "__main__":
    main()
