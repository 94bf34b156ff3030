"""The combined glass electrode and its meter: potential from the pH at the glass, with what spoils it."""

from __future__ import annotations

import math
from dataclasses import dataclass

from simulators.constants import ideal_slope_mv
from simulators.noise import CorrelatedNoise, KeyedNoise

# Fitted to a pH meter manual's table at 20 to 25 °C (0.10 pH at pH 13 and 0.40 at pH 14 in 0.1 and 1 mol/L sodium):
# within 0.03 pH of its seven values. Below the table the error falls tenfold a pH, as the Nicolsky equation has it.
_SODIUM_ERROR_AT_13 = 0.10
_SODIUM_EXPONENT = 0.27
_SODIUM_GROWTH_PER_PH = 0.33
_SODIUM_TABLE_FROM_PH = 12.5


def sodium_error_ph(ph: float, sodium_mol_l: float) -> float:
    """How much too low a glass electrode reads in an alkaline sodium solution, pH (>= 0)."""
    if sodium_mol_l <= 0.0:
        return 0.0
    exponent = _SODIUM_GROWTH_PER_PH * (max(ph, _SODIUM_TABLE_FROM_PH) - 13.0) + min(0.0, ph - _SODIUM_TABLE_FROM_PH)
    return _SODIUM_ERROR_AT_13 * math.pow(sodium_mol_l / 0.1, _SODIUM_EXPONENT) * math.pow(10.0, exponent)


@dataclass(frozen=True, slots=True, kw_only=True)
class ElectrodeTruth:
    """How the probe really is. mV, °C, s; slope as a fraction of the ideal one.

    Drift from the start is the sum of three: a steady one (`drift_mv_min`); one whose pace wanders (`drift_sd_mv_min`,
    keeping its direction for about `drift_correlation_s`), as a reference drifts; and a potential that wanders about
    its mean (`wander_sd_mv`, `wander_correlation_s`).
    """

    slope_fraction: float = 1.0
    isopotential_ph: float = 7.0
    isopotential_mv: float = 0.0
    junction_mv: float = 0.0
    drift_mv_min: float = 0.0
    drift_sd_mv_min: float = 0.0
    drift_correlation_s: float = 600.0
    wander_sd_mv: float = 0.0
    wander_correlation_s: float = 600.0
    noise_sd_mv: float = 0.0
    resolution_mv: float = 0.0
    sodium_error: bool = True
    temperature_offset_c: float = 0.0
    temperature_noise_sd_c: float = 0.0
    temperature_resolution_c: float = 0.1


class Electrode:
    """The probe's signal as the meter shows it.

    Args:
        truth: its properties.
        seed: the world's seed.
        start_s: run time from which drift is counted.
    """

    def __init__(self, truth: ElectrodeTruth, *, seed: int, start_s: float = 0.0) -> None:
        self.truth = truth
        self._start_s = start_s
        self._noise = KeyedNoise(seed, "reading noise")
        self._temperature_noise = KeyedNoise(seed, "temperature noise")
        self._pace = CorrelatedNoise(
            seed, "pace of the drift", sd=truth.drift_sd_mv_min / 60.0, correlation=truth.drift_correlation_s
        )
        self._wander = CorrelatedNoise(
            seed, "wander", sd=truth.wander_sd_mv, correlation=truth.wander_correlation_s, from_zero=True
        )

    def drift_mv(self, at_s: float) -> float:
        """Signal drift since the start."""
        since_s = at_s - self._start_s
        steady_mv = self.truth.drift_mv_min * since_s / 60.0
        return steady_mv + self._pace.integral(since_s) + self._wander.at(since_s)

    def true_potential_mv(self, ph: float, temperature_c: float, at_s: float, *, sodium_mol_l: float = 0.0) -> float:
        """Potential before noise and rounding."""
        truth = self.truth
        if truth.sodium_error:
            ph -= sodium_error_ph(ph, sodium_mol_l)
        slope_mv = truth.slope_fraction * ideal_slope_mv(temperature_c)
        return truth.isopotential_mv - slope_mv * (ph - truth.isopotential_ph) + truth.junction_mv + self.drift_mv(at_s)

    def potential_mv(
        self, ph: float, temperature_c: float, at_s: float, sample_index: int, *, sodium_mol_l: float = 0.0
    ) -> float:
        """Reading number `sample_index`, mV, in whole resolutions."""
        noise_mv = self.truth.noise_sd_mv * self._noise.normal(sample_index)
        potential_mv = self.true_potential_mv(ph, temperature_c, at_s, sodium_mol_l=sodium_mol_l) + noise_mv
        return quantised(potential_mv, self.truth.resolution_mv)

    def temperature_c(self, temperature_c: float, sample_index: int) -> float:
        """The temperature sensor's reading number `sample_index`, °C."""
        truth = self.truth
        noise_c = truth.temperature_noise_sd_c * self._temperature_noise.normal(sample_index)
        return quantised(temperature_c + truth.temperature_offset_c + noise_c, truth.temperature_resolution_c)


def quantised(value: float, resolution: float) -> float:
    """`value` in whole resolutions, the nearest; as it is where `resolution` is 0.

    A resolution that divides 1 evenly (0.1, 0.01) gives the decimal number nearest to the value, not its neighbour.
    """
    if resolution <= 0.0:
        return value
    per_unit = round(1.0 / resolution)
    count = round(value / resolution)
    if per_unit and abs(per_unit * resolution - 1.0) < 1e-12:
        return count / per_unit
    return count * resolution
