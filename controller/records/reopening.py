"""A record that was left open is written on: a torn last line is ended, and the chain of hashes goes over it."""

from __future__ import annotations

import hashlib
import json
import os
from pathlib import Path
from typing import Any

from configs.errors import HalfdropError
from controller.journal import Clock, Journal, Sink
from controller.records.recordfile import FileSink
from controller.records.verification import verify_bytes


class ReopenedSink(FileSink):
    """Appends whole lines to a record that exists.

    Args:
        path: the record.
        durable: as for FileSink.

    Raises:
        OSError: it cannot be opened for writing.
    """

    def __init__(self, path: Path, *, durable: bool = True) -> None:
        flags = os.O_WRONLY | os.O_APPEND | getattr(os, "O_BINARY", 0) | getattr(os, "O_CLOEXEC", 0)
        self._descriptor = os.open(path, flags)
        self.path, self._durable, self._size = path, durable, os.fstat(self._descriptor).st_size
        self._keep_reserve()


class ReopenedJournal(Journal):
    """Goes on behind what a record holds.

    Args:
        sink: appends to the record.
        clock: the run's clock.
        data: the record's bytes as they are in the file.
        run_s: run time now, s.
        name: path or name of the record.

    Raises:
        HalfdropError: the record is closed or was edited.
    """

    def __init__(self, sink: Sink, clock: Clock, *, data: bytes, run_s: float, name: str = "record") -> None:
        super().__init__(sink, clock, name=name)
        check_open(whole_lines(data), name)
        *whole, torn = whole_lines(data).split(b"\n")
        self.torn_bytes, self._no_end = len(torn), not data.endswith(b"\n")
        self._last_whole = hashlib.sha256(whole[-1]).hexdigest()
        self.lines = len(whole) + (1 if torn else 0)
        self._previous = hashlib.sha256(torn).hexdigest() if torn else self._last_whole
        self.started_s = clock.now_s() - run_s

    def write_resumed(self, **details: Any) -> None:
        """Write the line that says the run goes on, and bring it to the medium; before it, end a torn line.

        Raises:
            RecordError: it cannot be written.
        """
        if self.torn_bytes:
            details |= {"torn_bytes_before": self.torn_bytes, "last_whole_sha256": self._last_whole}
        if self._no_end:
            self._end_line()
        self.event("resumed", **details)
        self.barrier()

    def _end_line(self) -> None:
        try:
            self._sink.write(b"\n")
        except OSError as error:
            raise self._failure(error) from error
        self._no_end = False


def check_open(data: bytes, name: str) -> None:
    """Refuse a record that is not open.

    Raises:
        HalfdropError: it is closed, or was edited.
    """
    found = verify_bytes(data)
    if found.state == "intact":
        raise HalfdropError(
            "it is closed: the run has its end", where=name, remedy="Look at it with 'halfdrop runs show'"
        )
    if found.state == "edited":
        raise HalfdropError(
            f"it was edited: {found.what}",
            where=name,
            remedy="Restore it from a backup; 'halfdrop evaluate' and 'runs close' work on what is there",
        )


def whole_lines(data: bytes) -> bytes:
    """Return a record's bytes; a last line that lacks nothing but its end is given it."""
    _, _, last = data.rpartition(b"\n")
    try:
        complete = isinstance(json.loads(last), dict)
    except ValueError:
        complete = False
    return data + b"\n" if complete else data
