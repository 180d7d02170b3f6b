"""Human labels from names with units: ``excess_density_per_cm3`` → "excess density (cm⁻³)"."""

from __future__ import annotations

UNITS = {
    "um": "µm", "nm": "nm", "mm": "mm", "cm": "cm", "cm2": "cm²",
    "s": "s", "ms": "ms", "us": "µs", "per_s": "s⁻¹",
    "V": "V", "mV": "mV", "A": "A", "mA": "mA", "K": "K", "percent": "%", "ohm": "Ω",
    "per_cm": "cm⁻¹", "per_cm3": "cm⁻³", "per_cm3_s": "cm⁻³ s⁻¹", "per_cm2_s": "cm⁻² s⁻¹",
    "cm_per_s": "cm/s", "cm2_per_s": "cm²/s", "cm2_per_Vs": "cm²/(V s)", "cm3_per_s": "cm³/s", "V_per_cm": "V/cm",
    "mA_per_cm2": "mA/cm²", "A_per_cm2": "A/cm²", "nA_per_cm2": "nA/cm²", "fA_per_cm2": "fA/cm²",
    "mW_per_cm2": "mW/cm²", "W_per_cm2": "W/cm²",
    "ohm_cm": "Ω cm", "ohm_cm2": "Ω cm²", "mohm_cm2": "mΩ cm²", "ohm_per_sq": "Ω/sq", "ohm_per_cm": "Ω/cm",
}  # fmt: skip
"""What stands at the end of a name, and how it is printed."""

WORDS = {
    "quasi fermi": "quasi-Fermi",
    "jsc": "short-circuit current",
    "voc": "open-circuit voltage",
    "srv": "surface recombination velocity",
    "lost bulk": "bulk",
}
"""Words that are printed otherwise; whole words only."""


def split_name(name: str) -> tuple[str, str]:
    """A name without its unit, and the printed unit (empty if it has none).

    Parameters
    ----------
    name : str
        E.g. ``"front.finger.width_um"``.

    Returns
    -------
    (str, str)
        E.g. ``("front.finger.width", "µm")``.
    """
    for ending in sorted(UNITS, key=len, reverse=True):
        if name.endswith(f"_{ending}"):
            return name[: -len(ending) - 1], UNITS[ending]
    return name, ""


def words(name: str) -> str:
    """A name without its unit, in words."""
    text = f" {split_name(name)[0].replace('_', ' ').replace('.', ' ')} "
    for short, long in WORDS.items():
        text = text.replace(f" {short} ", f" {long} ")
    return text.strip()


def label(name: str) -> str:
    """Axis label of a quantity: words, then the unit in brackets.

    Parameters
    ----------
    name : str
        A name that ends in its unit, e.g. ``"collected_front_mA_per_cm2"``.

    Returns
    -------
    str
        E.g. ``"collected front (mA/cm²)"``; without brackets for a pure number.
    """
    unit = split_name(name)[1]
    return f"{words(name)} ({unit})" if unit else words(name)
