"""Reading records: listing, verifying, the points of the curve. Standard library only, so that a listing is quick."""

from __future__ import annotations

import hashlib
import json
import os
import re
from pathlib import Path

from configs.errors import HalfdropError

TYPE_CHECKING = False  # typing itself would cost a good part of the time that a listing may take
if TYPE_CHECKING:
    from collections.abc import Iterator
    from typing import Any

_SEAL = re.compile(rb'(.*),"own_sha256":"([0-9a-f]{64})"\}', re.DOTALL)
_KINDS = ("header", "action", "observation", "event", "closing")
_TAIL_BYTES = 16 * 1024
#: length of the UTC stamp that a record's name begins with
_STAMP = len("2026-01-01T000000Z")


class NotARecordError(HalfdropError):
    """The file is no record, or a record of a newer program."""


class Record:
    """A record as read: header, entries between header and closing line, closing line, and what was torn off.

    Attributes:
        path: the file.
        header: the header's object ("plan", "devices", "operator", ...).
        entries: one object a line, as the journal wrote them ("action", "observation" or "event").
        closing: the closing line's object, None where the record is open.
        torn_bytes: length of a last line without its end; 0 where there is none.
    """

    def __init__(
        self, path: Path, header: dict[str, Any], entries: list[dict[str, Any]], closing: dict[str, Any] | None
    ) -> None:
        self.path, self.header, self.entries, self.closing = path, header, entries, closing
        self.torn_bytes = 0

    def of(self, kind: str) -> Iterator[dict[str, Any]]:
        """Yield the entries of this kind of action, observation or event ("dosed", "reading", "report")."""
        for entry in self.entries:
            if kind in (entry.get("observation"), entry.get("action"), entry.get("event")):
                yield entry


class Verification:
    """What `verify` found.

    Attributes:
        state: "intact", "edited", "torn" (the last line has no end) or "cut" (no closing line: still running, broken
            off, or its end was taken away).
        lines: whole lines in the file.
        first_bad_line: number of the first line that is not as it was written, None where there is none.
        what: the finding in words.
    """

    def __init__(self, state: str, *, lines: int, what: str, first_bad_line: int | None = None) -> None:
        self.state, self.lines, self.what, self.first_bad_line = state, lines, what, first_bad_line

    def to_json(self) -> dict[str, Any]:
        """Return the finding as plain data."""
        return {
            "state": self.state, "lines": self.lines, "first_bad_line": self.first_bad_line, "what": self.what,
        }  # fmt: skip


def read_record(path: Path) -> Record:
    """Read a whole record; a torn last line, or one that a later line has ended, is left out.

    Raises:
        NotARecordError: the file does not begin as a record does.
    """
    return record_of(_bytes_of(path), path)


def record_of(data: bytes, path: Path) -> Record:
    """As `read_record`, for a record's bytes; `path` is what errors name.

    Raises:
        NotARecordError: they do not begin as a record does.
    """
    lines, rest = _split(data)
    record = Record(path, _header(lines[0] if lines else rest, path), [], None)
    record.torn_bytes = len(rest)
    for line in lines[1:]:
        entry = _object(line)
        if entry is None:
            continue
        if "closing" in entry:
            record.closing = entry["closing"]
        else:
            record.entries.append(entry)
    return record


def verify(path: Path) -> Verification:
    """Tell whether a record is as the program wrote it, and if not, where it first differs.

    Tamper-evident, not tamper-proof: whoever rewrites every hash makes a new record.
    """
    return verify_bytes(_bytes_of(path))


def verify_bytes(data: bytes) -> Verification:
    """As `verify`, for a record's bytes."""
    lines, rest = _split(data)
    count = len(lines)
    if not lines:
        return Verification("torn" if rest else "cut", lines=0, what="no whole line in it", first_bad_line=1)
    entries = [_object(line) for line in lines]
    bad = _first_bad(lines, entries)
    if bad is not None:
        number, what = bad
        return Verification("edited", lines=count, what=f"line {number}: {what}", first_bad_line=number)
    last = entries[-1]
    if rest:
        what = f"the last line breaks off after {len(rest)} bytes"
        return Verification("torn", lines=count, what=what, first_bad_line=count + 1)
    if last is None or "closing" not in last:
        return Verification("cut", lines=count, what=f"no closing line after line {count}: still running or cut off")
    return Verification("intact", lines=count, what=f"{count} lines, each as it was written")


