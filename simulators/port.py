"""Virtual ports: devices of the simulated bench served as ports that any program can open.

Under a ManualClock nothing runs on another thread: a port is a party of the clock and acts when time is about to move.
Under real (or scaled) time, ports in memory act when they are read, and pseudo-terminals and sockets are served by one
thread, or by the caller of `run`. Latency of replies is counted in real seconds, or in manual time.
"""

from __future__ import annotations

import contextlib
import errno
import math
import os
import select
import socket
import threading
from types import TracebackType
from typing import Literal, Self

from drivers.clock import Clock, ManualClock, real_seconds_scale
from drivers.link import SLICE_S
from simulators.device_end import Device, RealTimed, VirtualPort
from simulators.routes import MOST_BYTES, MemoryRoute, TcpRoute

RouteName = Literal["memory", "pty", "tcp"]
LONGEST_SLEEP_S = 0.2
_NOT_NOW = (errno.EAGAIN, errno.EWOULDBLOCK)


class PtyRoute:
    """A pseudo-terminal. The slave end is kept open here too, so that a link may come and go."""

    def __init__(self) -> None:
        import pty
        import tty

        self._master, self._slave = pty.openpty()
        tty.setraw(self._slave)
        os.set_blocking(self._master, False)
        self.url = os.ttyname(self._slave)

    def take(self, wait_s: float = 0.0) -> bytes:
        """Return what the link has written."""
        self._leave_something_to_set()
        try:
            return os.read(self._master, MOST_BYTES)
        except OSError as failure:
            if failure.errno not in _NOT_NOW:
                raise
        if wait_s <= 0.0 or not select.select([self._master], [], [], wait_s)[0]:
            return b""
        return os.read(self._master, MOST_BYTES)

    def _leave_something_to_set(self) -> None:
        """Put back a speed that nobody uses.

        A pseudo-terminal knows no parity, and setting one succeeds as long as something else is set with it: without
        this a link with parity could be opened once only.
        """
        import termios

        with contextlib.suppress(termios.error):
            settings = termios.tcgetattr(self._slave)
            if settings[4] != termios.B50:
                settings[4] = settings[5] = termios.B50
                termios.tcsetattr(self._slave, termios.TCSANOW, settings)

    def give(self, data: bytes) -> int:
        """Send to whoever holds the slave end."""
        try:
            return os.write(self._master, data)
        except OSError as failure:
            if failure.errno in _NOT_NOW:
                return 0  # nobody reads, and the terminal's buffer is full
            raise

    def waits_on(self) -> list[int]:
        """The master end."""
        return [self._master]

    def close(self) -> None:
        """Close both ends."""
        for end in (self._master, self._slave):
            if end >= 0:
                os.close(end)
        self._master = self._slave = -1


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
        if isinstance(device, RealTimed):
            device.time_scale = self._scale
        with self._lock:
            for former in [known for known, held in self.ports.items() if held.device is device and held.line.broken]:
                self._forget(self.ports.pop(former))
            self.ports[name] = port
        if self._manual is not None:
            self._manual.add_line(port.url, port.line)
            self._manual.join(port)
        elif route != "memory":
            self._start()
        return port

    def plug_in(self, name: str, *, other_name: str | None = None) -> VirtualPort:
        """Bring the device of an unplugged port back, under the same name or another."""
        with self._lock:
            gone = self.ports.pop(name)
        if self._manual is not None:
            self._manual.leave(gone)
            self._manual.drop_line(gone.url)
        route: RouteName = "tcp" if isinstance(gone.route, TcpRoute) else "memory"
        if isinstance(gone.route, PtyRoute):
            route = "pty"
        return self.add(other_name or name, gone.device, route, latency_s=gone.latency_s)

    def where(self, device: Device) -> str:
        """Return the address at which a device is now, whatever stands between it and its port.

        Raises:
            OSError: it is unplugged.
        """
        with self._lock:
            for port in self._living():
                end: object = port.device
                while end is not device and hasattr(end, "device"):
                    end = end.device
                if end is device:
                    return port.url
        raise OSError(errno.ENODEV, "the device is not plugged in")

    def _forget(self, port: VirtualPort) -> None:
        if self._manual is not None:
            self._manual.leave(port)
            self._manual.drop_line(port.url)

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
