"""What do the lifetime and the surface between fingers have to be for a light-beam scan to look as it was measured?

Junctions lie under the fingers alone; a beam beside a finger is collected the less the farther away it is,

    ∇·(D ∇Δn) − R(Δn) + G = 0,    Δn = 0 under the finger,    U = S Δn between fingers and at the rear,    R = Δn/τ

The lifetime τ, the recombination velocity S, a factor on the reflectance and the diameter of the beam are fitted. The
data are our own: a scan computed on a finer mesh, with noise, written to a file as a measurement would be.

Files go to the folder `results` where the script is run.
"""

from pathlib import Path

import numpy as np

import fem_carriers as fc
from fem_carriers.analysis.scan import scan_line
from fem_carriers.output.fit_plot import plot_fit
from fem_carriers.studies.fit import fit
from fem_carriers.studies.measured import read_measurement

TRUTH = {"base.lifetime_us": 6.0, "front.srv_cm_per_s": 30.0}
REFLECTANCE, TRUE_REFLECTANCE, TRUE_SPOT_UM = 0.30, 0.27, 17.0
NOISE_PERCENT = 0.15
EXTERNAL = "external_quantum_efficiency_percent"


def cell(lifetime_us=20.0, srv_cm_per_s=100.0):
    """Fingers 40 µm wide every 1.6 mm on a thick wafer."""
    wafer = fc.Base("p", doping_per_cm3=1e16, thickness_um=300, lifetime_us=lifetime_us)
    junction = fc.DopedLayer("n", sheet_resistance_ohm_per_sq=90)
    finger = fc.Strip("finger", width_um=40, J0_fA_per_cm2=50, layer=junction, contact=fc.Contact("front"))
    front = fc.Face(fc.Surface(srv_cm_per_s=srv_cm_per_s), [finger])
    light = fc.Light.sunlight(REFLECTANCE)
    return fc.UnitCell(wafer, 1600, front=front, rear=fc.Surface(srv_cm_per_s=1e5), light=light)


def write_scan(path, seed):
    """A scan with noise, as a file from the measurement would be."""
    lit = fc.problem(cell(*TRUTH.values()), level=2)
    scan = scan_line(lit, 0, 400, 51, wavelength_nm=780, spot_diameter_um=TRUE_SPOT_UM, reflectance=TRUE_REFLECTANCE)
    noise = NOISE_PERCENT * np.random.default_rng(seed).normal(size=len(scan))
    scan[EXTERNAL] = np.clip(scan[EXTERNAL] + noise, 0, 100)
    scan["error_percent"] = NOISE_PERCENT
    fc.write_table(scan[["x_um", EXTERNAL, "error_percent"]].round(4), path)


def main(seed=1):
    results = Path("results")
    results.mkdir(exist_ok=True)
    write_scan(results / "finger_scan.csv", seed)
    measured = read_measurement(results / "finger_scan.csv", wavelength_nm=780, spot_diameter_um=20)
    parameters = {
        "base.lifetime_us": (0.1, 1000), "front.srv_cm_per_s": (1, 1e6),
        "reflectance_factor": (0.5, 1.5), "spot_diameter_um": (5, 40),
    }  # fmt: skip
    found = fit(cell(), measured, parameters, level=1)
    print(found)
    fc.write_table(found.table, results / "finger_scan_fit.csv")
    plot_fit(found, results / "finger_scan_fit.png")
    return found


if __name__ == "__main__":
    main()
