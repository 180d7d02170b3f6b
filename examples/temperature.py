"""How much does the cell lose when it gets warm?

ni² grows steeply with temperature, and with it every J0 (q U = J0 (np/ni² − 1), stated at 25 °C); mobilities fall.
Solved are Δn and the potentials (the bipolar form) from 25 to 75 °C. For scale: where J0 ∝ T^γ exp(−Eg0/kT),

    dVoc/dT = −(Eg0/q − Voc + γ kT/q)/T.

The absorption of silicon stays that of 27 °C, so Jsc does not rise with temperature as it does in reality (about
0.05 %/K). Files go to the folder `results` where the script is run.
"""

from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

import fem_carriers as fc

wafer = fc.Base("p", resistivity_ohm_cm=1.0, thickness_um=160, lifetime_us=500)
emitter = fc.DopedLayer("n", sheet_resistance_ohm_per_sq=110)
finger_metal = fc.Contact("front", contact_resistivity_mohm_cm2=2)
finger = fc.Strip("finger", width_um=30, J0_fA_per_cm2=650, contact=finger_metal)
line = fc.Strip("line", width_um=60, J0_fA_per_cm2=450, contact=fc.Contact("rear", contact_resistivity_mohm_cm2=1))
cell = fc.UnitCell(
    wafer,
    pitch_um=1300,
    front=fc.Face(fc.Surface(J0_fA_per_cm2=25, layer=emitter), [finger]),
    rear=fc.Face(fc.Surface(J0_fA_per_cm2=8), [line]),
    light=fc.Light.sunlight(reflectance=0.02, path="lambertian"),
)

CELSIUS = (25, 35, 50, 65, 75)
QUANTITIES = {"jsc_mA_per_cm2": "Jsc", "voc_V": "Voc", "fill_factor_percent": "FF", "efficiency_percent": "efficiency"}


def relative_slope_percent_per_K(table, column):
    """Slope of a straight line through all points over the value at 25 °C."""
    slope = np.polyfit(table["base.temperature_K"], table[column], 1)[0]
    return 100 * slope / table[column].iloc[0]


def plot_relative(table, picture):
    """Everything in % of its value at 25 °C."""
    figure = Figure(figsize=(6.4, 4.2), layout="constrained")
    ax = figure.subplots()
    for column, name in QUANTITIES.items():
        ax.plot(CELSIUS, 100 * table[column] / table[column].iloc[0], "-o", label=name)
    ax.set_xlabel("temperature (°C)")
    ax.set_ylabel("% of the value at 25 °C")
    ax.grid(alpha=0.25)
    ax.legend(frameon=False)
    figure.savefig(picture, dpi=150)


def main():
    results = Path("results")
    results.mkdir(exist_ok=True)
    kelvin = [273.15 + c for c in CELSIUS]
    table = fc.sweep(cell, {"base.temperature_K": kelvin}, compute=fc.current_voltage)
    units = ("Jsc (mA/cm²)", "Voc (V)", "FF (%)", "efficiency (%)")
    shown = fc.with_bars(table, dict(zip(QUANTITIES, units, strict=True)))
    shown.insert(0, "T (°C)", CELSIUS)
    print(shown.to_string(index=False))
    coefficients = {name: relative_slope_percent_per_K(table, column) for column, name in QUANTITIES.items()}
    print("Temperature coefficients, relative to 25 °C:")
    for name, value in coefficients.items():
        print(f"  {name}: {value:+.3f} %/K")
    fc.write_table(table, results / "temperature.csv")
    plot_relative(table, results / "temperature.png")
    return table, coefficients


if __name__ == "__main__":
    main()
