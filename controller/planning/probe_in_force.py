"""The probe as a run finds it: calibration and response in force, what earlier runs learned, and whether it slows down.

Slow layer and share come from the response check (or the bench file), bulk and film time from there until enough runs
of the method have learned them.
"""

from __future__ import annotations

from dataclasses import replace

from configs.benchfile import BenchSettings
from configs.method import MethodSettings
from controller.calibration.acceptance import temperature_warning
from controller.calibration.probe_record import learned_times, sha256_of
from controller.calibration.probe_trend import fast_lag
from controller.calibration.slowing import slowing_warnings
from controller.calibration.store import in_force
from controller.calibration.validity import Validity
from controller.planning.ph_cover import target_warning
from controller.planning.stated import stated_response
from controller.planning.taking import Taking, day_of
from controller.titration.plan import CalibratedRange, ProbeCalibration, ProbeResponse

_CALIBRATE = "Calibrate with 'halfdrop calibrate probe'"


def calibration_in_force(
    taking: Taking, method: MethodSettings, bench: BenchSettings, identity: str
) -> ProbeCalibration | None:
    """Return the calibration with buffers that is in force, with its doubts; None where the bench file's stands.

    Raises:
        NotInForceError: something speaks against it, and the rules refuse that.
    """
    if method.signal != "ph" or bench.probe.signal == "ph":
        return None  # no pH is followed, or the meter has a calibration of its own
    record = taking.taken("probe", identity, "probe calibration", _CALIBRATE)
    if record is None:
        _entered_by_hand(taking, bench)
        return None
    line, rules = record.result["line"], bench.calibration_rules.probe
    warm = temperature_warning(
        method.temperature_c,
        buffers_c=line["temperature_c"],
        largest_difference_c=rules.largest_temperature_difference_c,
    )
    if warm is not None:
        taking.warnings.append(f"probe calibration: {warm}; calibrate with buffers at the sample's temperature")
    covered = CalibratedRange(
        lowest_ph=line["lowest_ph"],
        highest_ph=line["highest_ph"],
        temperature_c=line["temperature_c"],
        largest_ph_beyond=rules.largest_ph_beyond_buffers,
        largest_temperature_difference_c=rules.largest_temperature_difference_c,
        isopotential_ph_standard_uncertainty=line["isopotential_ph_standard_uncertainty"],
    )
    asked = method.end_points.at_ph
    if asked is not None and (text := target_warning(asked, covered)) is not None:
        taking.warnings.append(text)
    return ProbeCalibration(
        slope_fraction=line["slope_fraction"],
        isopotential_ph=line["isopotential_ph"],
        isopotential_mv=line["isopotential_mv"],
        slope_fraction_standard_uncertainty=line["slope_fraction_standard_uncertainty"],
        offset_standard_uncertainty_mv=line["isopotential_standard_uncertainty_mv"],
        slope_offset_covariance_mv=line["slope_offset_covariance_mv"],
        calibrated_utc=record.started_utc,
        record_sha256=record.sha256,
        covered=covered,
    )


def response_in_force(
    taking: Taking, method: MethodSettings, bench: BenchSettings, identity: str
) -> ProbeResponse | None:
    """Return the probe's lag: of the response check or the bench file, bulk and film as the last runs learned them.

    A probe that slows down is named in the warnings, before it spoils a result.
    """
    taking.warnings += slowing_warnings(taking.folder, identity)
    measured = _checked(taking, identity) or stated_response(bench.probe)
    if measured is None:
        return None
    learned = fast_lag(learned_times(taking.folder, identity), method=method.name, since_utc=measured.measured_utc)
    if learned is None:
        return measured
    sha256 = sha256_of(learned.entries)
    taking.hashes["probe lag learned in runs"] = sha256
    return replace(
        measured,
        bulk_s=learned.bulk_s,
        film_s=learned.film_s,
        learned_from=tuple(one.run for one in learned.entries),
        learned_sha256=sha256,
    )


def _checked(taking: Taking, identity: str) -> ProbeResponse | None:
    record = in_force(taking.folder, "response", identity)
    if record is None:
        return None
    taking.hashes["calibration response"] = record.sha256
    if not record.passed:
        taking.warnings.append(
            f"response of the probe: it did not pass ({record.result.get('verdict')}); clean the probe, or replace it"
        )
    found = record.result["response"]
    return ProbeResponse(
        bulk_s=found["bulk_s"],
        film_s=found["film_s"],
        slow_s=found["slow_s"],
        slow_share=found["slow_share"],
        dead_time_s=found["dead_time_s"],
        time_relative_uncertainty=found["time_relative_uncertainty"],
        share_relative_uncertainty=found["share_relative_uncertainty"],
        measured_utc=record.started_utc,
    )


def _entered_by_hand(taking: Taking, bench: BenchSettings) -> None:
    """Doubt a calibration of the bench file that is past its date."""
    entered = bench.probe.calibration
    day = day_of(entered.calibrated_utc[:10]) if entered is not None and entered.calibrated_utc else None
    if day is not None:
        days = bench.calibration_rules.probe.days
        validity = Validity(start=day, start_word="made", days_from_start=days)
        taking.doubt("probe calibration of the bench file", validity.problems_on(taking.today), _CALIBRATE)
