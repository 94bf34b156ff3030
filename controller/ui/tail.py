"""Where a viewer's entries come from: the end of a growing record, or a finished one played again."""

from __future__ import annotations

import json
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any, Protocol

#: what is taken at one look, so that a long record does not hold up the screen
MOST_BYTES = 512 * 1024
#: lines that tell a viewer nothing but the time
_SILENT = (b'"action":"read"', b'"action":"wait"', b'"observation":"waited"')
_SILENT_WITHIN = 120

Entry = dict[str, Any]


class Source(Protocol):
    """Something that gives entries as they come."""

    def poll(self) -> list[Entry]:
        """Return what is new; empty where nothing is."""
        ...


class RecordTail:
    """Follows a record that may still be written; a last line without its end waits for the rest of it."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self._position = 0
        self._held = b""
        self.more = False  # True: there was more than one look takes

    def poll(self) -> list[Entry]:
        """Return the entries of the lines that were finished since the last look."""
        try:
            with self.path.open("rb") as file:
                file.seek(self._position)
                data = file.read(MOST_BYTES)
        except OSError:
            return []
        self._position += len(data)
        self.more = len(data) == MOST_BYTES
        *lines, self._held = (self._held + data).split(b"\n")
        last = len(lines) - 1
        found = (
            _entry(line) for index, line in enumerate(lines) if index == last or not _tells_nothing(line)
        )  # the last one always: it tells the time
        return [entry for entry in found if entry is not None]


class Playback:
    """Plays a record again, `speed` times as fast as it was; may be paused, sped up and begun again.

    Args:
        entries: the record's, in order.
        now_s: real seconds; another clock in tests.
    """

    def __init__(self, entries: list[Entry], *, speed: float, now_s: Callable[[], float] = time.monotonic) -> None:
        self._entries, self._now_s = entries, now_s
        self._next = 0
        self.speed, self.paused = speed, False
        self._run_s, self._at_s = 0.0, now_s()

    def poll(self) -> list[Entry]:
        """Return the entries that are due."""
        until_s = self.run_s()
        begin = self._next
        while self._next < len(self._entries) and self._entries[self._next].get("run_s", 0.0) <= until_s:
            self._next += 1
        return self._entries[begin : self._next]

    def run_s(self) -> float:
        """Return the run time that is shown now."""
        now_s = self._now_s()
        if not self.paused:
            self._run_s += (now_s - self._at_s) * self.speed
        self._at_s = now_s
        return self._run_s

    def change_speed(self, speed: float) -> None:
        """Go on at another speed."""
        self.run_s()
        self.speed = speed

    def pause(self, paused: bool) -> None:
        """Stand still, or go on."""
        self.run_s()
        self.paused = paused

    @property
    def over(self) -> bool:
        """True when everything was given."""
        return self._next >= len(self._entries)


def all_entries(path: Path) -> list[Entry]:
    """Return every entry of a record, header and closing line included."""
    tail, entries = RecordTail(path), []
    while True:
        entries.extend(tail.poll())
        if not tail.more:
            return entries


def _tells_nothing(line: bytes) -> bool:
    start = line[:_SILENT_WITHIN]
    return any(mark in start for mark in _SILENT)


def _entry(line: bytes) -> Entry | None:
    try:
        found = json.loads(line)
    except (ValueError, RecursionError):
        return None
    return found if isinstance(found, dict) else None
