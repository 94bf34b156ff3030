"""Calibration line of a pH probe through one to five buffers, and the uncertainty of a pH read with it.

Model: E = E_iso - s k(T) (pH - pH_iso), with k(T) = R T ln 10 / F, s the slope as a fraction of the ideal one. All
buffers' temperatures enter, so that buffers need not be at one temperature. The isopotential pH is stated, with an
uncertainty, unless it was measured (`controller.calibration.isopotential`).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from configs.errors import HalfdropError
from simulators.constants import ZERO_CELSIUS_K, ideal_slope_mv

Array = npt.NDArray[np.float64]

MOST_BUFFERS = 5
#: buffers that span less than this give no slope
LEAST_SPAN_PH = 1.0
#: below this fraction of the ideal slope a probe does not answer to pH
DEAD_SLOPE_FRACTION = 0.2


class CalibrationError(HalfdropError):
    """Readings from which no calibration follows."""


@dataclass(frozen=True, slots=True, kw_only=True)
class BufferPoint:
    """An accepted reading in a buffer: pH at its temperature and mean potential, both with standard uncertainty."""

    buffer: str
    ph: float
    standard_uncertainty_ph: float
    temperature_c: float
    potential_mv: float
    standard_uncertainty_mv: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Isopotential:
    """PH at which the potential does not change with temperature; 7.0 +- 0.5 unless stated or measured."""

    ph: float = 7.0
    standard_uncertainty: float = 0.5
    measured: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class PriorSlope:
    """Slope known before: of the last full calibration, or as expected of a probe in use (common practice)."""

    fraction: float = 0.98
    standard_uncertainty: float = 0.02


@dataclass(frozen=True, slots=True, kw_only=True)
class Residual:
    """What the line leaves in one buffer: measured less fitted potential, and as pH (read less stated)."""

    buffer: str
    potential_mv: float
    ph: float


@dataclass(frozen=True, slots=True, kw_only=True)
class CalibrationLine:
    """A calibration: potential at the isopotential pH (mV) and slope fraction, with their covariance.

    `covariance` is that of (isopotential_mv, slope_fraction), widened by chi-square per degree of freedom where that
    exceeds 1; `isopotential_response` holds their change per unit of isopotential pH. `offset_only`: the slope is a
    prior, not measured.
    """

    isopotential: Isopotential
    isopotential_mv: float
    slope_fraction: float
    covariance: tuple[tuple[float, float], tuple[float, float]]
    isopotential_response: tuple[float, float]
    residuals: tuple[Residual, ...]
    chi_square: float
    degrees_of_freedom: int
    lowest_ph: float
    highest_ph: float
    temperature_c: float
    offset_only: bool

    @property
    def slope_percent(self) -> float:
        """Slope in percent of the ideal one."""
        return 100.0 * self.slope_fraction

    @property
    def slope_standard_uncertainty_percent(self) -> float:
        """Standard uncertainty of the slope, percentage points."""
        return 100.0 * math.sqrt(self.covariance[1][1])

    @property
    def offset_mv(self) -> float:
        """Potential at pH 7 and the buffers' mean temperature."""
        return self.isopotential_mv - self.slope_fraction * self._lever_mv

    @property
    def offset_standard_uncertainty_mv(self) -> float:
        """Standard uncertainty of the potential at pH 7."""
        gradient = np.array([1.0, -self._lever_mv])
        return math.sqrt(float(gradient @ np.array(self.covariance) @ gradient))

    @property
    def _lever_mv(self) -> float:
        return ideal_slope_mv(self.temperature_c) * (7.0 - self.isopotential.ph)


@dataclass(frozen=True, slots=True, kw_only=True)
class PhValue:
    """A pH with its standard uncertainty and the four parts of it (all in pH)."""

    ph: float
    standard_uncertainty: float
    from_reading: float
    from_line: float
    from_temperature: float
    from_isopotential: float


