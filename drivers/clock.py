"""Time. Waiting and being stopped are one act, and nothing else in the program sleeps.

SystemClock is real time; ScaledClock lets run time pass faster than real time, for a demonstration; ManualClock moves
only when somebody waits, for tests and studies. Deadlines of bytes on a line are real seconds under the first two.
"""

from __future__ import annotations

import heapq
import itertools
import math
import threading
import time
from collections.abc import Callable
from typing import Protocol

#: longest single real wait; between two of them an interrupt gets through on every platform
LONGEST_NAP_S = 0.2
#: 2026-01-01T00:00:00Z, where a manual clock starts unless told otherwise
MANUAL_START_UTC_S = 1_767_225_600.0
#: acts at one instant after which the parties must be going round in circles
MOST_ROUNDS = 10_000


class Clock(Protocol):
    """What every part of the program takes its time from."""

    def now_s(self) -> float:
        """Run time in s; only moves forward, its zero has no meaning."""
        ...

    def utc_s(self) -> float:
        """POSIX time in s."""
        ...

    def wait(self, seconds: float, stop: threading.Event | None = None) -> bool:
        """Let `seconds` of run time pass, or less if `stop` is set meanwhile; True if it is set."""
        ...


class SystemClock:
    """Real time."""

    def now_s(self) -> float:
        """Monotonic seconds."""
        return time.monotonic()

    def utc_s(self) -> float:
        """POSIX time in s."""
        return time.time()

    def wait(self, seconds: float, stop: threading.Event | None = None) -> bool:
        """Wait in real time; True if `stop` was set."""
        return _wait_real(seconds, stop)


class ScaledClock:
    """Run time that passes `scale` times as fast as real time (scale > 0)."""

    def __init__(self, scale: float) -> None:
        if not (math.isfinite(scale) and scale > 0):
            raise ValueError(f"time scale: got {scale!r}, allowed: a number above 0")
        self.scale = scale
        begun_s, begun_utc_s = time.monotonic(), time.time()
        self._leg = (begun_s, begun_s, begun_utc_s, begun_utc_s, scale)  # real and scaled time where it began, twice

    def now_s(self) -> float:
        """Scaled seconds, beginning at the monotonic time of the start."""
        began_s, reached_s, _, _, scale = self._leg
        return reached_s + (time.monotonic() - began_s) * scale

    def utc_s(self) -> float:
        """POSIX time in s at the start, moved on by scaled time."""
        _, _, began_utc_s, reached_utc_s, scale = self._leg
        return reached_utc_s + (time.time() - began_utc_s) * scale

    def change_scale(self, scale: float) -> None:
        """Let time pass at another scale from now on; a wait under way ends when it would have ended before."""
        if not (math.isfinite(scale) and scale > 0):
            raise ValueError(f"time scale: got {scale!r}, allowed: a number above 0")
        # one assignment: another thread may be reading the time
        self._leg = (time.monotonic(), self.now_s(), time.time(), self.utc_s(), scale)
        self.scale = scale

    def wait(self, seconds: float, stop: threading.Event | None = None) -> bool:
        """Wait `seconds` of scaled time; True if `stop` was set."""
        return _wait_real(seconds / self.scale, stop)


def real_seconds_scale(clock: Clock) -> float:
    """Return how much run time passes in one real second (1 for a clock that is not scaled)."""
    return clock.scale if isinstance(clock, ScaledClock) else 1.0


def _wait_real(seconds: float, stop: threading.Event | None) -> bool:
    until_s = time.monotonic() + seconds
    event = stop if stop is not None else threading.Event()
    while not event.is_set():
        left_s = until_s - time.monotonic()
        if left_s <= 0:
            return False
        event.wait(min(left_s, LONGEST_NAP_S))
    return True


class Party(Protocol):
    """One that acts in manual time: an end of a line (a link or a virtual port)."""

    def act(self) -> bool:
        """Take over every byte that was sent to this end, and do what is due now; True if anything was done."""
        ...

    def next_event_s(self) -> float:
        """When it will act of itself next; infinity if never."""
        ...


