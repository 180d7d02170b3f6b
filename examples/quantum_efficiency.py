"""How much of the response does electrical shading cost a rear-contact cell, and at which wavelengths?

Nothing shades the front of an interdigitated rear-contact cell, but holes generated above the base contacts have to
travel sideways to the emitter, and some recombine above the base contact on the way. One solution of the adjoint of

    ∇·(D ∇Δn) − R(Δn) + G = 0,    Δn = 0 on the emitter,    qU = J0 (np/ni² − 1) on all other surfaces

gives the probability φ that a carrier is collected from anywhere, and with it the quantum efficiency ∫ G φ at every
wavelength and the answer of a light beam at every position (C. Donolato, Appl. Phys. Lett. 46, 270 (1985)).

Files go to the folder `results` where the script is run.
"""

from pathlib import Path

import numpy as np

import fem_carriers as fc
from fem_carriers.analysis.quantum_efficiency import quantum_efficiency
from fem_carriers.analysis.scan import scan_line
from fem_carriers.output.response import plot_quantum_efficiency, plot_scan_line

PITCH_UM = 1400
BASE_CONTACT_UM = [200, 500, 800]
WAVELENGTHS_NM = np.arange(320, 1181, 10)
BEAM = {"wavelength_nm": 600, "spot_diameter_um": 20}
EXTERNAL = "external_quantum_efficiency_percent"
RESULTS = Path("results")


def cell(base_contact_um):
    """Half a repeat unit: base contact in the middle of the emitter; n-type wafer, passivated front."""
    wafer = fc.Base("n", resistivity_ohm_cm=3, thickness_um=160, lifetime_us=1000)
    emitter = fc.Surface(
        J0_fA_per_cm2=30, layer=fc.DopedLayer("p", sheet_resistance_ohm_per_sq=100), contact=fc.Contact("emitter")
    )
    region = fc.Strip(
        "base_contact", width_um=base_contact_um, J0_fA_per_cm2=400, opaque_width_um=0,
        layer=fc.DopedLayer("n", sheet_resistance_ohm_per_sq=50), contact=fc.Contact("base"),
    )  # fmt: skip
    light = fc.Light.sunlight(0.02, path="lambertian")
    rear = fc.Face(emitter, [region])
    return fc.UnitCell(wafer, PITCH_UM, front=fc.Surface(J0_fA_per_cm2=6), rear=rear, light=light)


def electrical_shading_percent(scan):
    """Loss of the mean response against that above the middle of the emitter."""
    response = scan[EXTERNAL].to_numpy()
    return 100 * (1 - np.trapezoid(response, scan["x_um"]) / np.ptp(scan["x_um"]) / response[-1])


def main():
    RESULTS.mkdir(exist_ok=True)
    scans, losses = {}, {}
    for width in BASE_CONTACT_UM:
        scan = scan_line(cell(width), 0, PITCH_UM / 2, 141, **BEAM)
        scans[f"{width} µm wide"], losses[width] = scan, electrical_shading_percent(scan)
        print(f"base contact {width} µm wide: electrical shading costs {losses[width]:.2f} % of the response at 600 nm")
    table = quantum_efficiency(cell(BASE_CONTACT_UM[-1]), WAVELENGTHS_NM, target_error_percent=0.1)
    at_600 = table[table["wavelength_nm"] == 600].iloc[0]
    text = fc.with_bar(at_600[EXTERNAL], at_600[f"error_bar_{EXTERNAL}"])
    lost = at_600["lost_rear_base_contact_percent"]
    print(f"{BASE_CONTACT_UM[-1]} µm: {text} % of the photons at 600 nm are collected,", end=" ")
    print(f"{lost:.2f} % recombine above the base contact")
    fc.write_table(table, RESULTS / "quantum_efficiency.csv")
    plot_quantum_efficiency(table, RESULTS / "quantum_efficiency.png")
    plot_scan_line(scans, RESULTS / "quantum_efficiency_scan.png")
    return losses, table


if __name__ == "__main__":
    main()