def _first_bad(lines: list[bytes], entries: list[dict[str, Any] | None]) -> tuple[int, str] | None:
    previous = ""
    for index, (line, entry) in enumerate(zip(lines, entries, strict=True)):
        if entry is None:
            after = entries[index + 1] if index + 1 < len(entries) else None
            if after is not None and (ender := _ender(after, line)) is not None:
                if ender.get("last_whole_sha256") != previous:
                    return index, "it was edited"
                previous = hashlib.sha256(line).hexdigest()
                continue
            return index + 1, "not a line of a record"
        if entry.get("previous_sha256") != previous:
            return _whose_fault(lines, entries, index)
        if sum(kind in entry for kind in _KINDS) != 1:
            return index + 1, "it was edited: no kind of line that a record has"
        if (index == 0) != ("header" in entry) or ("closing" in entry and index != len(lines) - 1):
            return index + 1, "a header or closing line where none belongs"
        if entry.get("line") != index + 1:
            return index + 1, f"it is numbered {entry.get('line')}: lines are missing or were put in before it"
        if "closing" in entry and not _sealed(line, entry, index, previous):
            return index + 1, "the closing line was edited"
        previous = hashlib.sha256(line).hexdigest()
    return None


def _whose_fault(lines: list[bytes], entries: list[dict[str, Any] | None], index: int) -> tuple[int, str]:
    """The hash in line `index` does not fit the line before: one of the two was edited, or lines went between."""
    entry, before = entries[index], entries[index - 1] if index else None
    if index == 0:
        return 1, "it was edited, or lines before it are missing"
    if entry is not None and before is not None and entry.get("line") != index + 1:
        return index + 1, f"it is numbered {entry.get('line')}: lines are missing or were put in before it"
    after = entries[index + 1] if index + 1 < len(lines) else None
    next_breaks = after is not None and after.get("previous_sha256") != hashlib.sha256(lines[index]).hexdigest()
    seal = _SEAL.fullmatch(lines[index])
    own_breaks = seal is not None and hashlib.sha256(seal[1]).hexdigest() != seal[2].decode()
    return (index + 1 if next_breaks or own_breaks else index), "it was edited"


def _sealed(line: bytes, entry: dict[str, Any], index: int, previous: str) -> bool:
    seal = _SEAL.fullmatch(line)
    closing = entry["closing"]
    return (
        seal is not None
        and hashlib.sha256(seal[1]).hexdigest() == seal[2].decode()
        and isinstance(closing, dict)
        and closing.get("lines") == index
        and closing.get("last_sha256") == previous
    )


def _ender(entry: dict[str, Any], torn: bytes) -> dict[str, Any] | None:
    """Return what the next line (a closing line, or the one of a resumed run) says of the torn one that it ended."""
    told = entry if entry.get("event") == "resumed" else entry.get("closing")
    ends = (
        isinstance(told, dict)
        and told.get("torn_bytes_before") == len(torn)
        and entry.get("previous_sha256") == hashlib.sha256(torn).hexdigest()
    )
    return told if ends else None


def summarise(path: Path) -> dict[str, Any]:
    """Return what a listing shows of one record, from its first and last line only; `outcome` None: no closing line."""
    try:
        first, last = _ends(path)
        header = _header(first, path)
    except NotARecordError as error:
        return {"run": path.stem, "path": str(path), "outcome": None, "reason": error.what, "readable": False}
    closing = last.get("closing") if isinstance(last, dict) else None
    closing = closing if isinstance(closing, dict) else {}
    plan = header["plan"] if isinstance(header.get("plan"), dict) else {}
    result = closing.get("result") or {}
    return {
        "run": path.stem,
        "path": str(path),
        "readable": True,
        "started_utc": header.get("started_utc"),
        "method": plan.get("method_name"),
        "sample_id": (plan.get("sample") or {}).get("sample_id"),
        "operator": header.get("operator"),
        "outcome": closing.get("outcome"),
        "reason": closing.get("reason"),
        "stop_confirmed": closing.get("stop_confirmed"),
        "end_points": result.get("end_points", []),
        "result": result.get("result"),
        "doses": result.get("doses"),
        "duration_s": result.get("duration_s"),
    }


