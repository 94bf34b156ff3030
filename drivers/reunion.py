"""After a drop-out: the device found at the port must be the one that was there before, and a dose may wait for it."""

from __future__ import annotations

import threading
from collections.abc import Callable
from typing import TypeVar

from drivers.clock import Clock, real_seconds_scale
from drivers.errors import DeviceGoneError
from drivers.identity import Identity
from drivers.link import Link

#: real time for which a dose under way waits for its pump to come back, and between two looks
PATIENCE_S, LOOK_EVERY_S = 20.0, 1.0

Answer = TypeVar("Answer")


class Acquaintance:
    """Remembers who answered on a link, and holds it against who answers after the port was lost.

    Args:
        ask: asks the device who it is.
        back: called when the same device is back (it may have forgotten its settings).
    """

    def __init__(self, link: Link, ask: Callable[[], Identity], back: Callable[[], None] | None = None) -> None:
        self._link, self._ask, self._back = link, ask, back
        self._known: Identity | None = None
        link.greet = self._greet

    def identity(self) -> Identity:
        """Ask who the device is, and remember it."""
        self._known = self._ask()
        return self._known

    def _greet(self) -> None:
        if self._known is not None and (found := self._ask()).key != self._known.key:
            raise DeviceGoneError(
                f"another device answers: {found.key}, before it was {self._known.key}",
                where=self._link.where,
                remedy="Connect the device with which the run began",
            )
        if self._back is not None:
            self._back()


def patiently(
    ask: Callable[[], Answer], clock: Clock, stop: threading.Event | None, *, patience_s: float = PATIENCE_S
) -> Answer:
    """Ask; while the port is gone, look again for a while.

    Raises:
        DeviceGoneError: it did not come back.
        DeviceError: anything else that goes wrong.
    """
    scale = real_seconds_scale(clock)
    until_s = clock.now_s() + patience_s * scale
    while True:
        try:
            return ask()
        except DeviceGoneError:
            if clock.now_s() >= until_s or clock.wait(LOOK_EVERY_S * scale, stop):
                raise
