"""A disk that takes no more: in front of whatever a record is written into."""

from __future__ import annotations

import errno
import os
from typing import Protocol


class Written(Protocol):
    """Where a record's lines go."""

    def write(self, line: bytes) -> None:
        """Append one whole line."""
        ...

    def sync(self) -> None:
        """Bring it to the medium."""
        ...

    def give_back_reserve(self) -> None:
        """Free the space kept for the last lines."""
        ...

    def close(self) -> None:
        """Let go."""
        ...


class FaultyDisk:
    """Has a sink's methods. `full`: no space but the reserve; `read_only`: nothing can be written any more."""

    def __init__(self, sink: Written) -> None:
        self._sink = sink
        self.full = self.read_only = False

    def write(self, line: bytes) -> None:
        """Append one line, or say why not."""
        self._check()
        self._sink.write(line)

    def sync(self) -> None:
        """Bring it to the medium, or say why not."""
        if self.read_only:
            self._check()
        self._sink.sync()

    def give_back_reserve(self) -> None:
        """The reserve is space again."""
        self.full = False
        self._sink.give_back_reserve()

    def close(self) -> None:
        """Let go."""
        self._sink.close()

    def _check(self) -> None:
        number = errno.EROFS if self.read_only else errno.ENOSPC if self.full else 0
        if number:
            raise OSError(number, os.strerror(number))