def fit_line(
    points: Sequence[BufferPoint], *, isopotential: Isopotential | None = None, prior_slope: PriorSlope | None = None
) -> CalibrationLine:
    """Fit the weighted calibration line.

    A point weighs by its reading's uncertainty and, through the slope, by that of its buffer's pH.

    Args:
        points: one to five buffers; portions of one buffer may repeat.
        isopotential: None: 7.0 +- 0.5.
        prior_slope: needed where the buffers span less than 1 pH (one buffer: offset only), else not used.

    Raises:
        CalibrationError: no or too many points, no slope from them nor before, or a point without uncertainty.
    """
    iso = isopotential or Isopotential()
    prior = _needed_prior(points, prior_slope)
    k_mv = np.array([ideal_slope_mv(point.temperature_c) for point in points])
    ph = np.array([point.ph for point in points])
    potential = np.array([point.potential_mv for point in points])
    design = np.column_stack([np.ones(len(points)), k_mv * (iso.ph - ph)])
    slope = prior.fraction if prior is not None else 1.0
    solved = _solve(points, k_mv, design, potential, prior, slope)
    for _ in range(3):  # the weights depend on the slope, weakly
        solved = _solve(points, k_mv, design, potential, prior, float(solved.parameters[1]))
    offset, slope = (float(value) for value in solved.parameters)
    left = potential - design @ solved.parameters
    response = solved.projector @ (-slope * k_mv)
    freedom = len(points) - (1 if prior is not None else 2)
    widening = max(1.0, solved.chi_square / freedom) if freedom > 0 else 1.0
    covariance = widening * solved.covariance
    return CalibrationLine(
        isopotential=iso,
        isopotential_mv=offset,
        slope_fraction=slope,
        covariance=(
            (float(covariance[0, 0]), float(covariance[0, 1])),
            (float(covariance[1, 0]), float(covariance[1, 1])),
        ),
        isopotential_response=(float(response[0]), float(response[1])),
        residuals=tuple(
            Residual(buffer=point.buffer, potential_mv=float(mv), ph=-float(mv) / (slope * float(k)))
            for point, mv, k in zip(points, left, k_mv, strict=True)
        ),
        chi_square=solved.chi_square,
        degrees_of_freedom=freedom,
        lowest_ph=float(ph.min()),
        highest_ph=float(ph.max()),
        temperature_c=math.fsum(point.temperature_c for point in points) / len(points),
        offset_only=prior is not None,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class _Solved:
    parameters: Array
    covariance: Array
    projector: Array
    chi_square: float


def _needed_prior(points: Sequence[BufferPoint], prior: PriorSlope | None) -> PriorSlope | None:
    if not 1 <= len(points) <= MOST_BUFFERS:
        what = f"{len(points)} buffers, allowed: 1 to {MOST_BUFFERS}"
        raise CalibrationError(what, where="probe calibration", remedy="Measure at least two that bracket the sample")
    for point in points:
        if not (point.standard_uncertainty_mv > 0.0 or point.standard_uncertainty_ph > 0.0):
            raise CalibrationError("no uncertainty", where=f"buffer {point.buffer}", remedy="State that of its pH")
    span = max(point.ph for point in points) - min(point.ph for point in points)
    if span >= LEAST_SPAN_PH:
        return None
    if prior is None:
        what = f"the buffers span {span:.2f} pH: no slope follows from them, and none is known from before"
        raise CalibrationError(what, where="probe calibration", remedy="Measure a second buffer 2 pH or more away")
    return prior


def _solve(  # noqa: PLR0917
    points: Sequence[BufferPoint], k_mv: Array, design: Array, potential: Array, prior: PriorSlope | None, slope: float
) -> _Solved:
    deviation = np.array(
        [
            math.hypot(point.standard_uncertainty_mv, slope * k * point.standard_uncertainty_ph)
            for point, k in zip(points, k_mv, strict=True)
        ]
    )
    rows, right = design / deviation[:, np.newaxis], potential / deviation
    if prior is not None:
        rows = np.vstack([rows, [0.0, 1.0 / prior.standard_uncertainty]])
        right = np.append(right, prior.fraction / prior.standard_uncertainty)
    # the offset is near 0 mV, the slope near 1: both columns are scaled alike before the normal equations are solved
    scale = np.linalg.norm(rows, axis=0)
    inverse = np.linalg.pinv(rows / scale) / scale[:, np.newaxis]
    parameters = inverse @ right
    if abs(float(parameters[1])) < DEAD_SLOPE_FRACTION:
        what = f"slope {100.0 * float(parameters[1]):.1f} % of the ideal one: the probe does not answer to pH"
        raise CalibrationError(
            what, where="probe calibration", remedy="Check plug, cable and membrane; it may be broken"
        )
    return _Solved(
        parameters=parameters,
        covariance=inverse @ inverse.T,
        projector=inverse[:, : len(points)] / deviation,
        chi_square=float(np.sum((right - rows @ parameters) ** 2)),
    )


def ph_from(
    line: CalibrationLine,
    potential_mv: float,
    temperature_c: float,
    *,
    standard_uncertainty_mv: float = 0.0,
    standard_uncertainty_c: float = 0.0,
) -> PhValue:
    """Return the pH that a potential means, with its standard uncertainty.

    Args:
        line: the calibration.
        potential_mv: reading.
        temperature_c: of the sample.
        standard_uncertainty_mv: of the reading.
        standard_uncertainty_c: of the sample's temperature against the buffers' (an error common to both cancels).

    A sample at the buffers' temperature owes nothing to the isopotential pH; away from it the uncertainty grows with
    |T sample - T buffer|.
    """
    k_mv = ideal_slope_mv(temperature_c)
    s = line.slope_fraction
    distance = -(potential_mv - line.isopotential_mv) / (s * k_mv)
    to_parameters = np.array([1.0 / (s * k_mv), -distance / s])
    from_line = math.sqrt(max(0.0, float(to_parameters @ np.array(line.covariance) @ to_parameters)))
    from_reading = standard_uncertainty_mv / abs(s * k_mv)
    from_temperature = abs(distance) / (temperature_c + ZERO_CELSIUS_K) * standard_uncertainty_c
    to_isopotential = 1.0 + float(to_parameters @ np.array(line.isopotential_response))
    from_isopotential = abs(to_isopotential) * line.isopotential.standard_uncertainty
    return PhValue(
        ph=line.isopotential.ph + distance,
        standard_uncertainty=math.hypot(from_reading, from_line, from_temperature, from_isopotential),
        from_reading=from_reading,
        from_line=from_line,
        from_temperature=from_temperature,
        from_isopotential=from_isopotential,
    )
