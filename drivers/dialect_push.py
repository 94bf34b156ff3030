"""One push of a pump without dose numbers, done once and never wrong: what the device counts settles every doubt.

The count is read before and after. Where the device takes a target, that is read back and compared before anything
moves. The command that moves goes out once; it is sent again only when the device said, twice, that it stands and that
nothing went through its tip. While it moves the count is watched, and more than was asked halts the pump.
"""

from __future__ import annotations

import threading
from typing import TYPE_CHECKING

from drivers.clock import Clock, real_seconds_scale
from drivers.dialect_account import DialectAccount, Tally
from drivers.dialect_talk import ATTEMPTS, DialectTalk
from drivers.errors import (
    DeviceError,
    DeviceGarbledError,
    DeviceGoneError,
    DeviceRefusedError,
    DeviceSilentError,
    DoseCutShortError,
    DoseUnknownError,
    StoppedError,
)
from drivers.reunion import patiently

if TYPE_CHECKING:
    from configs.dialectfile import PumpSayings

#: real time between two questions while the pump moves
POLL_S, SHORTEST_POLL_S = 0.5, 0.005
#: a push may last so many times its nominal time, and so much longer, s
LONGEST_TIMES, LONGEST_MORE_S = 1.5, 10.0
_REMEDY = "Check the cable, its screen and the baud rate, then go on"


