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
from collections.abc import Callable

from drivers.clock import Clock
from drivers.errors import StoppedError
from drivers.heldport import HeldPort
from drivers.linktrouble import garbled, silent
from drivers.serialport import SLICE_S
from drivers.transport import LinkSettings, Traffic, TrafficLog

__all__ = ["SLICE_S", "Link", "LinkSettings", "TrafficLog", "open_link"]


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


class Link(HeldPort):
    """A line to one device. One owner, one thread; see `open_link`."""

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
