"""A port that is opened, read, lost and found again; what is sent and what it means is not known here.

Under a ManualClock bytes are taken when the clock settles, under real clocks when somebody waits for them.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable
from typing import NoReturn

from drivers.clock import Clock, Line, ManualClock
from drivers.errors import DeviceError, DeviceGoneError
from drivers.framing import FrameReader
from drivers.linktrouble import failed, gone, takes_no_bytes
from drivers.portfailure import is_port_failure, told_of, why_not_opened
from drivers.serialport import close_port, open_port
from drivers.transport import LinkSettings, Traffic, Transport
from drivers.virtualline import arriving, free_line

#: reads after which a port that never falls still is used as it is
MOST_STALE_READS = 4096


class HeldPort:
    """One port, held by one link.

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
            self._line = free_line(self._manual, self.url, self.where)
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
        try:
            for data in arriving(self._port, missing, self.where):
                self._took(data)
        except DeviceGoneError:
            raise
        except Exception as failure:
            self._fail(failure)
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
