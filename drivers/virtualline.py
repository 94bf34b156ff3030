"""What a link does with its line under a ManualClock, where bytes are counted at both ends and time waits for them."""

from __future__ import annotations

import time
from collections.abc import Iterator

from drivers.clock import Line, ManualClock
from drivers.linktrouble import gone
from drivers.transport import Transport

#: real time within which bytes on a virtual line must arrive under a ManualClock
ARRIVAL_LIMIT_S = 1.0


def free_line(clock: ManualClock, url: str, where: str) -> Line:
    """Return the line at this address.

    Raises:
        DeviceGoneError: there is none, or another link holds it.
    """
    line = clock.line(url)
    if line is None or line.broken:
        raise gone(where, "no virtual port of this bench is there", "Serve the bench before opening its ports")
    if line.attached:
        raise gone(where, "cannot be opened (another program has opened it)", "Close it there")
    return line


def arriving(port: Transport, missing: int, where: str) -> Iterator[bytes]:
    """Yield the bytes that are on their way to this end, until all of them are there.

    Raises:
        DeviceGoneError: they do not arrive within a second of real time.
        Exception: any of the ways in which a port fails, see `is_port_failure`.
    """
    limit_s = 0.0
    while missing > 0:
        data = port.read(missing)
        if not data:
            limit_s = limit_s or time.monotonic() + ARRIVAL_LIMIT_S
            if time.monotonic() > limit_s:
                raise gone(where, f"{missing} bytes did not arrive within {ARRIVAL_LIMIT_S} s", "Start again")
        missing -= len(data)
        yield data
