"""The probe's own record: what each run learned of its fast lag, kept beside its calibrations and response checks.

One file a probe, a line a run, only ever appended to. The runs' records stay the truth: where the file is missing it is
made from them again. A line names its run and the run's last hash, so that it can be held against it.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
import re
from collections.abc import Iterable, Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any, BinaryIO

from configs.errors import HalfdropError
from controller.lock import sync_folder, sync_to_disk
from controller.records.record import NotARecordError, Record, list_records, read_record

FOLDER = "probes"
#: fewer transients than this tell too little of a lag
FEWEST_TRANSIENTS = 5
#: what happened in a run whose lag is not taken over: a device failed, the run was refused something, it was broken off
_TROUBLE = ("failed", "refused", "resumed", "back")


class ProbeRecordError(HalfdropError):
    """The probe's record cannot be written."""


@dataclass(frozen=True, slots=True, kw_only=True)
class LearnedTimes:
    """Bulk and film time as one run learned them, s, with standard uncertainties.

    Attributes:
        run: its record's name; `record_sha256` is the hash of that record's last line before its closing line.
        utc: when the run began.
        method: bulk mixing belongs to vessel, volume and stirring, which are the method's.
        transients: points whose readings were taken.
        holds: whether the readings after a dose came as the probe's record says, only faster or slower.
        doubt: why later runs must not start from these values; None: they may.
    """

    run: str
    record_sha256: str
    utc: str
    method: str
    bulk_s: float
    bulk_standard_uncertainty_s: float
    film_s: float
    film_standard_uncertainty_s: float
    sum_s: float
    sum_standard_uncertainty_s: float
    transients: int
    temperature_c: float | None = None
    holds: bool = True
    doubt: str | None = None


def learned_times(folder: Path, probe: str) -> list[LearnedTimes]:
    """Return what runs learned of a probe, oldest first; lines that cannot be read are left out.

    Args:
        folder: the lab folder's calibrations.
        probe: its identity.
    """
    found = {one.run: one for told in _lines(folder, probe) if (one := _read(told)) is not None}
    return sorted(found.values(), key=lambda one: (one.utc, one.run))


def keep_learned(folder: Path, runs: Path, record: Path) -> LearnedTimes | None:
    """Add a closed run to the record of its probe; None where it learned nothing, or is there already.

    Args:
        folder: the lab folder's calibrations.
        runs: the lab folder's runs, from which a missing file is made again.
        record: of the run.

    Raises:
        NotARecordError: the run's record cannot be read.
        ProbeRecordError: the file cannot be written.
    """
    whole = read_record(record)
    probe, learned = probe_of_header(whole.header), learned_of(whole)
    if probe is None or learned is None:
        return None
    known = {one.run for one in learned_times(folder, probe)}
    added = [*(() if known else _earlier(runs, probe, record.stem)), learned]
    _append(folder, probe, [asdict(one) for one in added if one.run not in known])
    return None if learned.run in known else learned


def probes_on_record(folder: Path) -> list[str]:
    """Return the identities of the probes that have a record in the lab folder's calibrations."""
    found = set()
    for path in sorted((folder / FOLDER).glob("*.jsonl")):
        with contextlib.suppress(OSError, UnicodeDecodeError, ValueError, AttributeError):
            found.add(json.loads(path.read_text(encoding="utf-8").partition("\n")[0]).get("probe"))
    return sorted(one for one in found if isinstance(one, str))


def keep_stored(folder: Path, probe: str, utc: str) -> None:
    """Keep that somebody said the probe is rinsed and stored, at a time when no record was open.

    Raises:
        ProbeRecordError: the file cannot be written.
    """
    _append(folder, probe, [{"stored_utc": utc}])


def stored_utc(folder: Path, probe: str) -> str | None:
    """Return when somebody last said so; None: never."""
    found = [told["stored_utc"] for told in _lines(folder, probe) if isinstance(told.get("stored_utc"), str)]
    return max(found, default=None)


