"""Isopotential pH of a probe, from buffers at two or more temperatures."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from controller.calibration.electrode import BufferPoint, CalibrationError, Isopotential
from simulators.constants import ideal_slope_mv

#: temperatures must differ by this much for the isopotential pH to be told
LEAST_TEMPERATURE_SPAN_C = 10.0


@dataclass(frozen=True, slots=True, kw_only=True)
class IsopotentialFit:
    """Where the lines of the temperatures cross: pH and potential, the slope fraction, and standard uncertainties."""

    isopotential: Isopotential
    isopotential_mv: float
    standard_uncertainty_mv: float
    slope_fraction: float
    slope_fraction_standard_uncertainty: float
    chi_square: float
    degrees_of_freedom: int


def fit_isopotential(points: Sequence[BufferPoint]) -> IsopotentialFit:
    """Fit slope fraction, isopotential pH and potential to buffers at two or more temperatures.

    E = E_iso + a k(T) - s k(T) pH with a = s pH_iso is linear in E_iso, a and s. Probe and reference are taken to be at
    the buffer's temperature throughout, at rest.

    Raises:
        CalibrationError: temperatures that span less than 10 °C, fewer than 3 points, one buffer only, or points that
            do not determine the three.
    """
    temperatures = [point.temperature_c for point in points]
    span = max(temperatures) - min(temperatures) if points else 0.0
    if span < LEAST_TEMPERATURE_SPAN_C or len(points) < 3:
        what = f"{len(points)} readings over {span:.1f} °C, allowed: 3 or more over {LEAST_TEMPERATURE_SPAN_C:g} °C"
        raise CalibrationError(what, where="isopotential pH", remedy="Measure two buffers at two temperatures")
    k_mv = np.array([ideal_slope_mv(temperature) for temperature in temperatures])
    ph = np.array([point.ph for point in points])
    deviation = np.array(
        [
            math.hypot(point.standard_uncertainty_mv, k * point.standard_uncertainty_ph)
            for point, k in zip(points, k_mv, strict=True)
        ]
    )
    rows = np.column_stack([np.ones(len(points)), k_mv, -k_mv * ph]) / deviation[:, np.newaxis]
    right = np.array([point.potential_mv for point in points]) / deviation
    scale = np.linalg.norm(rows, axis=0)
    scaled = rows / scale
    if np.linalg.cond(scaled) > 1e8:
        what = "the readings do not separate slope and isopotential pH"
        raise CalibrationError(what, where="isopotential pH", remedy="Measure two buffers at two temperatures")
    inverse = np.linalg.pinv(scaled) / scale[:, np.newaxis]
    offset, product, slope = (float(value) for value in inverse @ right)
    chi_square = float(np.sum((right - rows @ np.array([offset, product, slope])) ** 2))
    freedom = len(points) - 3
    widening = max(1.0, chi_square / freedom) if freedom > 0 else 1.0
    covariance = widening * (inverse @ inverse.T)
    gradient = np.array([0.0, 1.0 / slope, -product / slope**2])
    return IsopotentialFit(
        isopotential=Isopotential(
            ph=product / slope,
            standard_uncertainty=math.sqrt(float(gradient @ covariance @ gradient)),
            measured=True,
        ),
        isopotential_mv=offset,
        standard_uncertainty_mv=math.sqrt(float(covariance[0, 0])),
        slope_fraction=slope,
        slope_fraction_standard_uncertainty=math.sqrt(float(covariance[2, 2])),
        chi_square=chi_square,
        degrees_of_freedom=freedom,
    )
