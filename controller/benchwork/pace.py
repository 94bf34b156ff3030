"""How fast a bench's time passes: as fast as the computer can, so many times real time, or as it does."""

from __future__ import annotations

import time
from collections.abc import Callable

from configs.errors import HalfdropError
from drivers.clock import Clock, ManualClock, ScaledClock, SystemClock

FAST = "fast"


def clock_of(time_scale: str | None, *, start_utc_s: float | None = None) -> Clock:
    """Return the clock of a simulated bench.

    Args:
        time_scale: None or "fast": as fast as the computer can; else how many times real time.
        start_utc_s: POSIX time at which manual time begins; None: now.

    Raises:
        HalfdropError: neither "fast" nor a number above 0.
    """
    if time_scale is None or time_scale == FAST:
        return ManualClock(start_utc_s=time.time() if start_utc_s is None else start_utc_s)
    try:
        scale = float(time_scale)
        if not 0 < scale <= 1000:
            raise ValueError
    except ValueError:
        raise HalfdropError(
            f"got {time_scale!r}, allowed: {FAST}, or a number above 0, at most 1000",
            where="--time-scale",
            remedy="Use 1 for real time, 20 to watch",
        ) from None
    return SystemClock() if scale == 1 else ScaledClock(scale)


def time_scale_of(clock: Clock) -> Callable[[float], None] | None:
    """Return what changes how fast a simulated bench's time passes; None where time is real, or passes by itself."""
    return clock.change_scale if isinstance(clock, ScaledClock) else None
