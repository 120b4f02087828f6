"""Physical constants, all from CODATA through ``scipy.constants``; SI."""

from __future__ import annotations

from scipy import constants as codata

BOLTZMANN: float = codata.k
ELEMENTARY_CHARGE: float = codata.e
VACUUM_PERMITTIVITY: float = codata.epsilon_0
OXIDE_PERMITTIVITY: float = 3.9 * VACUUM_PERMITTIVITY
"""Permittivity of silicon dioxide, with the relative permittivity 3.9 of device textbooks."""

SILICON_PERMITTIVITY: float = 11.7 * VACUUM_PERMITTIVITY
"""Permittivity of silicon, with the relative permittivity 11.7 of device textbooks."""

ROOM_TEMPERATURE = 300.15
"""27 °C in kelvin: the temperature at which SPICE takes parameters to be given."""


def thermal_voltage(temperature: float) -> float:
    """UT = kT/q [V] at a temperature in kelvin."""
    return BOLTZMANN * temperature / ELEMENTARY_CHARGE
