"""The state of the probe in a few lines: calibration in force, lag, what runs learned of it, where it was left."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass
from pathlib import Path

from controller.calibration.probe_record import learned_times
from controller.calibration.slowing import slowing_warnings
from controller.calibration.store import Calibration, in_force
from controller.running.probe_left import probe_left


@dataclass(frozen=True, slots=True, kw_only=True)
class ProbeState:
    """What is on record of a probe, and what is wrong with it, in words."""

    probe: str
    facts: tuple[str, ...]
    warnings: tuple[str, ...]


def probe_state(runs: Path, folder: Path, probe: str, *, now_utc_s: float) -> ProbeState:
    """Return what a lab folder knows of a probe.

    Args:
        runs: the lab folder's records.
        folder: its calibrations.
        probe: identity.
        now_utc_s: POSIX seconds.
    """
    facts = []
    calibration = in_force(folder, "probe", probe)
    if calibration is not None:
        facts.append(f"calibration in force: {_calibration_text(calibration, now_utc_s)}")
    response = in_force(folder, "response", probe)
    if response is not None:
        found = response.result["response"]
        facts.append(
            f"response check of {response.on}: {found['bulk_s']:.2f} s mixing, {found['film_s']:.2f} s film, "
            f"{100.0 * found['slow_share']:.2f} % slow ({found['slow_s']:.0f} s)"
        )
    entries = learned_times(folder, probe)
    if entries:
        newest = entries[-1]
        facts.append(
            f"fast lag learned in {len(entries)} run{'s' if len(entries) > 1 else ''}, in the last one ({newest.run}) "
            f"{newest.sum_s:.2f} s (u = {newest.sum_standard_uncertainty_s:.2f} s)"
            + (f"; later runs do not start from it: {newest.doubt.partition(':')[0]}" if newest.doubt else "")
        )
    left = probe_left(runs, folder, probe)
    standing = () if left is None else (left.text(now_utc_s),)
    return ProbeState(probe=probe, facts=tuple(facts), warnings=(*slowing_warnings(folder, probe), *standing))


def _calibration_text(record: Calibration, now_utc_s: float) -> str:
    line, due_days = record.result["line"], record.plan.get("due_days")
    text = (
        f"made {record.on}, slope {line['slope_percent']:.1f} %, {line['offset_mv']:+.1f} mV at pH 7, pH "
        f"{line['lowest_ph']:.2f} to {line['highest_ph']:.2f}; {record.result.get('verdict')}"
    )
    try:
        due = dt.date.fromisoformat(record.on) + dt.timedelta(days=int(str(due_days)))
    except ValueError:
        return text
    overdue = dt.datetime.fromtimestamp(now_utc_s, dt.UTC).date() > due
    return f"{text}; {'OVERDUE since' if overdue else 'due'} {due.isoformat()}"
