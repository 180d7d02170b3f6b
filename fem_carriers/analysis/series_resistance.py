"""Series resistance of a whole cell from two light levels."""

from __future__ import annotations

from typing import TYPE_CHECKING

from ..errors import Complaints
from .curve import current_voltage
from .tracer import Tracer

if TYPE_CHECKING:
    from ..transport.problem import Problem


def series_resistance_two_lights_ohm_cm2(problem: Problem, dimmed: float = 0.9) -> float:
    """Lumped series resistance from two light levels, at maximum power of the brighter one.

    With ΔJ = Jsc − J at maximum power, the same ΔJ below the dimmed short-circuit current lies at the voltage V′, and
    Rs = (V′ − V)/(J − J′): the junction is at the same voltage in both, the current through the resistance is not.

    Parameters
    ----------
    problem : Problem
        Under light, with contacts for both carriers.
    dimmed : float
        Factor on the light for the second level, between 0 and 1.

    Returns
    -------
    float
        Ω·cm².

    References
    ----------
    M. Wolf and H. Rauschenbach, Adv. Energy Convers. 3, 455 (1963) [from memory].
    """
    problems = Complaints("series_resistance_two_lights_ohm_cm2")
    problems.unless(0 < dimmed < 1, f"dimmed = {dimmed!r}", "a factor between 0 and 1", "0.9")
    problems.unless(problem.light is not None, "a problem in the dark", "a problem under light")
    problems.raise_if_any()
    assert problem.light is not None
    bright = current_voltage(problem)
    problems.unless(bright.maximum_power is not None, "light that generates nothing", "a problem under light")
    problems.raise_if_any()
    assert bright.maximum_power is not None
    best = bright.maximum_power
    tracer = Tracer(problem.changed(light=problem.light.scaled(dimmed)))
    open_circuit = tracer.open_circuit()
    target = tracer.at(0.0).current_mA_per_cm2 - (bright.jsc_mA_per_cm2 - best.current_mA_per_cm2)
    start = min(best.voltage_V, open_circuit.voltage_V)
    other = tracer.root(start, lambda p: (p.current_mA_per_cm2 - target, p.slope_mA_per_cm2_V))
    return 1e3 * (other.voltage_V - best.voltage_V) / (best.current_mA_per_cm2 - other.current_mA_per_cm2)
