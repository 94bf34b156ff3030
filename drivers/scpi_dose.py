"""One dose, delivered exactly once and never wrong, over a line that loses and garbles bytes.

It is armed under its number, read back and compared, and started by that number. After any doubt the pump is asked what
became of it; a start is sent again only when the pump itself said that the dose still waits, and a repeated start does
nothing. Arming moves nothing, so it may be repeated.
"""

from __future__ import annotations

import threading
from dataclasses import replace

from drivers.clock import Clock, real_seconds_scale
from drivers.errors import (
    DeviceError,
    DeviceGarbledError,
    DeviceRefusedError,
    DeviceSilentError,
    DoseCutShortError,
    DoseUnknownError,
    StoppedError,
)
from drivers.exchange import ATTEMPTS
from drivers.pump import Delivered, LastDose
from drivers.scpi_burette import BuretteTalk

#: real time between two questions while the pump moves; keeps its watchdog quiet
POLL_S = 0.5
SHORTEST_POLL_S = 0.001
_REMEDY = "Check the cable, its screen and the baud rate, then go on"


def pause_s(remaining_s: float, clock: Clock) -> float:
    """How long to wait, in run time, before a moving pump is asked again."""
    return min(max(remaining_s, SHORTEST_POLL_S), POLL_S * min(1.0, real_seconds_scale(clock)))


