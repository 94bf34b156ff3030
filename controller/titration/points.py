"""Accepted points of the curve, and the pH scale that turns potentials into pH."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

from controller.titration.actions import Report
from controller.titration.plan import ProbeCalibration, RunPlan
from simulators.constants import ideal_slope_mv


@dataclass(frozen=True, slots=True, kw_only=True)
class Point:
    """One point: the composition at the glass (as titrant volume) and the potential that belongs to it."""

    number: int
    volume_ml: float
    volume_sd_ml: float
    delivered_ml: float
    potential_mv: float
    potential_sd_mv: float
    ph: float | None
    at_s: float
    settled: bool


class PhScale:
    """pH = isopotential_ph - (E - isopotential_mv)/(slope_fraction x ideal slope); E falls where pH rises."""

    def __init__(self, plan: RunPlan, temperature_c: float) -> None:
        calibration = plan.probe.calibration
        self.known = calibration is not None
        fraction = 1.0 if calibration is None else calibration.slope_fraction
        self.slope_mv = fraction * ideal_slope_mv(temperature_c)
        self._iso_ph = 7.0 if calibration is None else calibration.isopotential_ph
        self._iso_mv = 0.0 if calibration is None else calibration.isopotential_mv

    def ph(self, potential_mv: float) -> float:
        """PH of a potential."""
        return self._iso_ph - (potential_mv - self._iso_mv) / self.slope_mv

    def potential_mv(self, ph: float) -> float:
        """Potential of a pH."""
        return self._iso_mv - (ph - self._iso_ph) * self.slope_mv


def calibration_ph_sd(calibration: ProbeCalibration, ph: float, temperature_c: float) -> float:
    """Standard uncertainty that a calibration gives a pH: of offset, slope and their covariance, and of temperature.

    A line through buffers at another temperature turns about the isopotential pH: an error of it leaves 1 - T buffers /
    T sample (absolute) of itself in the pH.
    """
    per_mv = 1.0 / (calibration.slope_fraction * ideal_slope_mv(temperature_c))
    per_slope = -(ph - calibration.isopotential_ph) / calibration.slope_fraction
    variance = (per_mv * calibration.offset_standard_uncertainty_mv) ** 2
    variance += (per_slope * calibration.slope_fraction_standard_uncertainty) ** 2
    variance += 2.0 * per_mv * per_slope * calibration.slope_offset_covariance_mv
    if calibration.covered is not None:
        turned = 1.0 - ideal_slope_mv(calibration.covered.temperature_c) / ideal_slope_mv(temperature_c)
        variance += (turned * calibration.covered.isopotential_ph_standard_uncertainty) ** 2
    return math.sqrt(max(0.0, variance))


def points_again(points: Sequence[Point], again: Sequence[tuple[float, float]]) -> list[tuple[int, Point]]:
    """The first points after the start with the composition that they are now taken for, and their numbers.

    Args:
        points: of the run, the start first.
        again: composition and its standard deviation, mL, of the first points after the start.
    """
    changed = []
    least_ml = points[0].volume_ml
    for number, (seen_ml, sd_ml) in enumerate(again[: len(points) - 1], start=1):
        least_ml = max(seen_ml, least_ml)  # a lag must not run backwards
        changed.append((number, replace(points[number], volume_ml=least_ml, volume_sd_ml=sd_ml)))
    return changed


def again_report(number: int, point: Point) -> Report:
    """A point with the composition that it is now taken for."""
    return Report(
        what="point-again",
        point=number,
        volume_ml=point.volume_ml,
        volume_sd_ml=point.volume_sd_ml,
        text=f"point {number}: the composition at the glass was {point.volume_ml:.4f} mL",
    )
