"""A probe calibration as plain data: what later runs use, and what people look at."""

from __future__ import annotations

from typing import Any

from controller.calibration.acceptance import ProbeLimits
from controller.calibration.buffer_reading import Measured
from controller.calibration.electrode import CalibrationLine, Residual
from controller.calibration.plans import PlannedLimits


def limits_of(one: PlannedLimits) -> ProbeLimits:
    """Return planned limits as those that a verdict is made by."""
    slope = None
    if one.lowest_slope_percent is not None and one.highest_slope_percent is not None:
        slope = (one.lowest_slope_percent, one.highest_slope_percent)
    offset = None if one.largest_offset_mv is None else (-one.largest_offset_mv, one.largest_offset_mv)
    return ProbeLimits(
        name=one.name,
        slope_percent=slope,
        offset_mv=offset,
        residual_ph=one.largest_residual_ph,
        check_ph=one.largest_check_error_ph,
        check_between=one.check_between,
        source=one.source,
    )


def line_to_json(line: CalibrationLine) -> dict[str, Any]:
    """Return a line as plain data: what later runs use, and what people look at."""
    return {
        "slope_percent": line.slope_percent,
        "slope_percent_standard_uncertainty": line.slope_standard_uncertainty_percent,
        "offset_mv": line.offset_mv,
        "offset_standard_uncertainty_mv": line.offset_standard_uncertainty_mv,
        "slope_fraction": line.slope_fraction,
        "slope_fraction_standard_uncertainty": line.covariance[1][1] ** 0.5,
        "isopotential_ph": line.isopotential.ph,
        "isopotential_ph_standard_uncertainty": line.isopotential.standard_uncertainty,
        "isopotential_mv": line.isopotential_mv,
        "isopotential_standard_uncertainty_mv": line.covariance[0][0] ** 0.5,
        "slope_offset_covariance_mv": line.covariance[0][1],
        "temperature_c": line.temperature_c,
        "lowest_ph": line.lowest_ph,
        "highest_ph": line.highest_ph,
        "chi_square": line.chi_square,
        "degrees_of_freedom": line.degrees_of_freedom,
        "offset_only": line.offset_only,
    }


def buffer_to_json(one: Measured, residual: Residual) -> dict[str, Any]:
    """Return an accepted buffer as plain data, with what the line leaves in it."""
    point = one.point
    return {
        "buffer": one.lot.buffer.name,
        "lot_id": one.lot.lot_id,
        "certificate": one.planned.certificate,
        "opened": one.planned.opened,
        "expires": one.planned.expires,
        "ph": point.ph,
        "standard_uncertainty_ph": point.standard_uncertainty_ph,
        "temperature_c": point.temperature_c,
        "potential_mv": point.potential_mv,
        "standard_uncertainty_mv": point.standard_uncertainty_mv,
        "drift_mv_min": one.stable.drift_mv_min,
        "response_s": one.stable.response_s,
        "residual_ph": residual.ph,
    }