def list_records(runs: Path) -> list[Path]:
    """Return the records of a folder, oldest first (their names begin with UTC, a counter ends those of one second)."""
    found = (path for path in runs.glob("*.jsonl") if path.is_file())
    return sorted(found, key=lambda path: (path.stem[:_STAMP], len(path.stem), path.stem))


def points(record: Record) -> list[dict[str, Any]]:
    """Return the curve: one object a settled point, in the order of the run.

    Keys: `volume_ml` (titrant volume seen by the probe), `delivered_ml`, `potential_mv`, `ph`, `settled`, `at_s`, and
    the standard deviations that the run gave the point, `volume_sd_ml` and `potential_sd_mv` (None in early records).
    A point that the run later took for another composition has that one.
    """
    keys = ("volume_ml", "delivered_ml", "potential_mv", "ph", "settled", "volume_sd_ml", "potential_sd_mv")
    found: list[dict[str, Any]] = []
    for entry in record.of("report"):
        number = entry.get("point")
        if entry.get("what") == "point":
            found.append({**{key: entry.get(key) for key in keys}, "at_s": entry.get("run_s")})
        elif entry.get("what") == "point-again" and isinstance(number, int) and 0 <= number < len(found):
            found[number] |= {key: entry.get(key) for key in ("volume_ml", "volume_sd_ml")}
    return found


def printable(text: str) -> str:
    """Return text fit for a terminal: control characters (escape sequences among them) become a replacement mark."""
    return "".join(character if character.isprintable() else "\N{REPLACEMENT CHARACTER}" for character in text)


def _bytes_of(path: Path) -> bytes:
    try:
        return path.read_bytes()
    except OSError as error:
        raise NotARecordError(
            f"it cannot be read ({error.strerror})", where=str(path), remedy="Name a record; 'halfdrop runs list' lists"
        ) from error


def _ends(path: Path) -> tuple[bytes, dict[str, Any] | None]:
    try:
        with path.open("rb") as file:
            first = file.readline()
            size, wanted = file.seek(0, os.SEEK_END), _TAIL_BYTES
            while True:
                file.seek(max(0, size - wanted))
                tail = file.read()
                whole, _, rest = tail.rpartition(b"\n")
                start = whole.rfind(b"\n")
                if rest or start >= 0 or wanted >= size:
                    break
                wanted *= 4
    except OSError as error:
        raise NotARecordError(
            f"it cannot be read ({error.strerror})", where=str(path), remedy="Allow reading it"
        ) from error
    return first.rstrip(b"\n"), None if rest else _object(whole[start + 1 :])


def _split(data: bytes) -> tuple[list[bytes], bytes]:
    *lines, rest = data.split(b"\n")
    return lines, rest


def _object(line: bytes) -> dict[str, Any] | None:
    try:
        found = json.loads(line)
    except (ValueError, RecursionError):
        return None
    return found if isinstance(found, dict) else None


def _header(line: bytes, path: Path) -> dict[str, Any]:
    first = _object(line)
    if first is None or first.get("record") != "halfdrop run" or not isinstance(first.get("header"), dict):
        raise NotARecordError("not a run record", where=str(path), remedy="Name a record; 'halfdrop runs list' lists")
    version = first.get("record_version")
    if not isinstance(version, int) or version > 1:
        raise NotARecordError(
            f"record version {version}; this program reads up to 1", where=str(path), remedy="Use a newer halfdrop"
        )
    header: dict[str, Any] = first["header"]
    return header
