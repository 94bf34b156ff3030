"""Is a record as the program wrote it? Every line carries the hash of the one before; the closing line seals all."""

from __future__ import annotations

import hashlib
import re
from pathlib import Path

from controller.records.record import bytes_of, lines_of, object_of

TYPE_CHECKING = False  # typing itself would cost a good part of the time that a listing may take
if TYPE_CHECKING:
    from typing import Any

_SEAL = re.compile(rb'(.*),"own_sha256":"([0-9a-f]{64})"\}', re.DOTALL)
_KINDS = ("header", "action", "observation", "event", "closing")


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


def verify(path: Path) -> Verification:
    """Tell whether a record is as the program wrote it, and if not, where it first differs.

    Tamper-evident, not tamper-proof: whoever rewrites every hash makes a new record.
    """
    return verify_bytes(bytes_of(path))


def verify_bytes(data: bytes) -> Verification:
    """As `verify`, for a record's bytes."""
    lines, rest = lines_of(data)
    count = len(lines)
    if not lines:
        return Verification("torn" if rest else "cut", lines=0, what="no whole line in it", first_bad_line=1)
    entries = [object_of(line) for line in lines]
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
