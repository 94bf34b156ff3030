"""What the bench screen says: devices, link, account, calibration and its age, and what to do."""

from __future__ import annotations

import math
from datetime import UTC, datetime
from typing import Any

from configs.benchfile import BenchSettings, CalibrationSettings
from controller.assembly import is_simulated
from controller.benchwork.work import SLOW_REPLY_S
from controller.calibration.acceptance import HOUSE_LIMITS
from controller.calibration.store import Calibration
from controller.records.record import printable
from controller.ui.texts import local_time_text
from simulators.constants import ideal_slope_mv

#: a calibration typed into the bench file is old after this, common practice; one made here says when it is due
OLDEST_CALIBRATION_DAYS = 7.0


def file_lines(bench: BenchSettings) -> list[str]:
    """Return what the bench file says of vessel and limits."""
    vessel, pump = bench.vessel, bench.pump
    room_ml = vessel.capacity_ml - vessel.displaced_ml - vessel.margin_ml
    return [
        f"{printable(bench.name)}{' (simulated: nothing real moves)' if is_simulated(bench) else ''}",
        f"vessel      takes less than {room_ml:g} mL; tray {vessel.tray_ml:g} mL, waste {vessel.waste_ml:g} mL",
        f"limits      {vessel.largest_dose_ml:g} mL a dose, {pump.highest_rate_ml_min:g} mL/min, "
        f"{vessel.longest_run_s / 60:g} min, {vessel.lowest_temperature_c:g} to {vessel.highest_temperature_c:g} °C",
    ]


def pump_lines(bench: BenchSettings, told: dict[str, Any]) -> list[str]:
    """Return what the pump answered."""
    port = f"on {printable(bench.pump.port)}"
    pump = told.get("pump")
    if not pump:
        return [f"pump        {port}: not asked yet"]
    state = "moving" if pump["moving"] else "stands"
    reservoir_ml = bench.pump.reservoir_ml if pump["reservoir_ml"] is None else pump["reservoir_ml"]
    return [
        f"pump        {printable(pump['identity'])} {port}",
        f"            {state}; {link_text(pump['reply_s'])}" + (f"; FAULT: {pump['fault']}" if pump["fault"] else ""),
        f"titrant     {gauge(pump['contents_ml'], pump['syringe_ml'])} syringe {pump['contents_ml']:.2f} of "
        f"{pump['syringe_ml']:g} mL, reservoir {reservoir_ml:.0f} mL",
    ]


def probe_lines(
    bench: BenchSettings, told: dict[str, Any], calibration: CalibrationSettings | None = None
) -> list[str]:
    """Return what the probe answered; `calibration` turns its potential into pH."""
    port = f"on {printable(bench.probe.port)}"
    probe = told.get("probe")
    if not probe:
        return [f"probe       {port}: not asked yet"]
    temperature = "no temperature" if probe["temperature_c"] is None else f"{probe['temperature_c']:.1f} °C"
    ph = _ph(calibration or bench.probe.calibration, probe["potential_mv"], probe["temperature_c"])
    return [
        f"probe       {printable(probe['identity'])} {port}",
        f"            {link_text(probe['reply_s'])}; status: {printable(probe['status'])}",
        f"reads       {probe['potential_mv']:.1f} mV, {temperature}" + ("" if ph is None else f", pH {ph:.2f}"),
    ]


def calibration_lines(found: CalibrationSettings | None, now: datetime | None = None) -> list[str]:
    """Return the calibration with its age and a verdict in words."""
    if found is None:
        return ["calibrated  never: only methods that follow the potential can run; calibrate with buffers"]
    lines = [
        f"calibrated  {local_time_text(found.calibrated_utc)}{_age_text(found.calibrated_utc, now)}",
        f"            slope {found.slope_percent:.1f} % (u = {found.slope_percent_standard_uncertainty:g} %), "
        f"{found.offset_mv:+.1f} mV at pH {found.isopotential_ph:g} (u = {found.offset_standard_uncertainty_mv:g} mV)",
    ]
    return [*lines, f"verdict     {verdict(found, now)}"]


