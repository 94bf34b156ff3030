"""The lab folder's calibrations: append-only records, the newest accepted one of a subject is in force.

A record that was edited, broken off or not accepted never comes into force; nothing is overwritten.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from controller.records.record import NotARecordError, list_records, read_record, verify


@dataclass(frozen=True, slots=True, kw_only=True)
class Calibration:
    """One record of a calibration. `result` is the object "calibration" of its closing line (empty: broken off)."""

    path: Path
    sha256: str
    kind: str
    subject: str
    on: str
    started_utc: str
    plan: dict[str, Any]
    result: dict[str, Any]
    intact: bool

    @property
    def accepted(self) -> bool:
        """Whether it was accepted, and its record is as it was written."""
        return self.intact and self.result.get("accepted") is True

    @property
    def passed(self) -> bool:
        """Whether it met its limits."""
        return self.result.get("passed") is True


def calibrations(folder: Path, *, kind: str | None = None, subject: str | None = None) -> list[Calibration]:
    """Return the calibrations of a folder, oldest first; what is no record of a calibration is left out."""
    found = [_read(path) for path in list_records(folder)] if folder.is_dir() else []
    return [
        one
        for one in found
        if one is not None and kind in (None, one.kind) and (subject is None or one.subject == subject)
    ]


def in_force(folder: Path, kind: str, subject: str) -> Calibration | None:
    """Return the newest accepted calibration of a subject, None where there is none."""
    return next((one for one in reversed(calibrations(folder, kind=kind, subject=subject)) if one.accepted), None)


def _read(path: Path) -> Calibration | None:
    try:
        record = read_record(path)
    except NotARecordError:
        return None
    plan = record.header.get("plan")
    if not isinstance(plan, dict) or not isinstance(plan.get("subject"), str):
        return None
    result = (record.closing or {}).get("result") or {}
    calibration = result.get("calibration")
    return Calibration(
        path=path,
        sha256=hashlib.sha256(path.read_bytes()).hexdigest(),
        kind=str(plan.get("kind")),
        subject=plan["subject"],
        on=str(plan.get("on")),
        started_utc=str(record.header.get("started_utc")),
        plan=plan,
        result=calibration if isinstance(calibration, dict) else {},
        intact=verify(path).state == "intact",
    )
