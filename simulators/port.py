"""Virtual ports: devices of the simulated bench served as ports that any program can open.

Under a ManualClock nothing runs on another thread: a port is a party of the clock and acts when time is about to move.
Under real (or scaled) time, ports in memory act when they are read, and pseudo-terminals and sockets are served by one
thread, or by the caller of `run`. Latency of replies is counted in real seconds, or in manual time.
"""

from __future__ import annotations

import math
import select
import socket
import threading
import time
from collections import deque
from collections.abc import Callable
from types import TracebackType
from typing import Literal, Protocol, Self

from configs.errors import HalfdropError
from drivers.clock import Clock, Line, ManualClock, real_seconds_scale
from drivers.link import ARRIVAL_LIMIT_S, SLICE_S
from simulators.devices import PumpDevice
from simulators.routes import MemoryRoute, PtyRoute, Route, TcpRoute

RouteName = Literal["memory", "pty", "tcp"]
LONGEST_SLEEP_S = 0.2
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
        if self._manual and not self.line.attached:
            return
        self.line.device_written += self.route.give(reply)


class VirtualPorts:
    """The ports of one simulated bench, which share its world and its clock."""

    def __init__(self, clock: Clock) -> None:
        self.clock = clock
        self.ports: dict[str, VirtualPort] = {}
        self._manual = clock if isinstance(clock, ManualClock) else None
        self._scale = real_seconds_scale(clock)
        self._lock = threading.RLock()  # real time only: the serving thread and a reader of a port in memory
        self._closing = threading.Event()
        self._thread: threading.Thread | None = None
        self._wake: tuple[socket.socket, socket.socket] | None = None

    def add(
        self, name: str, device: Device, route: RouteName = "memory", *, latency_s: float = 0.0, tcp_port: int = 0
    ) -> VirtualPort:
        """Serve `device`.

        Args:
            name: unique in this process for a port in memory.
            latency_s: time between a message and its reply.
            tcp_port: 0 takes a free one.
        """
        port = VirtualPort(device, self.clock, latency_s=latency_s)
        if route == "memory":
            wait_s = 0.0 if self._manual is not None else SLICE_S
            port.route = MemoryRoute(name, self._serve_memory, read_wait_s=wait_s)
        else:
            port.route = PtyRoute() if route == "pty" else TcpRoute(tcp_port=tcp_port)
        if isinstance(device, PumpDevice):
            device.time_scale = self._scale
        with self._lock:
            self.ports[name] = port
        if self._manual is not None:
            self._manual.add_line(port.url, port.line)
            self._manual.join(port)
        elif route != "memory":
            self._start()
        return port

    def close(self) -> None:
        """End all lines and the serving thread."""
        self._closing.set()
        if self._wake is not None:
            self._wake[1].send(b"!")
        if self._thread is not None:
            self._thread.join()
        for port in self.ports.values():
            if self._manual is not None:
                self._manual.leave(port)
                self._manual.drop_line(port.url)
            if not port.line.broken:
                port.unplug()
        if self._wake is not None:
            for end in self._wake:
                end.close()
        self.ports.clear()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    # real time

    def _start(self) -> None:
        if self._thread is None:
            self._wake = socket.socketpair()
            self._thread = threading.Thread(target=self._run, name="virtual ports", daemon=True)
            self._thread.start()
        elif self._wake is not None:
            self._wake[1].send(b"+")

    def _run(self) -> None:
        wake = self._wake
        while wake is not None and not self._closing.is_set():
            with self._lock:
                self._serve()
                numbers = [number for port in self._living() for number in port.route.waits_on()]
                sleep_s = self._real_s_to_next_event()
            woken = wake[0].fileno()
            try:
                readable, _, _ = select.select([woken, *numbers], [], [], sleep_s)
            except (OSError, ValueError):
                continue  # a port was unplugged meanwhile
            if woken in readable:
                wake[0].recv(64)

    def _serve(self) -> None:
        """Let events happen in their order, then take what came, until there is nothing more now."""
        busy = True
        while busy:
            busy = False
            for port in sorted(self._living(), key=VirtualPort.next_event_s):
                busy = port.act_of_itself() or busy
            for port in self._living():
                busy = port.take_what_came() or busy

    def _serve_memory(self, wait_s: float) -> None:
        with self._lock:
            self._serve()
            due_s = self._real_s_to_next_event()
        if wait_s > 0.0 and not any(isinstance(p.route, MemoryRoute) and p.route.to_link for p in self._living()):
            self._closing.wait(min(wait_s, due_s))
            with self._lock:
                self._serve()

    def _real_s_to_next_event(self) -> float:
        event_s = min((port.next_event_s() for port in self._living()), default=math.inf)
        return min(LONGEST_SLEEP_S, max(0.0, (event_s - self.clock.now_s()) / self._scale))

    def _living(self) -> list[VirtualPort]:
        return [port for port in self.ports.values() if not port.line.broken]
