"""Human labels from names with units: ``excess_density_per_cm3`` → "excess density (cm⁻³)"."""

from __future__ import annotations

from ..units import split_name

WORDS = {
    "quasi fermi": "quasi-Fermi",
    "jsc": "short-circuit current",
    "voc": "open-circuit voltage",
    "srv": "surface recombination velocity",
    "lost bulk": "bulk",
    "contact contact": "contact",
}
"""Words that are printed otherwise; whole words only."""


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
