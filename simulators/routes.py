"""Ways to a virtual device: in memory, or on a TCP socket of this computer (pseudo-terminals: simulators/port.py)."""

from __future__ import annotations

import errno
import select
import socket
from collections.abc import Callable
from typing import Protocol

from drivers.transport import LinkSettings, register_scheme

MOST_BYTES = 4096


class Route(Protocol):
    """Bytes from and to whoever opened `url`."""

    url: str

    def take(self, wait_s: float = 0.0) -> bytes:
        """Return what has come; if nothing has, wait up to `wait_s` of real time for it."""
        ...

    def give(self, data: bytes) -> int:
        """Send `data`; return how many bytes were taken (nobody there: none)."""
        ...

    def waits_on(self) -> list[int]:
        """File numbers that become readable when something comes; empty where there are none."""
        ...

    def close(self) -> None:
        """End the line."""
        ...


class MemoryRoute:
    """Both ends in one process; the link's end has a pyserial port's methods.

    Args:
        serve: called when the link's end looks for bytes, so that the device may answer; gets the real time in s that
            may be spent waiting (0: none).
    """

    def __init__(self, name: str, serve: Callable[[float], None], *, read_wait_s: float) -> None:
        if name in _MEMORY:
            raise ValueError(f"virtual port {name!r} is served already")
        self.url, self._name = f"memory://{name}", name
        self.to_device, self.to_link = bytearray(), bytearray()
        self.serve, self.read_wait_s = serve, read_wait_s
        self.closed, self.opened = False, False
        _MEMORY[name] = self

    def take(self, wait_s: float = 0.0) -> bytes:
        """Return what the link has written."""
        data = bytes(self.to_device)
        self.to_device.clear()
        return data

    def give(self, data: bytes) -> int:
        """Lay `data` out for the link."""
        self.to_link += data
        return len(data)

    def waits_on(self) -> list[int]:
        """Nothing to wait on."""
        return []

    def close(self) -> None:
        """Take the port away."""
        self.closed = True
        if _MEMORY.get(self._name) is self:
            del _MEMORY[self._name]


class MemoryPort:
    """The link's end of a MemoryRoute."""

    def __init__(self, route: MemoryRoute) -> None:
        if route.opened:
            raise OSError(errno.EBUSY, "another program has opened it")
        self._route = route
        route.opened = True
        route.to_link.clear()

    @property
    def in_waiting(self) -> int:
        """Bytes that can be read at once."""
        if self._route.read_wait_s:
            self._route.serve(0.0)
        self._check()
        return len(self._route.to_link)

    def read(self, size: int = 1, /) -> bytes:
        """Return up to `size` bytes, waiting a little for the first where time is real."""
        self._check()
        held = self._route.to_link
        if not held and self._route.read_wait_s:
            self._route.serve(self._route.read_wait_s)
        data = bytes(held[:size])
        del held[:size]
        return data

    def write(self, data: bytes, /) -> int:
        """Send."""
        self._check()
        self._route.to_device += data
        return len(data)

    def close(self) -> None:
        """Give the port back."""
        self._route.opened = False

    def _check(self) -> None:
        if self._route.closed:
            raise OSError(errno.ENODEV, "no such device any more")


_MEMORY: dict[str, MemoryRoute] = {}


def _open_memory(url: str, settings: LinkSettings) -> MemoryPort:
    route = _MEMORY.get(url.partition("://")[2])
    if route is None:
        raise OSError(errno.ENOENT, "no virtual port of that name is served in this process")
    return MemoryPort(route)


register_scheme("memory", _open_memory)


class TcpRoute:
    """A listening socket that serves one link at a time, on this computer only unless told otherwise."""

    def __init__(self, host: str = "127.0.0.1", tcp_port: int = 0) -> None:
        self._listener = socket.create_server((host, tcp_port))
        self._listener.setblocking(False)
        self._peer: socket.socket | None = None
        self.url = f"socket://{host}:{self._listener.getsockname()[1]}"

    def take(self, wait_s: float = 0.0) -> bytes:
        """Return what the link has written."""
        if wait_s > 0.0:
            select.select(self.waits_on(), [], [], wait_s)
        self._welcome()
        if self._peer is None:
            return b""
        try:
            data = self._peer.recv(MOST_BYTES)
        except BlockingIOError:
            return b""
        except OSError:
            data = b""
        if not data:
            self._peer.close()
            self._peer = None
        return data

    def give(self, data: bytes) -> int:
        """Send to the link, if there is one."""
        self._welcome()
        if self._peer is None:
            return 0
        try:
            return self._peer.send(data)
        except OSError:
            return 0

    def waits_on(self) -> list[int]:
        """The listening socket and the link's."""
        peer = [] if self._peer is None else [self._peer.fileno()]
        return [self._listener.fileno(), *peer]

    def close(self) -> None:
        """Hang up and listen no more."""
        if self._peer is not None:
            self._peer.close()
            self._peer = None
        self._listener.close()

    def _welcome(self) -> None:
        try:
            peer, _ = self._listener.accept()
        except OSError:
            return
        if self._peer is not None:
            if self._is_there(self._peer):
                peer.close()  # a port has one user
                return
            self._peer.close()
        peer.setblocking(False)
        peer.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._peer = peer

    @staticmethod
    def _is_there(peer: socket.socket) -> bool:
        try:
            return bool(peer.recv(1, socket.MSG_PEEK))
        except BlockingIOError:
            return True
        except OSError:
            return False
