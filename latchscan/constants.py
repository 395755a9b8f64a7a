"""Physical constants in latchscan's inside units (um, V, A, ohm, s, K).

Values of the 2019 SI: the elementary charge and the Boltzmann constant are exact by
definition (BIPM, *The International System of Units*, 9th edition, 2019, table 1).
"""

from __future__ import annotations

ELEMENTARY_CHARGE_C = 1.602176634e-19
BOLTZMANN_J_PER_K = 1.380649e-23
ZERO_CELSIUS_K = 273.15
REFERENCE_TEMPERATURE_K = 300.15
"""Temperature at which technology numbers are given unless they say otherwise (27 C) [K]."""


def thermal_voltage_v(temperature_k: float) -> float:
    """Thermal voltage kT/q [V].

    Examples
    --------
    >>> round(thermal_voltage_v(300.0), 6)
    0.025852
    """
    return BOLTZMANN_J_PER_K * temperature_k / ELEMENTARY_CHARGE_C


def kelvin(temperature_c: float) -> float:
    """Absolute temperature [K] of a temperature in degrees Celsius."""
    return temperature_c + ZERO_CELSIUS_K
