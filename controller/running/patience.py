"""Asking a pump that does not answer, until it does: a dose in doubt is worth a minute."""

from __future__ import annotations

from controller.running.stopping import StopSwitch
from drivers.clock import Clock, real_seconds_scale
from drivers.errors import DeviceError
from drivers.pump import LastDose, Pump

#: how long a pump that does not answer is asked what became of a dose, and how often, s
PATIENCE_S = 60.0
ASK_AGAIN_S = 2.0
_SHORTEST_S = 0.1


def last_dose_for_sure(pump: Pump, clock: Clock, stop: StopSwitch) -> LastDose:
    """Ask until the pump stands and says the same twice; its watchdog sees to it that it comes to stand.

    A stop cuts the waiting, not the asking.

    Raises:
        DeviceError: it says nothing that can be relied on within `PATIENCE_S`.
    """
    scale = real_seconds_scale(clock)
    until_s = clock.now_s() + PATIENCE_S * scale
    before: LastDose | None = None
    while True:
        try:
            last = pump.last_dose()
        except DeviceError:
            if clock.now_s() >= until_s or stop.event.is_set():
                raise
            before = None
            clock.wait(ASK_AGAIN_S * scale, stop.event)
            continue
        if last.state == "moving" and clock.now_s() < until_s and not stop.event.is_set():
            clock.wait(max(_SHORTEST_S, min(last.remaining_s, ASK_AGAIN_S)), stop.event)
        elif last == before or clock.now_s() >= until_s:
            return last
        before = last
