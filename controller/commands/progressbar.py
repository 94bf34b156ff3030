"""A progress bar with a time left, on standard error and only where that is a terminal."""

from __future__ import annotations

import sys
import time
from types import TracebackType
from typing import Self

_WIDTH = 30


class ProgressBar:
    """Shows how much of long work is done.

    Args:
        what: is being counted ("simulated runs").
        total: how many there will be.
    """

    def __init__(self, what: str, *, total: int) -> None:
        self._what, self._total = what, total
        self._begun_s = time.monotonic()
        self._shown = sys.stderr.isatty()

    def reach(self, done: int) -> None:
        """Show that `done` of them are done."""
        if not self._shown:
            return
        spent_s = time.monotonic() - self._begun_s
        left_s = spent_s / done * (self._total - done) if done else 0.0
        filled = _WIDTH * done // max(1, self._total)
        bar = "#" * filled + "." * (_WIDTH - filled)
        sys.stderr.write(f"\r[{bar}] {done}/{self._total} {self._what}, about {left_s:.0f} s left ")
        sys.stderr.flush()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._shown:
            sys.stderr.write("\r\x1b[K")
            sys.stderr.flush()
