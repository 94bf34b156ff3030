"""One serial line, and the only place that speaks pyserial.

The link sends a request and hands out the lines that come back; what they mean is the grammar's business. It tells
a silent device, a garbled line and a port that is gone apart. Deadlines are counted here and nowhere else: in real
seconds, or in manual time under a ManualClock, where a silent device costs no real time.
"""

from __future__ import annotations

import threading
import time
from collections import deque
from typing import Any, NoReturn

from drivers.clock import Clock, Line, ManualClock
from drivers.errors import DeviceError, DeviceGarbledError, DeviceGoneError, DeviceSilentError, StoppedError
from drivers.framing import FrameReader
from drivers.transport import LinkSettings, TrafficLog, Transport, opener_of

__all__ = ["Link", "LinkSettings", "TrafficLog", "open_link"]

#: longest single blocking read; between two of them a stop gets through
SLICE_S = 0.05
WRITE_DEADLINE_S = 1.0
#: real time within which bytes on a virtual line must arrive under a ManualClock
ARRIVAL_LIMIT_S = 1.0
#: reads after which a port that never falls still is used as it is
MOST_STALE_READS = 4096


def open_link(
    url: str,
    settings: LinkSettings | None = None,
    *,
    clock: Clock,
    device: str = "device",
    traffic: TrafficLog | None = None,
) -> Link:
    """Open the port at `url`: a device name, or any URL that pyserial or a registered scheme knows.

    Args:
        device: what is at the other end, for messages ("pump", "probe").

    Raises:
        DeviceGoneError: the port cannot be opened.
    """
    link = Link(url, settings or LinkSettings(), clock=clock, device=device, traffic=traffic)
    link.open()
    return link


