"""Conversion between the units people type and the inner system cm, s, V, A, K.

Multiply by the constant to get into the inner system, divide to get out:
``thickness_cm = thickness_um * UM``.
"""

UM = 1e-4
"""cm per µm"""
NM = 1e-7
"""cm per nm"""
MM = 0.1
"""cm per mm"""
US = 1e-6
"""s per µs"""
MA = 1e-3
"""A per mA"""
FA = 1e-15
"""A per fA"""
NA = 1e-9
"""A per nA"""
MOHM = 1e-3
"""Ω per mΩ"""

LENGTH_UNITS_CM = {"nm": NM, "um": UM, "mm": MM, "cm": 1.0, "m": 100.0}
"""Length units a mesh file may state, in cm."""

UNIT_TEXTS = {
    "um": "µm", "nm": "nm", "mm": "mm", "cm": "cm", "cm2": "cm²",
    "s": "s", "ms": "ms", "us": "µs", "per_s": "s⁻¹",
    "V": "V", "mV": "mV", "A": "A", "mA": "mA", "K": "K", "percent": "%", "ohm": "Ω",
    "mW": "mW", "mg": "mg", "mW_per_mg": "mW/mg",
    "per_cm": "cm⁻¹", "per_cm3": "cm⁻³", "per_cm3_s": "cm⁻³ s⁻¹", "per_cm2_s": "cm⁻² s⁻¹",
    "cm_per_s": "cm/s", "cm2_per_s": "cm²/s", "cm2_per_Vs": "cm²/(V s)", "cm3_per_s": "cm³/s", "V_per_cm": "V/cm",
    "mA_per_cm2": "mA/cm²", "A_per_cm2": "A/cm²", "nA_per_cm2": "nA/cm²", "fA_per_cm2": "fA/cm²",
    "nA_per_cm": "nA/cm",
    "mW_per_cm2": "mW/cm²", "W_per_cm2": "W/cm²",
    "ohm_cm": "Ω cm", "ohm_cm2": "Ω cm²", "mohm_cm2": "mΩ cm²", "ohm_per_sq": "Ω/sq", "ohm_per_cm": "Ω/cm",
}  # fmt: skip
"""What stands at the end of a name, and how it is printed."""


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
    for ending in sorted(UNIT_TEXTS, key=len, reverse=True):
        if name.endswith(f"_{ending}"):
            return name[: -len(ending) - 1], UNIT_TEXTS[ending]
    return name, ""
