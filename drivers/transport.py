"""What a link needs of a port: its methods, settings, a log of its traffic, and our own schemes of URLs."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal, Protocol

TRAFFIC_ENTRIES = 2000


class Transport(Protocol):
    """What the link needs of a port; pyserial's ports have it. Reads and writes must have time-outs."""

    @property
    def in_waiting(self) -> int:
        """Bytes that can be read at once (a port that cannot count says 1 for some)."""
        ...

    def read(self, size: int = 1, /) -> bytes:
        """Return up to `size` bytes; fewer, or none, after the time-out."""
        ...

    def write(self, data: bytes, /) -> int | None:
        """Send `data`."""
        ...

    def close(self) -> None:
        """Give the port back."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkSettings:
    """How a port is opened. Many boards reset when DTR changes, so both lines are set before the port is opened."""

    baud_rate: int = 115_200
    data_bits: Literal[5, 6, 7, 8] = 8
    parity: Literal["none", "even", "odd"] = "none"
    stop_bits: Literal[1, 2] = 1
    reply_end: bytes = b"\n"  # last byte of a reply; empty: a grammar without lines
    dtr: bool = False
    rts: bool = False
    reply_deadline_s: float = 0.5


Opener = Callable[[str, LinkSettings], Transport]
_OPENERS: dict[str, Opener] = {}


def opener_of(url: str) -> Opener | None:
    """Return what opens URLs of this scheme, or None where pyserial does."""
    return _OPENERS.get(url.partition("://")[0])


def register_scheme(scheme: str, opener: Opener) -> None:
    """Make URLs `scheme://...` openable by something other than pyserial."""
    _OPENERS[scheme] = opener


class Traffic(Protocol):
    """What is told of everything that goes over a line."""

    def sent(self, at_s: float, data: bytes) -> None:
        """Note what went out."""
        ...

    def received(self, at_s: float, data: bytes) -> None:
        """Note what came in."""
        ...


class TrafficLog:
    """The last messages of a line, for a bug report; bounded."""

    def __init__(self, entries: int = TRAFFIC_ENTRIES) -> None:
        self.entries: deque[tuple[float, Literal["sent", "received"], bytes]] = deque(maxlen=entries)

    def sent(self, at_s: float, data: bytes) -> None:
        """Note what went out."""
        self.entries.append((at_s, "sent", data))

    def received(self, at_s: float, data: bytes) -> None:
        """Note what came in."""
        self.entries.append((at_s, "received", data))