class ScpiDose:
    """A dose from its arming to its end."""

    def __init__(
        self, talk: BuretteTalk, clock: Clock, stop: threading.Event | None, *, number: int, steps: int, rate: float
    ) -> None:
        self._talk, self._clock, self._stop = talk, clock, stop
        self.number, self.steps, self.rate_ml_min = number, steps, rate
        self.volume_ml = steps * talk.step_ml
        self._steps_seen = 0
        self._may_have_begun, self._told_to_halt = False, False
        self._started_at_s = clock.now_s()

    def bounds_ml(self) -> tuple[float, float]:
        """Lowest and highest volume that it can have delivered, as far as is known now."""
        if not self._may_have_begun:
            return 0.0, 0.0
        return self._steps_seen * self._talk.step_ml, self.volume_ml

    def arm(self) -> None:
        """Arm until the pump reads back what was meant.

        Raises:
            DeviceError: it does not, or refuses; nothing moved.
            DoseUnknownError: the pump started anew since it was last asked; nothing of this dose moved.
        """
        failure: DeviceError | None = None
        for _ in range(ATTEMPTS):
            try:
                armed = self._talk.arm(self.number, self.steps, self.rate_ml_min, self._stop)
            except DeviceRefusedError as refusal:
                if isinstance(failure, DeviceRefusedError):
                    raise
                failure = refusal  # perhaps of what the line made of it: refused twice is refused
                continue
            except (DeviceSilentError, DeviceGarbledError) as doubt:
                failure = doubt
                armed = self._talk.armed(self._stop)
            self._check_start_count(armed.start_count)
            same_rate = abs(armed.rate_ml_min / self.rate_ml_min - 1.0) < 1e-6
            if same_rate and (armed.number, armed.steps) == (self.number, self.steps):
                return
        raise failure or self._garbled(f"dose {self.number} of {self.steps} steps is not what it reads back")

    def deliver(self) -> Delivered:
        """Start it and wait until it is done.

        Raises:
            DoseUnknownError: the pump started anew meanwhile.
            DoseCutShortError: the pump halted of itself.
            DeviceError: silent, garbled, refused or gone.
            StoppedError: told to stop; the pump was halted.
        """
        try:
            last = self._start()
            while last.state == "moving":
                self._steps_seen = last.steps
                if self._clock.wait(pause_s(last.remaining_s, self._clock), self._stop):
                    raise StoppedError("stopped", where=self._talk.where, remedy=_REMEDY)
                last = self._ask(self._stop)
        except StoppedError as stopped:
            raise self._halted() from stopped
        self._steps_seen = last.steps
        if last.state == "done":
            return self._delivered(last)
        raise DoseCutShortError(
            f"dose {self.number} ended at {last.volume_ml:g} of {self.volume_ml:g} mL: "
            f"{self._talk.status().fault or 'halted'}",
            where=self._talk.where,
            remedy="See to the pump, then go on",
            lowest_ml=last.volume_ml,
            highest_ml=last.volume_ml,
        )

    def begin(self) -> None:
        """Start it and wait for nothing. Raises: as `deliver`."""
        self._start()

    def _start(self) -> LastDose:
        self._started_at_s = self._clock.now_s()
        self._may_have_begun = True
        failure: DeviceError | None = None
        for _ in range(ATTEMPTS):
            refused_before = isinstance(failure, DeviceRefusedError)
            try:
                last = self._talk.start(self.number, self._stop)
            except (DeviceSilentError, DeviceGarbledError, DeviceRefusedError) as doubt:
                failure, last = doubt, None
            if last is None or not self._fits(last):
                try:
                    last = self._ask(self._stop)
                except DeviceGarbledError:
                    if isinstance(failure, DeviceRefusedError):
                        raise failure from None  # refused, and it holds nothing armed: its own words say more
                    raise
            if last.state != "armed":
                return last
            if refused_before and isinstance(failure, DeviceRefusedError):
                break  # refused twice is refused
        self._may_have_begun = False
        raise failure or self._garbled(f"dose {self.number} is armed but does not start")

    def _ask(self, stop: threading.Event | None) -> LastDose:
        """Ask what became of it, until the reply can be true; what is not expected must be said twice."""
        last: LastDose | None = None
        for _ in range(2 * ATTEMPTS):
            before, last = last, self._talk.last_dose(stop)
            if self._fits(last):
                return last
            if before is None or (before.start_count, before.number) != (last.start_count, last.number):
                continue
            self._check_start_count(last.start_count)
            if self._told_to_halt and last.number < self.number and last.state != "moving":
                return replace(last, number=self.number, state="stopped", steps=0, volume_ml=0.0)  # it never began
        raise self._garbled(f"says nothing that can be true of dose {self.number}")

    def _fits(self, last: LastDose) -> bool:
        return (
            last.start_count == self._talk.start_count
            and last.number == self.number
            and self._steps_seen <= last.steps <= self.steps
            and (last.state != "done" or last.steps == self.steps)
            and last.state != "none"
        )

    def _halted(self) -> StoppedError:
        talk = self._talk
        confirmed = talk.stop()
        self._told_to_halt = True
        delivered: Delivered | None = None
        if confirmed:
            try:
                delivered = self._delivered(self._ask(None))
            except DeviceError:
                delivered = None
        return StoppedError(
            f"stopped in dose {self.number}" + ("" if confirmed else "; the pump did not confirm that it stands"),
            where=talk.where,
            remedy="Go on or end the run" if confirmed else "Look at the pump and switch it off if it moves",
            delivered=delivered,
            confirmed=confirmed,
        )

    def _delivered(self, last: LastDose) -> Delivered:
        return Delivered(
            number=self.number,
            volume_ml=last.steps * self._talk.step_ml,
            steps=last.steps,
            started_at_s=self._started_at_s,
            at_s=self._clock.now_s(),
        )

    def _check_start_count(self, start_count: int) -> None:
        """Note the start count, or say that the pump started anew (a single garbled digit is no restart)."""
        before = self._talk.start_count
        if before is not None and before != start_count:
            if self._talk.last_dose().start_count != start_count:
                return
            self._talk.start_count = start_count
            lowest_ml, highest_ml = (0.0, self.volume_ml) if self._may_have_begun else (0.0, 0.0)
            raise DoseUnknownError(
                f"started anew (start {start_count}, before {before}); dose {self.number} delivered between "
                f"0 and {highest_ml:g} mL",
                where=self._talk.where,
                remedy="Check its supply; the volume's uncertainty is widened",
                lowest_ml=lowest_ml,
                highest_ml=highest_ml,
            )
        self._talk.start_count = start_count

    def _garbled(self, what: str) -> DeviceGarbledError:
        return DeviceGarbledError(what, where=self._talk.where, remedy=_REMEDY)
