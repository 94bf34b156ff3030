"""A syringe pump that speaks a dialect: it knows no dose numbers, its count of what it delivered stands in for them."""

from __future__ import annotations

import contextlib
import threading
from typing import TYPE_CHECKING

from drivers.clock import Clock, real_seconds_scale
from drivers.dialect_account import DialectAccount, Tally
from drivers.dialect_lastpush import LastPush, told_of_last
from drivers.dialect_ledger import DialectLedger
from drivers.dialect_manners import WATCHDOG_S, PumpManners
from drivers.dialect_push import POLL_S, DialectPush
from drivers.dialect_talk import ATTEMPTS, DialectTalk
from drivers.errors import DeviceError, DeviceGarbledError, DeviceRefusedError, DeviceSilentError, StoppedError
from drivers.identity import Identity
from drivers.link import Link
from drivers.pump import Delivered, LastDose, PumpStatus, Refill

if TYPE_CHECKING:
    from configs.dialectfile import DialectSettings

LONGEST_FILL_S = 600.0


class DialectPump:
    """See drivers/pump.py. What the device does not tell of itself comes from the bench file.

    A start count that the device does not tell is one of this session: after a restart of the program, or when the
    device's count was set back, a dose in doubt is then unknown, as it should be.
    """

    def __init__(
        self,
        link: Link,
        clock: Clock,
        stop: threading.Event | None = None,
        *,
        dialect: DialectSettings,
        step_ml: float,
        syringe_ml: float,
        refill: Refill,
        rate_ml_min: float,
    ) -> None:
        assert dialect.pump is not None  # the bench was checked
        self._sayings = dialect.pump
        self._talk = DialectTalk(link, dialect, self._sayings.set_up)
        self._account = DialectAccount(self._talk, self._sayings)
        self._manners = PumpManners(self._talk, dialect, self._sayings, rate_ml_min)
        self._clock, self._stop = clock, stop
        self.step_ml, self.syringe_ml, self.refill = step_ml, syringe_ml, refill
        self._rate_ml_min = rate_ml_min
        self._ledger = DialectLedger(self._account, link.where, step_ml=step_ml, session=int(clock.utc_s()))
        self._last: LastPush | None = None

    def identify(self) -> Identity:
        """Ask who the device is. Raises: DeviceError."""
        self._manners.be_instructed()
        return self._manners.identity()

    def status(self) -> PumpStatus:
        """Ask for the account. Raises: DeviceError."""
        self._manners.be_instructed()
        tally = self._account.standing()
        self._ledger.note(tally)
        return PumpStatus(
            start_count=self._ledger.start_count(tally),
            last_dose_number=self._last.number if self._last else 0,
            delivered_ml=self._ledger.delivered_ml(tally),
            contents_ml=self._ledger.contents_ml(),
            reservoir_ml=None,
            moving=tally.moving,
            fault=tally.fault,
        )

    def delivered_ml(self) -> float:
        """Ask for everything delivered through the tip, as far back as the device or this session counts."""
        return self._ledger.delivered_ml(self._account.standing())

    def last_dose(self) -> LastDose:
        """Ask what became of the last dose of this session. Raises: DeviceError."""
        tally = self._account.standing()
        start_count = self._ledger.start_count(tally)
        return told_of_last(self._last, tally, step_ml=self.step_ml, start_count=start_count)

    def dose(self, number: int, volume_ml: float) -> Delivered:
        """Deliver `volume_ml` (rounded to whole steps) as dose `number`, and wait until it is done.

        Raises:
            DeviceRefusedError: not a volume or number for this pump now; nothing moved.
            DoseUnknownError: it was switched off and on, or left a doubt that it cannot settle.
            DoseCutShortError: another volume than asked; it is known.
            DeviceError: silent, garbled or gone. Every one of these carries lowest_ml and highest_ml.
            StoppedError: `stop` was set; the pump was told to halt, see its `delivered` and `confirmed`.
        """
        what = f"dose {number}"
        self._may_begin(what)
        if self._last is not None and number <= self._last.number:
            raise self._refused(f"dose {self._last.number} was started before, asked {number}", "Count on from there")
        push = self._push(what, volume_ml)
        self._last = LastPush(number=number, push=push)
        moved_ml = self._delivered(push, number)
        self._last = LastPush(number=number, push=push, volume_ml=moved_ml)
        return Delivered(
            number=number,
            volume_ml=moved_ml,
            steps=round(moved_ml / self.step_ml),
            started_at_s=push.started_at_s,
            at_s=self._clock.now_s(),
        )

    def prime(self, volume_ml: float) -> float:
        """Push `volume_ml` (rounded to whole steps) through the tip into the waste, wait, and return what was pushed.

        Raises:
            DeviceError, StoppedError: as `dose`.
        """
        self._may_begin("priming")
        push = self._push("priming", volume_ml)
        return self._delivered(push, None)

    def watchdog_s(self) -> float | None:
        """Return the silence, s of real time, after which the pump halts; None: the dialect cannot say so."""
        return None if self._sayings.watchdog is None else WATCHDOG_S

    def dose_and_fall_silent(self, number: int, volume_ml: float, silence_s: float) -> LastDose:
        """Begin a dose, say nothing for `silence_s` of real time, then ask what became of it (see drivers/silence.py).

        Raises:
            DeviceError, StoppedError: as `dose`.
        """
        push = self._push(f"dose {number}", volume_ml)
        self._last = LastPush(number=number, push=push)
        push.begin()
        if self._clock.wait(silence_s * real_seconds_scale(self._clock), self._stop):
            raise self._halted(push, number)
        last = self.last_dose()
        if last.state != "moving":
            self._book(push, last.volume_ml, number)
        return last

    def fill(self) -> PumpStatus:
        """Fill the syringe, and wait until it is done; a fill that is told once more goes no further than full.

        Raises:
            DeviceRefusedError: there is nothing to fill it from; nothing moved.
            DeviceError, StoppedError: as `dose`.
        """
        self._may_begin("filling")
        saying = self._sayings.fill
        if saying is None:
            if self.refill != "by-hand":
                raise self._refused("the dialect has no command to fill", "Fill it by hand, refill: by-hand")
            self._ledger.held_ml = self.syringe_ml
            return self._reckon_anew()
        for attempt in range(1, ATTEMPTS + 1):
            try:
                self._talk.once(saying)
                break
            except (DeviceSilentError, DeviceGarbledError):
                if self._account.standing().moving:
                    break
                if attempt == ATTEMPTS:
                    raise
        self._until_it_stands("filling")
        self._ledger.held_ml = self.syringe_ml
        return self._reckon_anew()

    def stop(self) -> bool:
        """Halt at once. Raises no DeviceError: True when the pump confirmed that it stands."""
        for _ in range(ATTEMPTS):
            with contextlib.suppress(DeviceError):  # what counts is whether it stands
                self._talk.once(self._sayings.stop, moves=False)
            try:
                if not self._account.standing().moving:
                    return True
            except DeviceError:
                continue
        return False

    # the push

    def _push(self, what: str, volume_ml: float) -> DialectPush:
        steps = self._whole_steps(volume_ml)
        try:
            self._manners.be_instructed()
            before = self._account.standing(self._stop)
            if before.moving:
                raise self._refused("it is moving", "Wait, or stop it")
            self._ledger.compare(before, what)
            push = self._new_push(what, steps * self.step_ml, before)
            push.set_target()
        except DeviceError as error:
            if error.lowest_ml is None:
                error.lowest_ml = error.highest_ml = 0.0
            raise
        self._may_begin(what)
        return push

    def _new_push(self, what: str, volume_ml: float, before: Tally) -> DialectPush:
        return DialectPush(
            self._talk,
            self._sayings,
            self._account,
            self._clock,
            self._stop,
            what=what,
            volume_ml=volume_ml,
            step_ml=self.step_ml,
            rate_ml_min=self._rate_ml_min,
            before=before,
        )

    def _delivered(self, push: DialectPush, number: int | None) -> float:
        moved_ml = 0.0
        try:
            moved_ml = push.deliver()
        except StoppedError as stopped:
            raise self._halted(push, number) from stopped
        except DeviceError as error:
            if error.lowest_ml is None:
                error.lowest_ml, error.highest_ml = push.bounds_ml()
            if error.lowest_ml == error.highest_ml:
                self._book(push, error.lowest_ml or 0.0, number)
            else:
                self._ledger.forget()
            raise
        self._book(push, moved_ml, number)
        return moved_ml

    def _book(self, push: DialectPush, moved_ml: float, number: int | None) -> None:
        self._ledger.book(push.before, moved_ml)
        if number is not None:
            self._last = LastPush(number=number, push=push, volume_ml=moved_ml)

    def _halted(self, push: DialectPush, number: int | None) -> StoppedError:
        confirmed = self.stop()
        moved_ml: float | None = None
        if confirmed:
            try:
                moved_ml = push.moved_ml(self._account.standing())
            except DeviceError:
                moved_ml = None
        delivered = None
        if moved_ml is None:
            self._ledger.forget()
        else:
            self._book(push, moved_ml, number)
            delivered = Delivered(
                number=number or 0,
                volume_ml=moved_ml,
                steps=round(moved_ml / self.step_ml),
                started_at_s=push.started_at_s,
                at_s=self._clock.now_s(),
            )
        return self._stopped(f"stopped in {push.what}", confirmed, delivered if number is not None else None)

    def _stopped(self, what: str, confirmed: bool, delivered: Delivered | None = None) -> StoppedError:
        return StoppedError(
            what + ("" if confirmed else "; the pump did not confirm that it stands"),
            where=self._talk.where,
            remedy="Go on or end the run" if confirmed else "Look at the pump and switch it off if it moves",
            delivered=delivered,
            confirmed=confirmed,
        )

    # what it says of itself

    def _reckon_anew(self) -> PumpStatus:
        """Take the account as it is now for right: filling moves what a plunger's place counts."""
        self._ledger.forget()
        return self.status()

    def _until_it_stands(self, what: str) -> None:
        until_s = self._clock.now_s() + LONGEST_FILL_S
        while self._account.standing(self._stop).moving:
            if self._clock.wait(POLL_S, self._stop):
                raise self._stopped(f"stopped while {what}", self.stop())
            if self._clock.now_s() > until_s:
                self.stop()
                raise self._refused(f"{what} does not end", "Look at the pump")

    def _may_begin(self, what: str) -> None:
        if self._stop is not None and self._stop.is_set():
            raise StoppedError(f"stopped before {what} began", where=self._talk.where, remedy="Go on or end the run")

    def _whole_steps(self, volume_ml: float) -> int:
        steps = round(volume_ml / self.step_ml) if abs(volume_ml) < 1e6 else 0  # NaN fails the comparison
        if not 0 < steps <= round(self.syringe_ml / self.step_ml):
            raise self._refused(
                f"volume of {volume_ml:g} mL, allowed {self.step_ml:g} to {self.syringe_ml:g} mL",
                "Ask for a volume within what is allowed",
            )
        return steps

    def _refused(self, what: str, remedy: str) -> DeviceRefusedError:
        return DeviceRefusedError(what, where=self._talk.where, remedy=remedy, lowest_ml=0.0, highest_ml=0.0)
