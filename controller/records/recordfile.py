"""Files that a journal writes into: names, creation, durable bytes, the reserve for a full disk."""

from __future__ import annotations

import contextlib
import os
import re
from datetime import UTC, datetime
from pathlib import Path

from configs.errors import HalfdropError
from controller.lock import sync_folder, sync_to_disk

#: space kept free for the last lines of a record on a full disk, bytes
RESERVE_BYTES = 64 * 1024
_LARGEST_COUNTER = 999


class FileSink:
    """Appends whole lines to a new file.

    Args:
        path: the record; must not exist yet.
        durable: False for studies and tests: `sync` does nothing and no reserve is made.

    Raises:
        FileExistsError: the record exists.
        OSError: it cannot be made.
    """

    def __init__(self, path: Path, *, durable: bool = True) -> None:
        flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_APPEND | getattr(os, "O_BINARY", 0)
        self._descriptor = os.open(path, flags | getattr(os, "O_CLOEXEC", 0), 0o644)
        self.path, self._durable, self._size = path, durable, 0
        self._keep_reserve()

    def _keep_reserve(self) -> None:
        """Take the space for the last lines; a record that cannot have it is closed again."""
        self._reserve = self.path.with_suffix(".reserve") if self._durable else None
        if self._reserve is not None:
            try:
                with self._reserve.open("wb", buffering=0) as reserve:
                    reserve.write(bytes(RESERVE_BYTES))
                    sync_to_disk(reserve.fileno())
                sync_folder(self.path.parent)
            except OSError:
                self.close()
                raise

    def write(self, line: bytes) -> None:
        """Append one line with one write; a line cut off by a full disk is taken back whole."""
        written = os.write(self._descriptor, line)
        if written != len(line):
            try:
                while written < len(line):
                    written += os.write(self._descriptor, line[written:])
            except OSError:
                os.ftruncate(self._descriptor, self._size)
                raise
        self._size += len(line)

    def sync(self) -> None:
        """Return when every byte is on the medium."""
        if self._durable:
            sync_to_disk(self._descriptor)

    def give_back_reserve(self) -> None:
        """Delete the reserve file."""
        if self._reserve is not None:
            with contextlib.suppress(OSError):
                self._reserve.unlink(missing_ok=True)

    def close(self) -> None:
        """Close the file, delete the reserve, and the file too where nothing was written."""
        self.give_back_reserve()
        os.close(self._descriptor)
        if self._size == 0:
            self.path.unlink(missing_ok=True)


class MemorySink:
    """Keeps the lines in memory: for studies and tests."""

    def __init__(self) -> None:
        self.lines: list[bytes] = []

    def write(self, line: bytes) -> None:
        """Append one line."""
        self.lines.append(line)

    def sync(self) -> None:
        """Memory is all there is."""

    def give_back_reserve(self) -> None:
        """Nothing is reserved."""

    def close(self) -> None:
        """Nothing to close."""

    @property
    def data(self) -> bytes:
        """The whole record."""
        return b"".join(self.lines)


def new_record(runs: Path, *, utc_s: float, label: str, durable: bool = True) -> FileSink:
    """Make a new record file, named by UTC, the method's name and, where two begin in one second, a counter.

    Args:
        runs: the lab's folder of records.
        utc_s: POSIX seconds of the start.
        label: the method's name; only its letters and digits are used. Never a sample id.
        durable: as for FileSink.

    Raises:
        HalfdropError: the folder cannot be written to.
    """
    stamp = datetime.fromtimestamp(utc_s, UTC).strftime("%Y-%m-%dT%H%M%SZ")
    slug = re.sub(r"[^a-z0-9]+", "-", label.lower()).strip("-")[:40].strip("-") or "run"
    for counter in range(1, _LARGEST_COUNTER + 1):
        suffix = "" if counter == 1 else f"-{counter}"
        try:
            return FileSink(runs / f"{stamp}-{slug}{suffix}.jsonl", durable=durable)
        except FileExistsError:
            continue
        except OSError as error:
            raise HalfdropError(
                f"no record can be made there ({error.strerror})", where=str(runs), remedy="Make the folder writable"
            ) from error
    raise HalfdropError("too many records of this second", where=str(runs), remedy="Start again in a second")
