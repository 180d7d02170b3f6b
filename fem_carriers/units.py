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
