"""One serial line (pyserial itself is spoken in drivers/serialport.py only).

The link sends a request and hands out the lines that come back; what they mean is the grammar's business. It tells
a silent device, a garbled line and a port that is gone apart. Deadlines are counted here and nowhere else: in real
seconds, or in manual time under a ManualClock, where a silent device costs no real time.

A port that failed is looked for and opened again when the next question is sent (never for a command: what it would
move may have been switched off and on meanwhile).
"""

from __future__ import annotations

import threading
import time
from collections import deque
from collections.abc import Callable
from typing import NoReturn

from drivers.clock import Clock, Line, ManualClock
from drivers.errors import DeviceError, DeviceGoneError, StoppedError
from drivers.framing import FrameReader
from drivers.linktrouble import failed, garbled, gone, silent, takes_no_bytes
from drivers.portfailure import is_port_failure, told_of, why_not_opened
from drivers.serialport import SLICE_S, close_port, open_port
from drivers.transport import LinkSettings, Traffic, TrafficLog, Transport

__all__ = ["SLICE_S", "Link", "LinkSettings", "TrafficLog", "open_link"]

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
    traffic: Traffic | None = None,
    find: Callable[[], str] | None = None,
) -> Link:
    """Open the port at `url`: a device name, or any URL that pyserial or a registered scheme knows.

    Args:
        device: what is at the other end, for messages ("pump", "probe").
        find: says where the port is now, after it was gone (OSError: nowhere); None: where it was.

    Raises:
        DeviceGoneError: the port cannot be opened.
    """
    link = Link(url, settings or LinkSettings(), clock=clock, device=device, traffic=traffic, find=find)
    link.open()
    return link


class Link:
    """A line to one device. One owner, one thread; see `open_link`.

    `greet` is called when the port was lost and is open again, before anything else is sent: it makes sure that the
    same device answers, and raises where not. `openings` counts how often the port was opened. `name` is what the port
    is called for good, whatever its address is by now.
    """

    def __init__(
        self,
        url: str,
        settings: LinkSettings,
        *,
        clock: Clock,
        device: str,
        traffic: Traffic | None = None,
        find: Callable[[], str] | None = None,
    ) -> None:
        self.url = self.name = url
        self.settings, self.where = settings, f"{device} on {url}"
        self.traffic = traffic
        self._clock = clock
        self._manual = clock if isinstance(clock, ManualClock) else None
        self._line: Line | None = None
        self._port: Transport | None = None
        self._reader = FrameReader(settings.reply_end)
        self._frames: deque[bytes | None] = deque()
        self._find, self._lost = find, False
        self._failure: DeviceGoneError | None = None
        self.greet: Callable[[], None] | None = None
        self.openings = 0

    def open(self) -> None:
        """Open the port (again); whatever it held before is forgotten.

        Raises:
            DeviceGoneError: the port cannot be opened.
        """
        self.close()
        if self._manual is not None:
            self._line = self._manual.line(self.url)
            if self._line is None or self._line.broken:
                raise gone(
                    self.where, "no virtual port of this bench is there", "Serve the bench before opening its ports"
                )
            if self._line.attached:
                raise gone(self.where, "cannot be opened (another program has opened it)", "Close it there")
            self._manual.settle()
        try:
            self._port = open_port(self.url, self.settings)
        except Exception as failure:
            if not is_port_failure(failure):
                raise
            raise gone(self.where, *why_not_opened(self.url, failure)) from failure
        self.openings += 1
        self._lost, self._failure = False, None
        if self._manual is not None and self._line is not None:
            self._line.clear()
            self._line.attached = True
            self._manual.join(self)

    def close(self) -> None:
        """Give the port back; harmless if it is closed or gone."""
        if self._port is not None and self._manual is not None and self._line is not None and not self._line.broken:
            self._manual.settle()  # no byte stays behind in the line
        self._give_back()

    def _give_back(self) -> None:
        if self._port is None:
            return
        if self._manual is not None and self._line is not None:
            self._manual.leave(self)
            self._line.clear()
            self._line.attached = False
        port, self._port = self._port, None
        self._forget()
        close_port(port)

    def send(self, data: bytes, *, moves: bool = False) -> None:
        """Send a request; what came unasked before it is thrown away.

        Args:
            moves: the request may move something, so a port that was lost is not opened again for it.

        Raises:
            DeviceGoneError: the port failed, or was lost and is not there again.
            DeviceSilentError: the port takes no bytes.
        """
        if self._lost and not moves and self._failure is None:
            self._open_again()
        port = self._opened()
        try:
            self._drain(port)
            port = self._opened()
            written = port.write(data)
        except Exception as failure:
            self._fail(failure)
        if self._line is not None:
            self._line.link_written += len(data) if written is None else written
        if self.traffic is not None:
            self.traffic.sent(self._clock.now_s(), data)

    def pass_over(self) -> None:
        """Forget the lines that have come; one that has begun is kept (for devices that talk unasked).

        Raises:
            DeviceGoneError: as `send`.
        """
        if self._lost and self._failure is None:
            self._open_again()
        port = self._opened()
        try:
            self._take_waiting(port)
            self._opened()
        except Exception as failure:
            self._fail(failure)
        self._frames.clear()

    def receive_bytes(self, count: int, deadline_s: float) -> bytes:
        """Return `count` bytes, or those that came before `deadline_s`; for grammars without lines (reply_end empty).

        Raises:
            DeviceGoneError: the port failed.
        """
        while self._reader.waiting < count:
            if self._manual is not None:
                self._manual.settle()
                self._opened()
                if self._reader.waiting >= count or self._manual.now_s() >= deadline_s:
                    break
                self._manual.step(deadline_s)
            elif not self._take_some() and time.monotonic() >= deadline_s:
                break
        return self._reader.take(count)

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
                self._opened()
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
            if self._reader.held:
                raise garbled(self.where, "a line came without its end")
            raise silent(self.where, self.settings.reply_deadline_s)
        frame = self._frames.popleft()
        if frame is None:
            raise garbled(self.where, "a line without end came")
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
            try:
                self._take_some()  # shows how the port fails
            except DeviceGoneError as failure:
                self._failure = failure  # told to whoever uses the link next, not to who waits for time to pass
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
                    raise gone(self.where, f"{missing} bytes did not arrive within {ARRIVAL_LIMIT_S} s", "Start again")
            missing -= len(data)
            self._took(data)
        return True

    def next_event_s(self) -> float:
        """The link does nothing of itself (ManualClock's party)."""
        return float("inf")

    def _open_again(self) -> None:
        if self._find is not None:
            try:
                self.url = self._find()
            except OSError as failure:
                raise gone(self.where, f"is not there ({told_of(failure)})", "Connect it again") from failure
        self.open()
        if self.greet is not None:
            try:
                self.greet()
            except DeviceError:
                self._lose()
                raise

    def _lose(self) -> None:
        self._give_back()
        self._lost = True

    def _drain(self, port: Transport) -> None:
        self._take_waiting(port)
        self._forget()

    def _take_waiting(self, port: Transport) -> None:
        if self._line is not None:
            self.act()
            return
        for _ in range(MOST_STALE_READS):
            waiting = port.in_waiting
            data = port.read(waiting) if waiting else b""
            if not data:
                break
            self._took(data)

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
            failure, self._failure = self._failure, None
            if failure is not None:
                raise failure
            raise gone(self.where, "the port was lost" if self._lost else "the port is not open")
        return self._port

    def _fail(self, failure: Exception) -> NoReturn:
        if not is_port_failure(failure):
            raise failure
        if not takes_no_bytes(failure):
            self._lose()
        raise failed(self.where, failure) from failure
