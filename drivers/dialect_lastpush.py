"""The last dose of a session with a pump that knows no dose numbers, and what became of it by the pump's account."""

from __future__ import annotations

from dataclasses import dataclass

from drivers.dialect_account import Tally
from drivers.dialect_push import POLL_S, DialectPush
from drivers.pump import DoseState, LastDose


@dataclass(frozen=True, slots=True, kw_only=True)
class LastPush:
    """A dose that was begun; `volume_ml` is what it delivered, where that is known already."""

    number: int
    push: DialectPush
    volume_ml: float | None = None


def told_of_last(last: LastPush | None, tally: Tally, *, step_ml: float, start_count: int) -> LastDose:
    """Return what became of it (number 0 where nothing was dosed in this session).

    Args:
        tally: the pump's account now.

    Raises:
        DoseUnknownError: the pump does not tell what it delivered.
    """
    number, moved_ml = 0, 0.0
    state: DoseState = "none"
    if last is not None:
        number = last.number
        told_ml = last.volume_ml if last.volume_ml is not None else last.push.moved_ml(tally)
        if told_ml is None:
            raise last.push.unknown("it does not tell what it delivered")
        moved_ml = told_ml
        state = "moving" if tally.moving else "done" if moved_ml == last.push.volume_ml else "stopped"
    return LastDose(
        number=number,
        volume_ml=moved_ml,
        steps=round(moved_ml / step_ml),
        state=state,
        start_count=start_count,
        remaining_s=(tally.remaining_s or POLL_S) if tally.moving else 0.0,
    )
