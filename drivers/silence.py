"""A trial of a pump's watchdog: a dose is begun, and then nobody speaks to the pump for a while."""

from __future__ import annotations

from typing import Protocol, runtime_checkable

from drivers.pump import LastDose


@runtime_checkable
class FallsSilent(Protocol):
    """A pump that can be tried so."""

    def watchdog_s(self) -> float | None:
        """Return the silence, s of real time, after which the pump halts; None: it does not."""
        ...

    def dose_and_fall_silent(self, number: int, volume_ml: float, silence_s: float) -> LastDose:
        """Begin a dose, say nothing for `silence_s` of real time, then ask what became of it."""
        ...
