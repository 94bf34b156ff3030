"""With what a run was measured: probe, calibration, burette, titrant lot, in the terms that a chemist reads."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import datetime
from typing import Any

from controller.report.calibrations import traceability
from controller.report.probe import learned_from
from controller.report.wording import Facts, facts_of, local_time, number, with_uncertainty

_CALIBRATION_KEYS = (
    "slope_fraction",
    "slope_fraction_standard_uncertainty",
    "isopotential_ph",
    "isopotential_mv",
    "offset_standard_uncertainty_mv",
    "slope_offset_covariance_mv",
    "calibrated_utc",
    "covered",
)
_TITRANT_KEYS = ("name", "concentration_mol_l", "standard_uncertainty_mol_l", "acid", "lot_id")
_SECONDS_A_DAY = 86400.0


def instruments(header: Mapping[str, Any]) -> list[tuple[str, Facts]]:
    """Return the sections "probe", "calibration", "response", "burette", "titrant lot" and what else the plan names.

    Args:
        header: a record's header.
    """
    plan, devices = _dict(header.get("plan")), _dict(header.get("devices"))
    offset, started = header.get("lab_utc_offset"), header.get("started_utc")
    probe, pump = _dict(plan.get("probe")), _dict(plan.get("pump"))
    if not plan.get("titrant"):
        return _calibrated(probe, pump, devices, offset)
    sections = [
        ("Probe", [*_device(devices.get("probe")), *_probe(probe, offset)]),
        ("Calibration of the probe", _calibration(_dict(probe.get("calibration")), offset, started)),
        ("Response of the probe", _response(_dict(probe.get("response")), offset)),
        ("Burette", [*_device(devices.get("pump")), *_burette(pump, offset, checked=_checked(plan))]),
        ("Titrant lot", _titrant(_dict(plan.get("titrant")), offset)),
    ]
    return [*sections, *traceability(plan, offset)]


def _calibrated(
    probe: dict[str, Any], pump: dict[str, Any], devices: dict[str, Any], offset: Any
) -> list[tuple[str, Facts]]:
    """The devices that a calibration used; one that it had no use for is named "not used" in its record."""
    found = []
    if "not used" not in str(probe.get("identity")):
        found.append(("Probe", [*_device(devices.get("probe")), *_probe(probe, offset)]))
    if "not used" not in str(pump.get("identity")):
        found.append(("Burette", [*_device(devices.get("pump")), *_burette(pump, offset)]))
    return found


def _dict(value: Any) -> dict[str, Any]:
    return value if isinstance(value, dict) else {}


def _device(identity: Any) -> Facts:
    told = _dict(identity)
    if not told:
        return []
    name = " ".join(str(told[key]) for key in ("maker", "model") if told.get(key))
    return [("device", name), ("serial number", str(told.get("serial"))), ("firmware", str(told.get("firmware")))]


def _probe(probe: dict[str, Any], offset: Any) -> Facts:
    return facts_of(probe, offset, leave_out=("identity", "calibration", "response", "signal"))


def _calibration(found: dict[str, Any], offset: Any, started: Any) -> Facts:
    if not found:
        return [("state", "none: plain potential")]
    percent = 100.0 * float(found.get("slope_fraction") or 0.0)
    slope, u = with_uncertainty(percent, 100.0 * float(found.get("slope_fraction_standard_uncertainty") or 0.0))
    potential, u_mv = with_uncertainty(found.get("isopotential_mv"), found.get("offset_standard_uncertainty_mv"))
    facts = [
        ("slope", f"{slope} % of the ideal (u = {u} %)"),
        ("isopotential pH", number(found.get("isopotential_ph"))),
        ("potential there", f"{potential} mV (u = {u_mv} mV)"),
    ]
    when = found.get("calibrated_utc")
    if when:
        facts.append(("calibrated", f"{local_time(when, offset)}{_age(when, started)}"))
    covered = found.get("covered")
    if isinstance(covered, dict):
        span = f"pH {number(covered.get('lowest_ph'), 2)} to {number(covered.get('highest_ph'), 2)}"
        facts.append(("buffers", f"{span}, at {number(covered.get('temperature_c'), 1)} °C"))
    return facts + facts_of(found, offset, leave_out=_CALIBRATION_KEYS)


def _age(when: Any, started: Any) -> str:
    try:
        days = (datetime.fromisoformat(started) - datetime.fromisoformat(when)).total_seconds() / _SECONDS_A_DAY
    except (TypeError, ValueError):
        return ""
    return f", {days:.0f} days before the run" if days >= 1.5 else ", within a day of the run"


def _response(found: dict[str, Any], offset: Any) -> Facts:
    if not found:
        return [("state", "not on record")]
    film, slow = number(found.get("film_s")), number(found.get("slow_s"))
    share = 100.0 * float(found.get("slow_share") or 0.0)
    facts = [
        (
            "mixing and film",
            f"{number(found.get('bulk_s'))} s, {film} s; dead time {number(found.get('dead_time_s'))} s",
        ),
        ("slow layer", f"{slow} s, {number(share)} % of the signal"),
        *learned_from(found),
    ]
    if found.get("measured_utc"):
        facts.append(("measured", local_time(found["measured_utc"], offset)))
    return facts


def _checked(plan: dict[str, Any]) -> bool:
    """Whether a gravimetric check stands in for the stated systematic error."""
    return bool(_dict(_dict(plan.get("traceability")).get("burette")).get("record_sha256"))


def _burette(pump: dict[str, Any], offset: Any, *, checked: bool = False) -> Facts:
    gain = 100.0 * float(pump.get("gain_standard_uncertainty") or 0.0)
    facts = [
        (
            "syringe, step",
            f"{number(pump.get('syringe_ml'))} mL, {number(1000.0 * float(pump.get('step_ml') or 0))} µL",
        ),
        ("systematic error", "by its check, below" if checked else f"u = {number(gain)} % of the volume, as stated"),
        ("position error", f"u = {number(1000.0 * float(pump.get('position_sd_ml') or 0.0))} µL"),
    ]
    shown = ("identity", "start_count", "last_dose_number", "step_ml", "rate_ml_min", "syringe_ml", "contents_ml",
             "reservoir_ml", "refill", "position_sd_ml", "position_correlation_ml", "dose_sd_ml",
             "gain_standard_uncertainty")  # fmt: skip
    return facts + facts_of(pump, offset, leave_out=shown)


def _titrant(found: dict[str, Any], offset: Any) -> Facts:
    value, u = with_uncertainty(found.get("concentration_mol_l"), found.get("standard_uncertainty_mol_l"))
    facts = [
        ("titrant", f"{found.get('name')}, a strong {'acid' if found.get('acid') else 'base'}"),
        ("concentration", f"{value} mol/L (u = {u} mol/L)"),
        ("lot", str(found.get("lot_id") or "not named")),
    ]
    return facts + facts_of(found, offset, leave_out=_TITRANT_KEYS)