def learned_of(record: Record) -> LearnedTimes | None:
    """Return what a closed run learned of its probe's lag; None where it learned nothing."""
    closing = record.closing or {}
    result = closing.get("result")
    found = result.get("probe_lag") if isinstance(result, dict) else None
    if not (isinstance(result, dict) and isinstance(found, dict)):
        return None
    plan = record.header.get("plan") or {}
    values = {key: found[key] for key in LearnedTimes.__dataclass_fields__ if key in found and key != "doubt"}
    try:
        return LearnedTimes(
            **values,
            run=record.path.stem,
            record_sha256=str(closing.get("last_sha256")),
            utc=str(record.header.get("started_utc")),
            method=str(plan.get("method_name")),
            holds=found.get("record_holds") is not False,
            doubt=_doubt(record, plan, result, found),
        )
    except TypeError:  # a result of another version
        return None


def probe_of_header(header: dict[str, Any]) -> str | None:
    """Return the identity of the probe that a run was planned with."""
    identity = ((header.get("plan") or {}).get("probe") or {}).get("identity")
    return identity if isinstance(identity, str) else None


def file_of(folder: Path, probe: str) -> Path:
    """Return where a probe's record lies: a name that any disk can hold, and that tells two probes apart."""
    slug = re.sub(r"[^a-z0-9]+", "-", probe.lower()).strip("-")[:40].strip("-") or "probe"
    return folder / FOLDER / f"{slug}-{hashlib.sha256(probe.encode()).hexdigest()[:8]}.jsonl"


def sha256_of(entries: Sequence[LearnedTimes]) -> str:
    """Return the SHA-256 of lines of a probe's record, as the plan of a run that uses them names it."""
    text = "\n".join(json.dumps(asdict(one), sort_keys=True) for one in entries)
    return hashlib.sha256(text.encode()).hexdigest()


def _doubt(record: Record, plan: dict[str, Any], result: dict[str, Any], found: dict[str, Any]) -> str | None:
    """Why a run's values must not become those of later runs: a fault may have made them."""
    if result.get("outcome") != "completed" or not result.get("end_points") or not result.get("trusted", True):
        return "the run was not completed"
    if any(kind in _TROUBLE for kind in (one.get("observation") for one in record.entries)):
        return "the run had trouble with a device, or was broken off"
    if found.get("record_holds") is False:
        return "the readings did not come as the probe's record says"
    if found.get("transients", 0) < FEWEST_TRANSIENTS:
        return f"learned from {found.get('transients')} transients only"
    known = {*(record.header.get("warnings") or ()), *((plan.get("traceability") or {}).get("warnings") or ())}
    if own := [text for text in result.get("warnings") or () if text not in known]:
        return f"the run had a warning: {own[0]}"
    return None


def _earlier(runs: Path, probe: str, before: str) -> Iterable[LearnedTimes]:
    for path in list_records(runs):
        if path.stem == before:
            continue
        with contextlib.suppress(NotARecordError):
            record = read_record(path)
            if probe_of_header(record.header) == probe and (learned := learned_of(record)) is not None:
                yield learned


def _append(folder: Path, probe: str, entries: Sequence[dict[str, Any]]) -> None:
    if not entries:
        return
    path = file_of(folder, probe)
    text = "".join(json.dumps({"probe": probe, **one}) + "\n" for one in entries)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        with path.open("ab+") as file:
            if file.tell() and not _ends_whole(file):
                text = f"\n{text}"  # the line before was torn by a crash
            file.write(text.encode())
            file.flush()
            sync_to_disk(file.fileno())
        sync_folder(path.parent)
    except OSError as error:
        raise ProbeRecordError(
            f"it cannot be written ({os.strerror(error.errno or 0)})",
            where=str(path),
            remedy="Make the folder writable; the runs' records hold the same",
        ) from error


def _ends_whole(file: BinaryIO) -> bool:
    file.seek(-1, os.SEEK_END)
    return file.read(1) == b"\n"


def _lines(folder: Path, probe: str) -> list[dict[str, Any]]:
    try:
        lines = file_of(folder, probe).read_text(encoding="utf-8").splitlines()
    except (OSError, UnicodeDecodeError):
        return []
    found = []
    for line in lines:
        with contextlib.suppress(ValueError):  # torn by a crash
            told = json.loads(line)
            if isinstance(told, dict) and told.get("probe") == probe:
                found.append(told)
    return found


def _read(told: dict[str, Any]) -> LearnedTimes | None:
    try:
        return LearnedTimes(**{key: told[key] for key in LearnedTimes.__dataclass_fields__ if key in told})
    except TypeError:  # a line of another kind
        return None
