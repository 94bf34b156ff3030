"""Records without a closing line: found before a new run, closed by a person's word."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path
from typing import Any

from configs.errors import HalfdropError
from controller.journal import Clock, encode, sealed, utc_text
from controller.lock import sync_to_disk
from controller.records.record import NotARecordError, list_records, read_record, summarise
from controller.records.verification import verify_bytes

_DAMAGED_REMEDY = (
    "Look at bench and vessel; then restore the record from a backup, or move the file out of runs/ and keep it"
)


class UnclosedRunError(HalfdropError):
    """This bench has a run without an end; `records` lists them."""

    def __init__(self, records: list[Path]) -> None:
        names = ", ".join(record.stem for record in records)
        damaged = _is_damaged(records[0])
        super().__init__(
            f"a run was left open: {names}{' (its header is damaged)' if damaged else ''}",
            where="bench",
            remedy=_DAMAGED_REMEDY
            if damaged
            else f"Look at bench and vessel, then go on with it: halfdrop resume {records[0].stem}, "
            f"or close it: halfdrop runs close {records[0].stem}",
        )
        self.records = records


def unclosed(runs: Path, pump_identity: str | None = None) -> list[Path]:
    """Return the records without a closing line, oldest first.

    Hold the lab folder's lock: otherwise one of them may be a run that still goes on. A record whose header is damaged
    counts, for every pump, once a line follows the header; a header alone, whole or torn, is on the medium before
    anything moves.

    Args:
        runs: folder of the records.
        pump_identity: only records of this pump; None: all.
    """
    found = []
    for path in list_records(runs):
        told = summarise(path)
        if not told["readable"]:
            if _is_damaged(path):
                found.append(path)
        elif told["outcome"] is None and pump_identity in (None, _pump_of(path)):
            found.append(path)
    return found


def refuse_unclosed(runs: Path, pump_identity: str) -> None:
    """Refuse a new run on a pump that has an unclosed one.

    Raises:
        UnclosedRunError: with the records to close first.
    """
    if found := unclosed(runs, pump_identity):
        raise UnclosedRunError(found)


def close_record(path: Path, *, clock: Clock, operator_name: str | None, reason: str) -> dict[str, Any]:
    """End a record that was left open; nothing in it is changed, and a torn last line stays as it is.

    Hold the lab folder's lock.

    Args:
        path: the record.
        clock: tells UTC.
        operator_name: who closes it.
        reason: why, in that person's words.

    Returns:
        The closing line's object; `torn_bytes_before` tells how long the torn line was.

    Raises:
        NotARecordError: it is no record.
        HalfdropError: it is closed already, or was edited.
    """
    if _is_damaged(path):
        raise HalfdropError("its header is damaged", where=str(path), remedy=_DAMAGED_REMEDY)
    read_record(path)
    data = path.read_bytes()
    found = verify_bytes(data)
    if found.state == "intact":
        raise HalfdropError("it is closed already", where=str(path), remedy="Nothing needs to be done")
    if found.state == "edited":
        raise HalfdropError(f"it was edited: {found.what}", where=str(path), remedy="Restore it from a backup")
    *lines, torn = data.split(b"\n")
    before = torn or lines[-1]
    last = json.loads(lines[-1])
    number, run_s = len(lines) + (2 if torn else 1), last["run_s"]
    closing: dict[str, Any] = {
        "outcome": "abandoned",
        "reason": reason,
        "lines": number - 1,
        "last_sha256": hashlib.sha256(before).hexdigest(),
        "closed_by": operator_name,
        "stop_confirmed": None,
        "torn_bytes_before": len(torn),
        # a torn line lost its hash of the line before; this one takes its place in the chain
        "last_whole_sha256": hashlib.sha256(lines[-1]).hexdigest(),
    }
    text = (
        f'{{"line":{number},"utc":"{utc_text(clock.utc_s())}","run_s":{run_s!r},"closing":{encode(closing)},'
        f'"previous_sha256":"{closing["last_sha256"]}"'
    )
    with path.open("ab", buffering=0) as file:
        file.write((b"\n" if torn else b"") + sealed(text) + b"\n")
        sync_to_disk(file.fileno())
    path.with_suffix(".reserve").unlink(missing_ok=True)
    return closing


def _is_damaged(path: Path) -> bool:
    """Is it the record of a run that went on behind its header and has no end, and whose header cannot be read?"""
    try:
        read_record(path)
    except NotARecordError:
        pass
    else:
        return False
    try:
        lines = path.read_bytes().split(b"\n")[:-1]
    except OSError:
        return True  # nobody knows
    later = [_object(line) for line in lines[1:]]
    of_a_run = any(entry is not None and "previous_sha256" in entry for entry in later)
    return of_a_run and (later[-1] is None or "closing" not in later[-1])


def _object(line: bytes) -> dict[str, Any] | None:
    try:
        found = json.loads(line)
    except (ValueError, RecursionError):
        return None
    return found if isinstance(found, dict) else None


def _pump_of(path: Path) -> str | None:
    plan = read_record(path).header.get("plan") or {}
    identity = (plan.get("pump") or {}).get("identity")
    return identity if isinstance(identity, str) else None
