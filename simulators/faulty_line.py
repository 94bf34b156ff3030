"""A line that loses, garbles, delays and mixes up messages: a device with trouble between it and its port."""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass

from simulators.device_end import Device
from simulators.noise import KeyedNoise


@dataclass(slots=True, kw_only=True)
class Spoiler:
    """One fault of messages while it is at work: `left` messages more, each with `chance`."""

    what: str
    left: float
    chance: float
    by_s: float
    noise: KeyedNoise
    seen: int = 0
    befallen: int = 0

    def strikes(self) -> bool:
        """Whether it befalls the message that comes now."""
        if self.left <= 0:
            return False
        self.seen += 1
        if self.chance < 1.0 and self.noise.uniform(self.seen) > self.chance:
            return False
        self.left -= 1
        self.befallen += 1
        return True


class FaultyLine:
    """Stands in front of a device and has its methods.

    Args:
        device: at the end of the line.
        wake: called with the time before anything else, so that what is scripted happens in its order.
        wakes_at_s: when that is wanted next.
    """

    def __init__(self, device: Device, wake: Callable[[float], None], wakes_at_s: Callable[[], float]) -> None:
        self.device = device
        self._wake, self._wakes_at_s = wake, wakes_at_s
        self.spoilers: list[Spoiler] = []
        self.silent_until_s = -math.inf
        self._late: deque[tuple[float, bytes]] = deque()
        self._reply_before = b""

    def feed(self, data: bytes, at_s: float) -> bytes:
        """Take bytes and return the reply, as far as both get through."""
        self._wake(at_s)
        reply = b""
        if at_s >= self.silent_until_s and not self._strikes("lost-message"):
            if spoiler := self._strikes("garbled-message"):
                data = garbled(data, spoiler)
            reply = self.device.feed(data, at_s)
        return self._on_its_way(reply, at_s)

    def advance(self, at_s: float) -> bytes:
        """Let what was due happen."""
        self._wake(at_s)
        said = self._on_its_way(self.device.advance(at_s), at_s)
        while self._late and self._late[0][0] <= at_s:
            said += self._late.popleft()[1]
        return said

    def next_event_s(self) -> float:
        """When something next happens of itself."""
        due_s = self._late[0][0] if self._late else math.inf
        return min(due_s, self.device.next_event_s(), self._wakes_at_s())

    def _on_its_way(self, reply: bytes, at_s: float) -> bytes:
        if not reply:
            return b""
        before, self._reply_before = self._reply_before, reply
        if at_s < self.silent_until_s or self._strikes("lost-reply"):
            return b""
        if self._strikes("earlier-reply"):
            reply = before
        if spoiler := self._strikes("garbled-reply"):
            reply = garbled(reply, spoiler)
        if spoiler := self._strikes("late-reply"):
            self._late.append((at_s + spoiler.by_s, reply))
            return b""
        return reply

    def _strikes(self, what: str) -> Spoiler | None:
        return next((one for one in self.spoilers if one.what == what and one.strikes()), None)


def garbled(data: bytes, spoiler: Spoiler) -> bytes:
    """Return the bytes with one to three of them changed, lost or doubled: another time, another way."""
    spoilt = bytearray(data)
    draw = spoiler.befallen * 16
    for turn in range(1 + int(spoiler.noise.uniform(-draw - 1) * 3) % 3):
        if not spoilt:
            break
        place = int(spoiler.noise.uniform(-draw - 3 * turn - 2) * len(spoilt)) % len(spoilt)
        kind, byte = spoiler.noise.uniform(-draw - 3 * turn - 3), spoiler.noise.uniform(-draw - 3 * turn - 4)
        if kind < 0.5:
            spoilt[place] = int(byte * 256) % 256
        elif kind < 0.65:
            spoilt[place] ^= 1 << int(byte * 8) % 8
        elif kind < 0.85:
            del spoilt[place]
        else:
            spoilt.insert(place, spoilt[place])
    return bytes(spoilt)
