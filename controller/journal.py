"""The record of a run: an append-only JSON Lines file, written before the decision core or a device sees anything.

Line 1 is the header (the RunPlan and where, when and with what it was run), then one line per action, observation and
event, at the end a closing line. Every line holds its number, UTC, the run time and the SHA-256 of the line before (its
bytes without the line feed); the closing line, which nothing follows, ends with the SHA-256 of its own text. That makes
edits evident, not impossible. `controller/records/record.py` reads it.
"""

from __future__ import annotations

import errno
import hashlib
import json
import math
from collections.abc import Mapping
from datetime import UTC, datetime
from typing import Any, Protocol

from configs.errors import HalfdropError
from controller.titration.actions import Action, Observation, to_entry

#: half a character (no UTF-8 has it) is written as JSON's own escape, so that no text can end a run
NO_TEXT = "backslashreplace"
RECORD_VERSION = 1
#: what is on the medium is never older than this, s
SYNC_INTERVAL_S = 5.0


class Clock(Protocol):
    """What the journal needs of a clock: seconds of the run's clock and POSIX seconds."""

    def now_s(self) -> float:
        """Return monotonic seconds."""
        ...

    def utc_s(self) -> float:
        """Return POSIX seconds."""
        ...


class Sink(Protocol):
    """Where lines go."""

    def write(self, line: bytes) -> None:
        """Append one whole line; after an OSError nothing of it is left behind."""
        ...

    def sync(self) -> None:
        """Return when everything written is on the medium."""
        ...

    def give_back_reserve(self) -> None:
        """Free the space kept for the last lines."""
        ...

    def close(self) -> None:
        """Let go of the file."""
        ...


class RecordError(HalfdropError):
    """The record cannot be written; the run cannot go on."""

    exit_status = 3


class DiskFullError(RecordError):
    """No space for another line; the line is held back until the journal is closed."""