class Link:
    """A line to one device. One owner, one thread; see `open_link`."""

    def __init__(
        self, url: str, settings: LinkSettings, *, clock: Clock, device: str, traffic: TrafficLog | None = None
    ) -> None:
        self.url, self.settings, self.where = url, settings, f"{device} on {url}"
        self.traffic = traffic
        self._clock = clock
        self._manual = clock if isinstance(clock, ManualClock) else None
        self._line: Line | None = None
        self._port: Transport | None = None
        self._reader = FrameReader()
        self._frames: deque[bytes | None] = deque()

    def open(self) -> None:
        """Open the port (again); whatever it held before is forgotten.

        Raises:
            DeviceGoneError: the port cannot be opened.
        """
        self.close()
        if self._manual is not None:
            self._line = self._manual.line(self.url)
            if self._line is None or self._line.broken:
                raise self._gone("no virtual port of this bench is there", "Serve the bench before opening its ports")
            if self._line.attached:
                raise self._gone("cannot be opened (another program has opened it)", "Close it there")
            self._manual.settle()
        try:
            self._port = _open_port(self.url, self.settings)
        except Exception as failure:
            if not _is_port_failure(failure):
                raise
            raise self._gone(
                f"cannot be opened ({_told(failure)})",
                "Check that it is connected and switched on, that no other program uses it, and its name in the bench",
            ) from failure
        if self._manual is not None and self._line is not None:
            self._line.clear()
            self._line.attached = True
            self._manual.join(self)

    def close(self) -> None:
        """Give the port back; harmless if it is closed or gone."""
        if self._port is None:
            return
        if self._manual is not None and self._line is not None:
            if not self._line.broken:
                self._manual.settle()  # no byte stays behind in the line
            self._manual.leave(self)
            self._line.clear()
            self._line.attached = False
        port, self._port = self._port, None
        self._forget()
        # pyserial forgets a socket unclosed when its other end is gone; close it ourselves
        below = getattr(port, "_socket", None)
        try:
            port.close()
        except Exception as failure:
            if not _is_port_failure(failure):
                raise
        finally:
            if below is not None:
                below.close()

    def send(self, data: bytes) -> None:
        """Send a request; what came unasked before it is thrown away.

        Raises:
            DeviceGoneError: the port failed.
            DeviceSilentError: the port takes no bytes.
        """
        port = self._opened()
        try:
            self._drain(port)
            written = port.write(data)
        except Exception as failure:
            self._fail(failure)
        if self._line is not None:
            self._line.link_written += len(data) if written is None else written
        if self.traffic is not None:
            self.traffic.sent(self._clock.now_s(), data)

    def receive(self, deadline_s: float, stop: threading.Event | None = None) -> bytes:
        """Return the next line that comes in before `deadline_s`, an instant of line_s().

        Raises:
            DeviceSilentError: nothing came.
            DeviceGarbledError: a line came without its end, or one too long.
            DeviceGoneError: the port failed.
            StoppedError: `stop` was set while waiting.
        """
        while not self._frames:
            stopped = stop is not None and stop.is_set()
            if self._manual is not None:
                self._manual.settle()
                if self._frames:
                    break
                if self._manual.now_s() < deadline_s and not stopped:
                    self._manual.step(deadline_s)
                    continue
            else:
                took = self._take_some()
                if self._frames or (time.monotonic() < deadline_s and (took or not stopped)):
                    continue
            if stopped and self.line_s() < deadline_s:
                raise StoppedError("stopped while waiting for an answer", where=self.where, remedy="Start again")
            raise self._nothing()
        frame = self._frames.popleft()
        if frame is None:
            raise DeviceGarbledError("a line without end came", where=self.where, remedy=_GARBLED_REMEDY)
        return frame

    def line_s(self) -> float:
        """The time that deadlines of bytes are counted in, s: real, or manual under a ManualClock."""
        return time.monotonic() if self._manual is None else self._manual.now_s()

    def act(self) -> bool:
        """Take the bytes on their way to this end (ManualClock's party).

        Raises:
            DeviceGoneError: they do not arrive within a second of real time.
        """
        line = self._line
        if line is None or self._port is None:
            return False
        if line.broken:
            self._take_some()  # shows how the port fails
            return False
        missing = line.device_written - line.link_taken
        if not missing:
            return False
        limit_s = 0.0
        while missing > 0:
            try:
                data = self._port.read(missing)
            except Exception as failure:
                self._fail(failure)
            if not data:
                limit_s = limit_s or time.monotonic() + ARRIVAL_LIMIT_S
                if time.monotonic() > limit_s:
                    raise self._gone(f"{missing} bytes did not arrive within {ARRIVAL_LIMIT_S} s", "Start again")
            missing -= len(data)
            self._took(data)
        return True

    def next_event_s(self) -> float:
        """The link does nothing of itself (ManualClock's party)."""
        return float("inf")

    def _drain(self, port: Transport) -> None:
        if self._line is not None:
            self.act()
        else:
            for _ in range(MOST_STALE_READS):
                waiting = port.in_waiting
                if not waiting or not port.read(waiting):
                    break
        self._forget()

    def _take_some(self) -> bool:
        port = self._opened()
        try:
            data = port.read(max(1, port.in_waiting))
        except Exception as failure:
            self._fail(failure)
        self._took(data)
        return bool(data)

    def _took(self, data: bytes) -> None:
        if not data:
            return
        if self._line is not None:
            self._line.link_taken += len(data)
        if self.traffic is not None:
            self.traffic.received(self._clock.now_s(), data)
        self._frames.extend(self._reader.feed(data))

    def _forget(self) -> None:
        self._reader.clear()
        self._frames.clear()

    def _opened(self) -> Transport:
        if self._port is None:
            raise self._gone("the port is not open", "Open it again")
        return self._port

    def _nothing(self) -> DeviceError:
        if self._reader.held:
            return DeviceGarbledError("a line came without its end", where=self.where, remedy=_GARBLED_REMEDY)
        return DeviceSilentError(
            f"no answer within {self.settings.reply_deadline_s:g} s", where=self.where, remedy=_SILENT_REMEDY
        )

    def _fail(self, failure: Exception) -> NoReturn:
        if not _is_port_failure(failure):
            raise failure
        if type(failure).__name__ == "SerialTimeoutException":
            raise DeviceSilentError(
                f"takes no bytes within {WRITE_DEADLINE_S:g} s", where=self.where, remedy=_SILENT_REMEDY
            ) from failure
        raise self._gone(
            f"the port failed ({_told(failure)})", "Check the cable and the supply, then go on"
        ) from failure

    def _gone(self, what: str, remedy: str) -> DeviceGoneError:
        return DeviceGoneError(what, where=self.where, remedy=remedy)


_SILENT_REMEDY = "Check that it is switched on, its cable, and the baud rate in the bench"
_GARBLED_REMEDY = "Check the baud rate, the cable's screen and that no other program uses the port"


def _is_port_failure(failure: Exception) -> bool:
    """Whether it is one of the ways in which a port fails: after an unplug all of them were seen.

    `termios.error` is no OSError and termios does not exist everywhere, so it is known by its module. A ValueError is
    what pyserial says to a URL or setting that it does not know.
    """
    return isinstance(failure, OSError | ValueError) or type(failure).__module__ == "termios"


def _told(failure: Exception) -> str:
    return " ".join(str(failure).split()) or type(failure).__name__


def _open_port(url: str, settings: LinkSettings) -> Transport:
    opener = opener_of(url)
    if opener is not None:
        return opener(url, settings)
    import serial

    parities = {"none": serial.PARITY_NONE, "even": serial.PARITY_EVEN, "odd": serial.PARITY_ODD}
    port: Any = serial.serial_for_url(
        url,
        do_not_open=True,
        exclusive=True,
        baudrate=settings.baud_rate,
        bytesize=settings.data_bits,
        parity=parities[settings.parity],
        stopbits=settings.stop_bits,
        timeout=SLICE_S,
        write_timeout=WRITE_DEADLINE_S,
    )
    port.dtr, port.rts = settings.dtr, settings.rts
    port.open()
    transport: Transport = port
    return transport