class Line:
    """Byte counts of one line. Bytes on their way are those written at one end and not yet taken at the other.

    `attached`: a link is open on it; `broken`: the device's end is gone (unplugged).
    """

    __slots__ = ("attached", "broken", "device_taken", "device_written", "link_taken", "link_written")

    def __init__(self) -> None:
        self.attached = self.broken = False
        self.clear()

    def clear(self) -> None:
        """Start counting anew, when a line is opened."""
        self.link_written = self.device_taken = self.device_written = self.link_taken = 0

    def to_device(self) -> int:
        """Bytes on their way to the device."""
        return self.link_written - self.device_taken

    def to_link(self) -> int:
        """Bytes on their way to the link."""
        return self.device_written - self.link_taken


class ManualClock:
    """Time that moves only in wait(), from event to event, so that two equal runs see equal instants.

    Links and virtual ports are its parties. Before time moves, each acts until no byte is on its way and nothing is
    due; then time goes to the next event of any party, or to the end of the wait. No thread is involved.
    """

    def __init__(self, start_s: float = 0.0, start_utc_s: float = MANUAL_START_UTC_S) -> None:
        self._now_s = start_s
        self._utc_ahead_s = start_utc_s - start_s
        self._parties: list[Party] = []
        self._lines: dict[str, Line] = {}
        self._alarms: list[tuple[float, int, Callable[[], None]]] = []
        self._alarm_numbers = itertools.count()

    def now_s(self) -> float:
        """Manual seconds."""
        return self._now_s

    def utc_s(self) -> float:
        """Manual POSIX time in s."""
        return self._now_s + self._utc_ahead_s

    def shift_utc(self, seconds: float) -> None:
        """Set UTC forward (or back) against run time, as a suspended computer or a corrected clock does."""
        self._utc_ahead_s += seconds

    def sleep_through(self, seconds: float) -> None:
        """The computer is suspended: the world goes on for `seconds`, and UTC has moved on against run time after."""
        limit_s = self._now_s + seconds
        while self.step(limit_s):
            pass
        self.shift_utc(seconds)

    def line(self, address: str) -> Line | None:
        """Return the counts of the virtual line at `address`, or None if no virtual port is there."""
        return self._lines.get(address)

    def add_line(self, address: str, line: Line) -> None:
        """Make a virtual line known by its address."""
        self._lines[address] = line

    def drop_line(self, address: str) -> None:
        """Forget a virtual line."""
        self._lines.pop(address, None)

    def join(self, party: Party) -> None:
        """Let `party` act whenever time is about to move."""
        if party not in self._parties:
            self._parties.append(party)

    def leave(self, party: Party) -> None:
        """Take `party` out again."""
        if party in self._parties:
            self._parties.remove(party)

    def call_at(self, at_s: float, action: Callable[[], None]) -> None:
        """Call `action` when time has come to `at_s` (for scripted events: a stop key, a fault)."""
        heapq.heappush(self._alarms, (at_s, next(self._alarm_numbers), action))

    def settle(self) -> None:
        """Let every party act until no byte is on its way and nothing is due now.

        Raises:
            RuntimeError: the parties never come to rest.
        """
        for _ in range(MOST_ROUNDS):
            busy = False
            for party in self._parties:
                if party.act():
                    busy = True
            if not busy:
                return
        raise RuntimeError(f"the virtual devices do not come to rest at {self._now_s} s")

    def step(self, limit_s: float) -> bool:
        """Settle, then move to the next event or to `limit_s`, and settle there; True while `limit_s` lies ahead."""
        self.settle()
        event_s = limit_s
        for party in self._parties:
            due_s = party.next_event_s()
            event_s = min(event_s, due_s)
        if self._alarms:
            event_s = min(event_s, self._alarms[0][0])
        self._now_s = max(self._now_s, event_s)
        while self._alarms and self._alarms[0][0] <= self._now_s:
            heapq.heappop(self._alarms)[2]()
        self.settle()
        return self._now_s < limit_s

    def wait(self, seconds: float, stop: threading.Event | None = None) -> bool:
        """Move time by `seconds`, event by event; True if `stop` is set, and then no further."""
        limit_s = self._now_s + max(0.0, seconds)
        while stop is None or not stop.is_set():
            if not self.step(limit_s):
                break
        return stop is not None and stop.is_set()
