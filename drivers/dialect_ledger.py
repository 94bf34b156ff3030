"""The books of a pump that speaks a dialect: what the device said last, and what we counted where it says nothing."""

from __future__ import annotations

from drivers.dialect_account import DialectAccount, Tally
from drivers.errors import DoseUnknownError


class DialectLedger:
    """Holds each account against the one before.

    Args:
        session: start count to tell where the device has none; it grows when the device's count was set back.
    """

    def __init__(self, account: DialectAccount, where: str, *, step_ml: float, session: int) -> None:
        self._account, self._where, self._step_ml = account, where, step_ml
        self._session = session
        self._known: Tally | None = None  # the account as it was last known to be right
        self._pushed_ml = 0.0
        self.held_ml = 0.0

    def compare(self, now: Tally, what: str) -> None:
        """Hold the account against what it should be, before anything moves.

        Raises:
            DoseUnknownError: the pump was switched off and on, or was moved by somebody else; `what` did not begin.
        """
        before, self._known = self._known, now
        if before is None or before.level_ml is None or now.level_ml is None:
            return
        moved_ml = now.level_ml - before.level_ml
        tolerance_ml = max(1.001 * self._account.resolution_ml, 0.5 * self._step_ml)
        if now.starts != before.starts or moved_ml < -tolerance_ml:
            self._session += 1
            raise self._unknown("it was switched off and on since it was last asked", what, "Check its supply", 0.0)
        if moved_ml > tolerance_ml:
            raise self._unknown(
                f"delivered {moved_ml:g} mL that nobody asked for", what, "Find out who else moves it", moved_ml
            )

    def note(self, now: Tally) -> None:
        """Take note of an account that was asked for; a count that was set back makes it another session."""
        before = self._known
        set_back = (
            before is not None
            and before.level_ml is not None
            and now.level_ml is not None
            and now.level_ml < before.level_ml - self._account.resolution_ml
            and now.starts == before.starts
        )
        if set_back:
            self._session += 1
        if set_back or (before is None and not now.moving):
            self._known = now

    def book(self, before: Tally, moved_ml: float) -> None:
        """Write down a push of a known volume."""
        self._pushed_ml += moved_ml
        self.held_ml -= moved_ml
        self._known = None
        if before.level_ml is not None:
            self._known = Tally(
                moving=False, fault=None, remaining_s=None, level_ml=before.level_ml + moved_ml, starts=before.starts
            )

    def forget(self) -> None:
        """Take whatever is said next for right: a volume is in doubt, or filling moved what the device counts."""
        self._known = None

    def start_count(self, tally: Tally) -> int:
        """Return the device's start count, or this session's."""
        return self._session if tally.starts is None else tally.starts

    def delivered_ml(self, tally: Tally) -> float:
        """Return everything through the tip, as far back as the device or this session counts."""
        if self._account.counts_total and tally.level_ml is not None:
            return tally.level_ml
        return self._pushed_ml

    def contents_ml(self) -> float:
        """Ask what the syringe holds; our own count where it does not say (0 before it was first filled)."""
        told_ml = self._account.contents_ml()
        return max(0.0, self.held_ml if told_ml is None else told_ml)

    def _unknown(self, why: str, what: str, remedy: str, moved_ml: float) -> DoseUnknownError:
        return DoseUnknownError(
            f"{why}; {what} did not begin",
            where=self._where,
            remedy=f"{remedy}, then go on",
            lowest_ml=moved_ml,
            highest_ml=moved_ml,
        )
