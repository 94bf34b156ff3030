"""Notices that the computer slept or that its clock was set: UTC and run time part."""

from __future__ import annotations

from drivers.clock import Clock, real_seconds_scale

#: smaller steps are the ordinary business of keeping a clock right, s
LARGEST_STEP_S = 2.0


class ClockWatch:
    """Compares UTC and run time from look to look."""

    def __init__(self, clock: Clock) -> None:
        self._clock = clock
        self._limit_s = LARGEST_STEP_S * real_seconds_scale(clock)
        self._ahead_s = clock.utc_s() - clock.now_s()

    def step_s(self) -> float:
        """Return by how much UTC moved ahead of run time since the last look, s; 0 where that is ordinary."""
        ahead_s = self._clock.utc_s() - self._clock.now_s()
        step_s, self._ahead_s = ahead_s - self._ahead_s, ahead_s
        return round(step_s, 3) if abs(step_s) > self._limit_s else 0.0