class DialectPush:
    """A push from its target to its end. `before` is the account on which it is counted."""

    def __init__(
        self,
        talk: DialectTalk,
        sayings: PumpSayings,
        account: DialectAccount,
        clock: Clock,
        stop: threading.Event | None,
        *,
        what: str,
        volume_ml: float,
        step_ml: float,
        rate_ml_min: float,
        before: Tally,
    ) -> None:
        self._talk, self._sayings, self._account = talk, sayings, account
        self._clock, self._stop = clock, stop
        self.what, self.volume_ml, self.step_ml, self.before = what, volume_ml, step_ml, before
        self._nominal_s, self._rate_ml_min = 60.0 * volume_ml / rate_ml_min, rate_ml_min
        self._tolerance_ml = max(1.001 * account.resolution_ml, 0.5 * step_ml)
        self._seen_ml = 0.0
        self.may_have_begun = False
        self.started_at_s = clock.now_s()

    def bounds_ml(self) -> tuple[float, float]:
        """Lowest and highest volume that it can have delivered, as far as is known now."""
        return (self._seen_ml, self.volume_ml) if self.may_have_begun else (0.0, 0.0)

    def moved_ml(self, tally: Tally) -> float | None:
        """What went through the tip since the push was meant, to whole steps; None: it cannot be told."""
        if tally.level_ml is None or self.before.level_ml is None or tally.starts != self.before.starts:
            return None
        moved = tally.level_ml - self.before.level_ml
        if moved < self._seen_ml - self._tolerance_ml:
            return None
        if abs(moved - self.volume_ml) <= self._tolerance_ml:
            return self.volume_ml
        return max(0, round(moved / self.step_ml)) * self.step_ml

    def set_target(self) -> None:
        """Tell the target until it is read back as meant; moves nothing.

        Raises:
            DeviceError: it is not.
        """
        target, read_back = self._sayings.target, self._sayings.read_target
        if target is None or read_back is None:
            return
        failure: DeviceError | None = None
        allowed = 0.5 * self._talk.grammar.resolution("volume") + 1e-12
        for _ in range(ATTEMPTS):
            try:
                self._talk.once(target, {"volume": self.volume_ml}, stop=self._stop)
            except (DeviceSilentError, DeviceGarbledError) as doubt:
                failure = doubt
            told = self._talk.ask(read_back, stop=self._stop)
            if abs(self._talk.quantity(told, "volume") - self.volume_ml) <= allowed:
                return
        raise failure or self._garbled(f"does not read back {self.volume_ml:g} mL as told")

    def deliver(self) -> float:
        """Push, wait until it is done, and return the volume.

        Raises:
            DoseUnknownError: it was switched off and on meanwhile, or counts nothing and left a doubt.
            DoseCutShortError: it delivered another volume, which is known.
            DeviceError: silent, garbled, refused or gone.
            StoppedError: told to stop; nothing was done about it here.
        """
        self._begin()
        tally = self._wait()
        moved = self.moved_ml(tally)
        if not self._account.counts:
            if tally.fault is not None:
                raise self.unknown(tally.fault)
            return self.volume_ml
        if moved == self.volume_ml:
            return moved
        if moved is None or self._may_be_set_back(tally):
            raise self.unknown("its count was set back: it was switched off and on")
        raise DoseCutShortError(
            f"{self.what} ended at {moved:g} of {self.volume_ml:g} mL: {tally.fault or 'halted'}",
            where=self._talk.where,
            remedy="See to the pump, then go on",
            lowest_ml=moved,
            highest_ml=moved,
        )

    def _may_be_set_back(self, tally: Tally) -> bool:
        """Whether a count of nothing after an unfinished push may be that of a pump just switched on."""
        return tally.starts is None and tally.level_ml is not None and abs(tally.level_ml) <= self._tolerance_ml

    def begin(self) -> None:
        """Push and wait for nothing. Raises: as `deliver`."""
        self._begin()

    def unknown(self, why: str) -> DoseUnknownError:
        """Return the error of a push whose volume cannot be told."""
        return DoseUnknownError(
            f"{why}; {self.what} delivered between 0 and {self.volume_ml:g} mL",
            where=self._talk.where,
            remedy="Look at the pump; the volume's uncertainty is widened",
            lowest_ml=0.0,
            highest_ml=self.volume_ml,
        )

    def _begin(self) -> None:
        saying = self._sayings.dose
        values = {"volume": self.volume_ml, "rate": self._rate_ml_min}
        for attempt in range(1, ATTEMPTS + 1):
            self.started_at_s = self._clock.now_s()
            self.may_have_begun = True
            try:
                self._talk.once(saying, values, stop=self._stop)
                return
            except DeviceRefusedError:
                if self._has_begun():
                    return
                self.may_have_begun = False
                raise
            except (DeviceSilentError, DeviceGarbledError) as doubt:
                if self._has_begun():
                    return
                self.may_have_begun = False
                if attempt == ATTEMPTS:
                    raise doubt

    def _has_begun(self) -> bool:
        """Settle by asking whether the command arrived."""
        tally = self._account.standing(self._stop)
        if tally.moving:
            return True
        if not self._account.counts:
            raise self.unknown("no answer to the command, and it counts nothing")
        return self.moved_ml(tally) != 0.0

    def _wait(self) -> Tally:
        scale = min(1.0, real_seconds_scale(self._clock))
        until_s = self.started_at_s + LONGEST_TIMES * self._nominal_s + LONGEST_MORE_S
        while (tally := self._look()).moving:
            moved = self.moved_ml(tally)
            self._seen_ml = max(self._seen_ml, min(moved or 0.0, self.volume_ml))
            if moved is not None and moved > self.volume_ml + self._tolerance_ml:
                raise self._runaway(f"delivered {moved:g} mL, asked {self.volume_ml:g} mL")
            if self._clock.now_s() > until_s:
                raise self._runaway(f"still moves {self._clock.now_s() - self.started_at_s:.0f} s after its start")
            left_s = tally.remaining_s
            if left_s is None:
                left_s = self.started_at_s + self._nominal_s - self._clock.now_s()
            if self._clock.wait(min(max(left_s, SHORTEST_POLL_S), POLL_S * scale), self._stop):
                raise StoppedError("stopped", where=self._talk.where, remedy=_REMEDY)
        return self._account.standing(self._stop)

    def _look(self) -> Tally:
        """Ask for the account; a pump that is gone may come back within a while."""
        try:
            return self._account.ask(self._stop)
        except DeviceGoneError:
            return patiently(lambda: self._account.standing(self._stop), self._clock, self._stop)

    def _runaway(self, what: str) -> DeviceError:
        """Halt it and say what it did."""
        for _ in range(ATTEMPTS):
            try:
                self._talk.repeatable(self._sayings.stop)
                tally = self._account.standing()
            except DeviceError:
                continue
            if tally.moving:
                continue
            moved = self.moved_ml(tally)
            if moved is None:
                return self.unknown(f"{what}, and was halted")
            return DoseCutShortError(
                f"{self.what}: {what}; halted at {moved:g} mL",
                where=self._talk.where,
                remedy="Check volume and units in the dialect against the manual",
                lowest_ml=moved,
                highest_ml=moved,
            )
        return self._garbled(f"{self.what}: {what}, and does not confirm that it stands")

    def _garbled(self, what: str) -> DeviceGarbledError:
        return DeviceGarbledError(what, where=self._talk.where, remedy=_REMEDY)
