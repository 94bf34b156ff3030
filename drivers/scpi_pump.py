"""A syringe pump that speaks our SCPI tree."""

from __future__ import annotations

import threading
from collections.abc import Callable

from drivers import scpi_tree as tree
from drivers.clock import Clock, real_seconds_scale
from drivers.errors import (
    DeviceError,
    DeviceGarbledError,
    DeviceRefusedError,
    DeviceSilentError,
    StoppedError,
)
from drivers.exchange import ATTEMPTS
from drivers.identity import Identity
from drivers.link import Link
from drivers.pump import Delivered, LastDose, PumpStatus, Refill
from drivers.reunion import Acquaintance
from drivers.scpi_burette import WATCHDOG_S, BuretteTalk
from drivers.scpi_dose import ScpiDose, pause_s


class ScpiPump:
    """See drivers/pump.py.

    Args:
        stop: when set, a dose, fill or prime under way is halted at once and StoppedError raised.
        rate_ml_min: rate of doses; None: the pump's usual one.
    """

    def __init__(
        self, link: Link, clock: Clock, stop: threading.Event | None = None, *, rate_ml_min: float | None = None
    ) -> None:
        self._talk = BuretteTalk(link)
        self._where = link.where
        self._acquaintance = Acquaintance(link, self._talk.identity, self._talk.forget)
        self._clock, self._stop, self._rate_ml_min = clock, stop, rate_ml_min

    @property
    def step_ml(self) -> float:
        """The smallest volume it can deliver."""
        return self._talk.step_ml

    @property
    def syringe_ml(self) -> float:
        """What the full syringe holds."""
        return self._talk.known.capacity_steps * self._talk.step_ml

    @property
    def refill(self) -> Refill:
        """How the syringe is filled again."""
        return self._talk.known.refill

    def identify(self) -> Identity:
        """Ask who the device is.

        Raises:
            DeviceError: silent, garbled or gone.
        """
        return self._acquaintance.identity()

    def status(self) -> PumpStatus:
        """Ask for the account; while the pump stands, until two replies in a row agree, as a digit may be garbled.

        Raises:
            DeviceError: silent, garbled or gone.
        """
        status = self._talk.status()
        for _ in range(2 * ATTEMPTS):
            again = self._talk.status()
            if again == status or again.moving:
                self._talk.start_count = again.start_count
                return again
            status = again
        raise DeviceGarbledError(
            "gives another account each time it is asked", where=self._where, remedy="Check the cable's screen"
        )

    def last_dose(self) -> LastDose:
        """Ask which dose the pump knows last, and how much of it was delivered.

        Raises:
            DeviceError: silent, garbled or gone.
        """
        return self._talk.last_dose()

    def delivered_ml(self) -> float:
        """Ask for everything delivered through the tip since the pump's last start.

        Raises:
            DeviceError: silent, garbled or gone.
        """
        return self._talk.delivered_steps() * self.step_ml

    def dose(self, number: int, volume_ml: float) -> Delivered:
        """Deliver `volume_ml` (rounded to whole steps) as dose `number`, and wait until it is done.

        Raises:
            DeviceRefusedError: not a volume, number or rate that the pump takes now; nothing moved.
            DoseUnknownError: the pump started anew since it was last asked.
            DoseCutShortError: it halted of itself; what was delivered is known.
            DeviceError: silent, garbled or gone. Every one of these carries lowest_ml and highest_ml.
            StoppedError: `stop` was set; the pump was told to halt, see its `delivered` and `confirmed`.
        """
        self._may_begin(f"dose {number}")
        dose: ScpiDose | None = None
        try:
            rate = self._rate_ml_min or self._talk.known.usual_rate_ml_min
            steps = self._whole_steps(volume_ml)
            dose = ScpiDose(self._talk, self._clock, self._stop, number=number, steps=steps, rate=rate)
            dose.arm()
            self._may_begin(f"dose {number}")
            return dose.deliver()
        except DeviceError as error:
            if error.lowest_ml is None:
                error.lowest_ml, error.highest_ml = (0.0, 0.0) if dose is None else dose.bounds_ml()
            raise

    def watchdog_s(self) -> float | None:
        """Return the silence, s of real time, after which the pump halts."""
        return WATCHDOG_S

    def dose_and_fall_silent(self, number: int, volume_ml: float, silence_s: float) -> LastDose:
        """Begin a dose, say nothing for `silence_s` of real time, then ask what became of it (see drivers/silence.py).

        Raises:
            DeviceError, StoppedError: as `dose`.
        """
        rate = self._rate_ml_min or self._talk.known.usual_rate_ml_min
        steps = self._whole_steps(volume_ml)
        dose = ScpiDose(self._talk, self._clock, self._stop, number=number, steps=steps, rate=rate)
        dose.arm()
        dose.begin()
        if self._clock.wait(silence_s * real_seconds_scale(self._clock), self._stop):
            raise StoppedError(
                f"stopped in dose {number}", where=self._where, remedy="Look at the pump", confirmed=self.stop()
            )
        return self.last_dose()

    def fill(self) -> PumpStatus:
        """Fill the syringe, and wait until it is done.

        Raises:
            DeviceRefusedError: there is nothing to fill it from; nothing moved.
            DeviceError: silent, garbled or gone.
            StoppedError: as `dose`.
        """
        self._may_begin("filling")
        full = self._talk.known.capacity_steps
        # a fill that began once more goes no further than full
        self._move("filling", self._talk.fill, lambda: self._talk.contents_steps() >= full)
        return self.status()

    def prime(self, volume_ml: float) -> float:
        """Push `volume_ml` (rounded to whole steps) through the tip into the waste, wait, and return what was pushed.

        Raises:
            DeviceRefusedError: more than the syringe holds; nothing moved.
            DeviceError: silent, garbled or gone.
            StoppedError: as `dose`.
        """
        self._may_begin("priming")
        steps = self._whole_steps(volume_ml)
        before = self._talk.delivered_steps()
        self._move("priming", lambda: self._talk.prime(steps), lambda: self._talk.delivered_steps() != before)
        return (self._talk.delivered_steps() - before) * self.step_ml

    def stop(self) -> bool:
        """Halt at once. Raises no DeviceError: True when the pump confirmed that it stands."""
        return self._talk.stop()

    def _move(self, what: str, begin: Callable[[], tree.Motion], was_done: Callable[[], bool]) -> None:
        """Begin a motion, settling any doubt by asking, and wait until it is over."""
        for attempt in range(1, ATTEMPTS + 1):
            try:
                begin()
                break
            except (DeviceSilentError, DeviceGarbledError):
                if self._talk.motion().moving or was_done():
                    break
                if attempt == ATTEMPTS:
                    raise
        while (motion := self._talk.motion()).moving:
            if self._clock.wait(pause_s(motion.remaining_s, self._clock), self._stop):
                confirmed = self.stop()
                raise StoppedError(
                    f"stopped while {what}" + ("" if confirmed else "; the pump did not confirm that it stands"),
                    where=self._where,
                    remedy="Go on or end the run" if confirmed else "Look at the pump and switch it off if it moves",
                    confirmed=confirmed,
                )

    def _may_begin(self, what: str) -> None:
        if self._stop is not None and self._stop.is_set():
            raise StoppedError(f"stopped before {what} began", where=self._where, remedy="Go on or end the run")

    def _whole_steps(self, volume_ml: float) -> int:
        known = self._talk.known
        steps = round(volume_ml / known.step_ml) if abs(volume_ml) < 1e6 else 0  # NaN fails the comparison
        if not 0 < steps <= known.capacity_steps:
            raise DeviceRefusedError(
                f"volume of {volume_ml:g} mL, allowed {known.step_ml:g} to {self.syringe_ml:g} mL",
                where=self._where,
                remedy="Ask for a volume within what is allowed",
            )
        return steps
