"""Reading records: listing, the points of the curve. Standard library only, so that a listing is quick."""

from __future__ import annotations

import json
import os
from pathlib import Path

from configs.errors import HalfdropError

TYPE_CHECKING = False  # typing itself would cost a good part of the time that a listing may take
if TYPE_CHECKING:
    from collections.abc import Iterator
    from typing import Any

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


def read_record(path: Path) -> Record:
    """Read a whole record; a torn last line, or one that a later line has ended, is left out.

    Raises:
        NotARecordError: the file does not begin as a record does.
    """
    return record_of(bytes_of(path), path)


def record_of(data: bytes, path: Path) -> Record:
    """As `read_record`, for a record's bytes; `path` is what errors name.

    Raises:
        NotARecordError: they do not begin as a record does.
    """
    lines, rest = lines_of(data)
    record = Record(path, _header(lines[0] if lines else rest, path), [], None)
    record.torn_bytes = len(rest)
    for line in lines[1:]:
        entry = object_of(line)
        if entry is None:
            continue
        if "closing" in entry:
            record.closing = entry["closing"]
        else:
            record.entries.append(entry)
    return record


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


def bytes_of(path: Path) -> bytes:
    """Return a record's bytes. Raises: NotARecordError."""
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
    return first.rstrip(b"\n"), None if rest else object_of(whole[start + 1 :])


def lines_of(data: bytes) -> tuple[list[bytes], bytes]:
    """Return the whole lines, and what stands behind the last of them."""
    *lines, rest = data.split(b"\n")
    return lines, rest


def object_of(line: bytes) -> dict[str, Any] | None:
    """Return a line's object, None where it holds none."""
    try:
        found = json.loads(line)
    except (ValueError, RecursionError):
        return None
    return found if isinstance(found, dict) else None


def _header(line: bytes, path: Path) -> dict[str, Any]:
    first = object_of(line)
    if first is None or first.get("record") != "halfdrop run" or not isinstance(first.get("header"), dict):
        raise NotARecordError("not a run record", where=str(path), remedy="Name a record; 'halfdrop runs list' lists")
    version = first.get("record_version")
    if not isinstance(version, int) or version > 1:
        raise NotARecordError(
            f"record version {version}; this program reads up to 1", where=str(path), remedy="Use a newer halfdrop"
        )
    header: dict[str, Any] = first["header"]
    return header
