"""logs/halfdrop.log: what happened in this lab folder, in order, for whoever comes back; rotated and bounded."""

from __future__ import annotations

import logging
from logging.handlers import RotatingFileHandler
from pathlib import Path

from controller.journal import utc_text
from controller.records.record import printable

LOG_NAME = "halfdrop.log"
LARGEST_BYTES = 1_000_000
OLDER_FILES = 5
LONGEST_LINE = 2000


class LabLog:
    """One line at a time, with UTC; a log that cannot be written never stops a run.

    Args:
        folder: the lab's folder of logs.
    """

    def __init__(self, folder: Path) -> None:
        self._handler = _Quiet(
            folder / LOG_NAME, maxBytes=LARGEST_BYTES, backupCount=OLDER_FILES, encoding="utf-8", delay=True
        )

    def write(self, text: str, *, utc_s: float) -> None:
        """Add a line; what a terminal would obey is replaced, long texts are cut."""
        line = f"{utc_text(utc_s)} {printable(' '.join(text.split()))[:LONGEST_LINE]}"
        self._handler.emit(logging.LogRecord("halfdrop", logging.INFO, "", 0, line, None, None))

    def close(self) -> None:
        """Let go of the file."""
        self._handler.close()


class _Quiet(RotatingFileHandler):
    def handleError(self, record: logging.LogRecord) -> None:  # noqa: N802 (the library's name)
        """A full or missing disk is the record's business, not the log's."""
