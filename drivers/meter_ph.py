"""A meter that gives only pH: its pH as the potential of an ideal electrode, so that the rest of the program sees mV.

The potential is that of an electrode with the ideal slope and its zero at pH 7, at one stated temperature, so that the
pH which the program makes of it is the meter's own again.
"""

from __future__ import annotations

import math

#: molar gas constant, J/(mol K), and Faraday constant, C/mol: exact since the SI of 2019 (CODATA 2018)
GAS_CONSTANT, FARADAY_CONSTANT = 8.31446261815324, 96485.33212331001
ZERO_CELSIUS_K = 273.15
LOWEST_PH, HIGHEST_PH = -2.0, 16.0


def potential_of_ph_mv(ph: float, temperature_c: float) -> float:
    """Return the potential, mV, of an ideal electrode (zero at pH 7) at a pH and temperature in degrees C."""
    slope_mv = 1000.0 * math.log(10.0) * GAS_CONSTANT * (temperature_c + ZERO_CELSIUS_K) / FARADAY_CONSTANT
    return -slope_mv * (ph - 7.0)