class Journal:
    """Writes one run's record. `begin` first, then `write`, `barrier` and `event`, `close` at the end.

    Args:
        sink: where the lines go (`recordfile.FileSink`, `recordfile.MemorySink`).
        clock: the run's clock.
        name: path or name of the record, for errors and results.
    """

    def __init__(self, sink: Sink, clock: Clock, *, name: str = "record") -> None:
        self._sink, self._clock, self.name = sink, clock, name
        self.started_s = 0.0
        self._previous = ""
        self._synced_s: float | None = None  # None: nothing written since the last sync
        self._held_back: bytes | None = None
        self.lines = 0
        self.closed = False

    def discard(self) -> None:
        """Let go of a record in which nothing was begun; no trace of it stays."""
        if self.lines == 0 and not self.closed:
            self.closed = True
            self._sink.close()

    def begin(self, header: Mapping[str, Any]) -> None:
        """Write the header as line 1 and bring it to the medium; run time starts now.

        Raises:
            RecordError: it cannot be written.
        """
        self.started_s = self._clock.now_s()
        self._append(f'"record":"halfdrop run","record_version":{RECORD_VERSION},"header":{encode(header)}')
        self.barrier()

    def write(self, item: Action | Observation, *, by: str | None = None) -> None:
        """Write one action or observation, before anybody acts on it.

        Args:
            item: what the core asked for, or what it will be sent.
            by: who it comes from, where it is not part of the core's dialogue ("runner").

        Raises:
            RecordError: it cannot be written.
        """
        entry = to_entry(item)
        if by is not None:
            entry["by"] = by
        self._append(encode(entry)[1:-1])

    def event(self, event: str, **details: Any) -> None:
        """Write what happened beside the dialogue of core and devices ("pump-stop", "guard", "clock-step").

        Raises:
            RecordError: it cannot be written.
        """
        self._append(encode({"event": event, **details})[1:-1])

    def barrier(self) -> None:
        """Return when every line so far is on the medium: only then may anything leave the program.

        Raises:
            RecordError: the medium does not take it.
        """
        if self._synced_s is not None:
            try:
                self._sink.sync()
            except OSError as error:
                raise self._failure(error) from error
            self._synced_s = None

    def before_silence(self, seconds: float) -> None:
        """Sync now if the next `seconds` without a line would leave lines unsynced for too long."""
        if self._synced_s is not None and self._clock.now_s() + seconds - self._synced_s >= SYNC_INTERVAL_S:
            self.barrier()

    def close(self, outcome: str, *, reason: str | None = None, **details: Any) -> None:
        """Write the closing line and let go of the file; the reserve makes room for it on a full disk.

        Args:
            outcome: "completed", "stopped" or "failed".
            reason: why, in words, where it is not "completed".
            details: further keys of the closing line (result, whether the pump's stop was confirmed).

        Raises:
            RecordError: even now it cannot be written; the file is closed all the same.
        """
        if self.closed:
            return
        try:
            self._sink.give_back_reserve()
            if self._held_back is not None:
                line, self._held_back = self._held_back, None
                self._put(line)
            self._barrier_before_closing()
            closing = {"outcome": outcome, "reason": reason, "lines": self.lines, "last_sha256": self._previous}
            self._append_closing(encode({**closing, **details}))
            self.barrier()
        finally:
            self.closed = True
            self._sink.close()

    def _barrier_before_closing(self) -> None:
        """Bring every line to the medium; where it does not take them, the closing line is tried all the same."""
        unsynced_s = self._synced_s
        try:
            self.barrier()
        except RecordError:
            self._synced_s = unsynced_s

    def _stamp(self) -> str:
        run_s = round(self._clock.now_s() - self.started_s, 6)
        return f'{{"line":{self.lines + 1},"utc":"{utc_text(self._clock.utc_s())}","run_s":{run_s!r},'

    def _append(self, body: str) -> None:
        if self._held_back is not None:
            raise DiskFullError("no space left", where=self.name, remedy="Close the record")
        self._put(f'{self._stamp()}{body},"previous_sha256":"{self._previous}"}}'.encode(errors=NO_TEXT))

    def _append_closing(self, closing: str) -> None:
        self._put(sealed(f'{self._stamp()}"closing":{closing},"previous_sha256":"{self._previous}"'))

    def _put(self, line: bytes) -> None:
        try:
            self._sink.write(line + b"\n")
        except OSError as error:
            self._held_back = line
            raise self._failure(error) from error
        self.lines += 1
        self._previous = hashlib.sha256(line).hexdigest()
        if self._synced_s is None:
            self._synced_s = self._clock.now_s()
        elif self._clock.now_s() - self._synced_s >= SYNC_INTERVAL_S:
            self.barrier()

    def _failure(self, error: OSError) -> RecordError:
        if error.errno in (errno.ENOSPC, errno.EDQUOT):
            return DiskFullError(
                "the disk is full; the run was ended", where=self.name, remedy="Free space before the next run"
            )
        return RecordError(
            f"the record cannot be written ({error.strerror or error})",
            where=self.name,
            remedy="Check the disk; what was written before is kept",
        )


def sealed(text: str) -> bytes:
    """Return a closing line: this text, an open JSON object, ended with the SHA-256 of itself."""
    own_sha256 = hashlib.sha256(text.encode(errors=NO_TEXT)).hexdigest()
    return f'{text},"own_sha256":"{own_sha256}"}}'.encode(errors=NO_TEXT)


def utc_text(utc_s: float) -> str:
    """Return POSIX seconds as ISO 8601 UTC with milliseconds."""
    return datetime.fromtimestamp(utc_s, UTC).isoformat(timespec="milliseconds")[:-6] + "Z"


def encode(data: Mapping[str, Any]) -> str:
    """Return one line of JSON; a number that is not finite becomes null (JSON has no word for it)."""
    try:
        return _ENCODER.encode(data)
    except ValueError:
        return _ENCODER.encode(_finite(data))


def _finite(value: Any) -> Any:
    if isinstance(value, float) and not math.isfinite(value):
        return None
    if isinstance(value, Mapping):
        return {key: _finite(inner) for key, inner in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(inner) for inner in value]
    return value


def _plain(value: Any) -> Any:
    """JSON of a number or array of numpy's, which the encoder does not know."""
    if hasattr(value, "tolist"):
        return value.tolist()
    raise TypeError(f"{type(value).__name__} does not belong into a record")


_ENCODER = json.JSONEncoder(ensure_ascii=False, allow_nan=False, separators=(",", ":"), default=_plain)
