"""Everything that goes over the lines of a bench, in a file that turns over and stays small; for a bug report."""

from __future__ import annotations

import logging
import logging.handlers
import time
from contextlib import ExitStack
from pathlib import Path

from configs.errors import HalfdropError
from drivers.transport import TrafficLog

#: size at which the file turns over, bytes, and how many older ones are kept
LARGEST_BYTES, KEPT = 2_000_000, 4
FILE_NAME = "traffic.log"


class _QuietHandler(logging.handlers.RotatingFileHandler):
    """A full disk ends the log, not the run."""

    def handleError(self, record: logging.LogRecord) -> None:  # noqa: N802 - the library's name
        """Write no more."""
        self.setLevel(logging.CRITICAL + 1)


class TrafficFile:
    """The file; `line` gives one line's share of it. Bytes are shown as text with escapes, so that nothing in it acts.

    Args:
        folder: logs/ of the lab folder; made where it is missing.

    Raises:
        OSError: the file cannot be written.
    """

    def __init__(self, folder: Path) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        self._handler = _QuietHandler(
            folder / FILE_NAME, maxBytes=LARGEST_BYTES, backupCount=KEPT, encoding="ascii", errors="backslashreplace"
        )

    def write(self, device: str, way: str, at_s: float, data: bytes) -> None:
        """Write one line: UTC, run time in s, device, > sent or < received, the bytes."""
        utc = time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime())
        text = f"{utc} {at_s:12.4f} {device} {way} {data!r}"
        self._handler.handle(logging.LogRecord("traffic", logging.INFO, "", 0, text, None, None))

    def close(self) -> None:
        """End it."""
        self._handler.close()

    def line(self, device: str) -> KeptTraffic:
        """Return what a link of `device` tells its traffic to."""
        return KeptTraffic(self, device)


class KeptTraffic(TrafficLog):
    """The last messages of a line in memory, and all of them in the file."""

    def __init__(self, file: TrafficFile, device: str) -> None:
        super().__init__()
        self._file, self._device = file, device

    def sent(self, at_s: float, data: bytes) -> None:
        """Note what went out."""
        super().sent(at_s, data)
        self._file.write(self._device, ">", at_s, data)

    def received(self, at_s: float, data: bytes) -> None:
        """Note what came in."""
        super().received(at_s, data)
        self._file.write(self._device, "<", at_s, data)


def traffic_of(place: Path | None, held: ExitStack) -> dict[str, TrafficLog]:
    """Return what keeps the last messages of each line, and all of them in logs/ of the lab folder `place`.

    Args:
        place: None: no file is kept.
        held: closes the file.

    Raises:
        HalfdropError: the file cannot be made.
    """
    if place is None:
        return {"pump": TrafficLog(), "probe": TrafficLog()}
    try:
        file = TrafficFile(place / "logs")
    except OSError as failure:
        raise HalfdropError(
            f"the traffic log cannot be written ({failure})",
            where=str(place / "logs"),
            remedy="See to the folder, or leave --traffic-log and traffic_log out",
        ) from failure
    held.callback(file.close)
    return {"pump": file.line("pump"), "probe": file.line("probe")}
