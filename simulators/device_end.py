"""The device's end of one virtual line: takes what a link sent, lets the device answer, sends what is due."""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Callable
from typing import Protocol, runtime_checkable

from configs.errors import HalfdropError
from drivers.clock import Clock, Line, ManualClock, real_seconds_scale
from drivers.virtualline import ARRIVAL_LIMIT_S
from simulators.routes import Route

#: what a fault does to a message's bytes on their way; b"" loses them
Tamper = Callable[[bytes], bytes]


class Device(Protocol):
    """What is served: bytes in, bytes out, pure in time (s of the bench's clock)."""

    def feed(self, data: bytes, at_s: float) -> bytes:
        """Take bytes and return the reply."""
        ...

    def advance(self, at_s: float) -> bytes:
        """Let what was due happen; return what the device says of itself."""
        ...

    def next_event_s(self) -> float:
        """When something next happens of itself."""
        ...


@runtime_checkable
class RealTimed(Protocol):
    """A device with a watchdog, which counts real seconds: `time_scale` is run time in one real second."""

    time_scale: float


class LostBytesError(HalfdropError):
    """Bytes written at one end of a virtual line did not arrive at the other."""

    exit_status = 3


class VirtualPort:
    """One device on one line. `spoil_request` and `spoil_reply` are faults of the line, for tests and campaigns."""

    def __init__(self, device: Device, clock: Clock, *, latency_s: float) -> None:
        self.device, self.latency_s = device, latency_s
        self.line = Line()
        self.spoil_request: Tamper | None = None
        self.spoil_reply: Tamper | None = None
        self.route: Route
        self._clock = clock
        self._manual = isinstance(clock, ManualClock)
        self._scale = real_seconds_scale(clock)
        self._replies: deque[tuple[float, bytes]] = deque()

    @property
    def url(self) -> str:
        """What a link opens."""
        return self.route.url

    def act(self) -> bool:
        """Take what has come, let the device answer, send what is due (ManualClock's party).

        Raises:
            LostBytesError: bytes sent to this port do not arrive within a second of real time.
        """
        line = self.line
        missing = line.link_written - line.device_taken
        if missing and not line.broken:
            self._take(missing)
            return True
        return self.act_of_itself()

    def act_of_itself(self) -> bool:
        """Let the device do what is due now and send replies that are due."""
        now_s = self._clock.now_s()
        busy = False
        if self.device.next_event_s() <= now_s:
            self._answer(self.device.advance(now_s), now_s)
            busy = True
        while self._replies and self._replies[0][0] <= now_s:
            self._send(self._replies.popleft()[1])
            busy = True
        return busy

    def next_event_s(self) -> float:
        """When the device acts of itself, or a reply is due."""
        event_s = self.device.next_event_s()
        return min(event_s, self._replies[0][0]) if self._replies else event_s

    def take_what_came(self) -> bool:
        """Real time: take bytes without waiting."""
        data = self.route.take()
        if data:
            self._feed(data)
        return bool(data)

    def unplug(self) -> None:
        """Take the device's end away, as a pulled cable does."""
        self.line.broken = True
        self.route.close()

    def _take(self, missing: int) -> None:
        limit_s = 0.0
        while missing > 0:
            data = self.route.take(ARRIVAL_LIMIT_S if limit_s else 0.0)
            if not data:
                limit_s = limit_s or time.monotonic() + ARRIVAL_LIMIT_S
                if time.monotonic() > limit_s:
                    raise LostBytesError(
                        f"{missing} bytes did not arrive within {ARRIVAL_LIMIT_S:g} s",
                        where=f"virtual port {self.url}",
                        remedy="Open each virtual port from one program only",
                    )
                continue
            missing -= len(data)
            self.line.device_taken += len(data)
            self._feed(data)

    def _feed(self, data: bytes) -> None:
        now_s = self._clock.now_s()
        if self.spoil_request is not None:
            data = self.spoil_request(data)
        self._answer(self.device.feed(data, now_s), now_s)

    def _answer(self, reply: bytes, now_s: float) -> None:
        if not reply:
            return
        if self.spoil_reply is not None:
            reply = self.spoil_reply(reply)
        if self.latency_s:
            self._replies.append((now_s + self.latency_s * self._scale, reply))
        else:
            self._send(reply)

    def _send(self, reply: bytes) -> None:
        if self.line.broken or (self._manual and not self.line.attached):
            return
        self.line.device_written += self.route.give(reply)
