"""The lab folder's calibrations: append-only records, the newest accepted one of a subject is in force.

A record that was edited, broken off or not accepted never comes into force; nothing is overwritten.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Collection, Iterator
from dataclasses import dataclass
from functools import lru_cache
from itertools import islice
from pathlib import Path
from typing import Any

from controller.records.record import NotARecordError, list_records, read_record
from controller.records.verification import verify


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
    return list(_found(folder, kind, subject))[::-1]


def in_force(folder: Path, kind: str, subject: str) -> Calibration | None:
    """Return the newest accepted calibration of a subject, None where there is none."""
    return next((one for one in _found(folder, kind, subject) if one.accepted), None)


def first_and_last(folder: Path, kind: str, subject: str, *, first: int) -> list[Calibration]:
    """Return the first so many accepted calibrations of a subject and the newest, oldest first; no other is read."""
    accepted = (one for one in _found(folder, kind, subject, newest_first=False) if one.accepted)
    oldest = list(islice(accepted, first))
    newest = in_force(folder, kind, subject)
    return oldest if newest is None or any(one.path == newest.path for one in oldest) else [*oldest, newest]


def by_sha256(folder: Path, wanted: Collection[str]) -> dict[str, Calibration]:
    """Return the calibrations whose files have one of these hashes; the others are not read as records."""
    found = {}
    for path in list_records(folder) if folder.is_dir() else []:
        if hashlib.sha256(path.read_bytes()).hexdigest() in wanted and (one := _read(path)) is not None:
            found[one.sha256] = one
    return found


def _found(folder: Path, kind: str | None, subject: str | None, *, newest_first: bool = True) -> Iterator[Calibration]:
    """The calibrations of a folder in their order; only those asked for are read whole."""
    paths = list_records(folder) if folder.is_dir() else []
    for path in reversed(paths) if newest_first else paths:
        if (kind, subject) != (None, None):
            planned = _planned(path)
            if kind not in (None, planned[0]) or subject not in (None, planned[1]):
                continue
        one = _read(path)
        if one is not None:
            yield one


def _planned(path: Path) -> tuple[Any, Any]:
    """Kind and subject by the first line of a record."""
    try:
        with path.open("rb") as file:
            plan = json.loads(file.readline())["header"]["plan"]
        return plan.get("kind"), plan.get("subject")
    except (OSError, ValueError, KeyError, TypeError, AttributeError):
        return None, None


def _read(path: Path) -> Calibration | None:
    """Read a record, once for every state of its file: looking up what is in force asks for each many times."""
    try:
        state = path.stat()
    except OSError:
        return None
    return _read_state(path, state.st_size, state.st_mtime_ns)


@lru_cache(maxsize=2000)
def _read_state(path: Path, _size: int, _changed_ns: int) -> Calibration | None:
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