def in_force_lines(record: Calibration, now: datetime | None = None) -> list[str]:
    """Return a calibration made here: when, what it found, its verdict, and when it is due."""
    line, due_days = record.result["line"], record.plan.get("due_days")
    age = _age_days(record.started_utc, now)
    due = ""
    if isinstance(due_days, int) and age is not None:
        left = math.ceil(due_days - age)
        due = f"; due in {left} days" if left > 0 else "; OVERDUE: calibrate before a result that counts"
    return [
        f"calibrated  {local_time_text(record.started_utc)}{_age_text(record.started_utc, now)} "
        f"({printable(record.path.stem)})",
        f"            slope {100.0 * line['slope_fraction']:.1f} % "
        f"(u = {100.0 * line['slope_fraction_standard_uncertainty']:.2g} %), {line['isopotential_mv']:+.1f} mV at pH "
        f"{line['isopotential_ph']:g} (u = {line['isopotential_standard_uncertainty_mv']:.2g} mV)",
        f"verdict     {printable(str(record.result.get('verdict')))}{due}",
    ]


def settings_of(record: Calibration) -> CalibrationSettings:
    """Return a calibration made here as the bench file would state it."""
    line = record.result["line"]
    return CalibrationSettings(
        slope_percent=100.0 * line["slope_fraction"],
        isopotential_ph=line["isopotential_ph"],
        offset_mv=line["isopotential_mv"],
        calibrated_utc=record.started_utc,
    )


def verdict(found: CalibrationSettings, now: datetime | None = None) -> str:
    """Return whether the probe is fit, and what to do where it is not."""
    age = _age_days(found.calibrated_utc, now)
    slopes, offsets = HOUSE_LIMITS.slope_percent, HOUSE_LIMITS.offset_mv
    if slopes is not None and not slopes[0] <= found.slope_percent <= slopes[1]:
        return f"not fit: the slope is outside {slopes[0]:g} to {slopes[1]:g} %; clean or replace"
    if offsets is not None and not offsets[0] <= found.offset_mv <= offsets[1]:
        return f"not fit: the offset is beyond {offsets[1]:g} mV; look at the junction and the filling"
    if age is None:
        return "the day is not known: calibrate before a result that counts"
    if age > OLDEST_CALIBRATION_DAYS:
        return f"fit, but older than {OLDEST_CALIBRATION_DAYS:g} days: calibrate before a result that counts"
    return "fit"


def link_text(reply_s: float) -> str:
    """Return how quickly a device answered, in words."""
    word = "slow: look at cable and port" if reply_s > SLOW_REPLY_S else "answers well"
    return f"{word} ({1000 * reply_s:.0f} ms)"


def gauge(contents_ml: float, full_ml: float, width: int = 12) -> str:
    """Return a filled bar in brackets."""
    filled = round(width * min(1.0, max(0.0, contents_ml / full_ml))) if full_ml > 0 else 0
    return f"[{'█' * filled}{'·' * (width - filled)}]"


def _ph(found: CalibrationSettings | None, potential_mv: float, temperature_c: float | None) -> float | None:
    if found is None:
        return None
    slope_mv = found.slope_percent / 100.0 * ideal_slope_mv(25.0 if temperature_c is None else temperature_c)
    return found.isopotential_ph - (potential_mv - found.offset_mv) / slope_mv


def _age_days(utc: str | None, now: datetime | None) -> float | None:
    if utc is None:
        return None
    try:
        then = datetime.fromisoformat(utc.replace("Z", "+00:00"))
    except ValueError:
        return None
    if then.tzinfo is None:
        then = then.replace(tzinfo=UTC)
    return ((now or datetime.now(UTC)) - then).total_seconds() / 86400.0


def _age_text(utc: str | None, now: datetime | None) -> str:
    age = _age_days(utc, now)
    return "" if age is None else f", {age:.0f} days ago" if age >= 1 else ", today"
