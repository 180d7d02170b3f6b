"""Fundamental constants (2019 SI, exact; CODATA 2018), in the inner unit system cm, s, V, A, K."""

ELEMENTARY_CHARGE_C = 1.602176634e-19
BOLTZMANN_J_PER_K = 1.380649e-23
PLANCK_J_S = 6.62607015e-34
LIGHT_SPEED_M_PER_S = 299792458.0

STANDARD_TEMPERATURE_K = 298.15
"""Temperature at which J0 is stated (25 °C, IEC 60904-3 standard test conditions)."""


def thermal_voltage_V(temperature_K: float) -> float:
    """kT/q in volts."""
    return BOLTZMANN_J_PER_K * temperature_K / ELEMENTARY_CHARGE_C
