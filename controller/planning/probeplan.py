"""The probe of a plan: its calibration in force or stated, its lag, and what the method asks of it."""

from __future__ import annotations

from configs.benchfile import ProbeSettings
from configs.errors import HalfdropError
from configs.method import MethodSettings
from controller.planning.inforce import InForce
from controller.planning.stated import stated_response
from controller.titration.plan import Probe, ProbeCalibration
from simulators.constants import ideal_slope_mv


def planned_probe(method: MethodSettings, settings: ProbeSettings, identity: str, known: InForce) -> Probe:
    """Return the probe as a plan has it.

    Raises:
        HalfdropError: the method follows pH and the probe has no calibration, or the other way round with a meter.
    """
    calibrated = known.probe
    calibration = settings.calibration
    if settings.signal == "ph":
        calibrated = _meters_own(method, settings)
    if method.signal == "ph" and calibration is None and calibrated is None:
        raise HalfdropError(
            "the method follows pH, and the probe has no calibration",
            where="bench: probe.calibration",
            remedy="Calibrate with 'halfdrop calibrate probe'"
            + (", or use signal: potential" if method.end_points.at_ph is None else ": the end point is a pH"),
        )
    planned = calibrated
    if planned is None and calibration is not None and method.signal == "ph":
        planned = ProbeCalibration(
            slope_fraction=calibration.slope_percent / 100.0,
            isopotential_ph=calibration.isopotential_ph,
            isopotential_mv=calibration.offset_mv,
            slope_fraction_standard_uncertainty=calibration.slope_percent_standard_uncertainty / 100.0,
            offset_standard_uncertainty_mv=calibration.offset_standard_uncertainty_mv,
            calibrated_utc=calibration.calibrated_utc,
        )
    return Probe(
        identity=identity,
        signal=method.signal,
        calibration=planned,
        response=known.response or stated_response(settings),
        resolution_mv=settings.resolution_mv,
        reading_interval_s=settings.reading_interval_s,
    )


def _meters_own(method: MethodSettings, settings: ProbeSettings) -> ProbeCalibration:
    """Return what makes a meter's own pH again of the potential that its driver made of it (drivers/meter_ph.py)."""
    if method.signal != "ph":
        raise HalfdropError(
            "the method follows the potential, the meter gives only its own pH (probe.signal: ph)",
            where=f"method {method.name}",
            remedy="Use a method with signal: ph, or a meter that gives mV",
        )
    assert settings.ph_standard_uncertainty is not None  # the bench file was checked
    return ProbeCalibration(
        slope_fraction=1.0,
        isopotential_ph=7.0,
        isopotential_mv=0.0,
        slope_fraction_standard_uncertainty=0.0,
        offset_standard_uncertainty_mv=settings.ph_standard_uncertainty * ideal_slope_mv(method.temperature_c),
        source="meter",
    )
