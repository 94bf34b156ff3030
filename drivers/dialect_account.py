"""What a pump that speaks a dialect says of itself: whether it moves, and how much has gone through its tip.

`level_ml` only grows while the pump delivers, whatever the device counts: the volume delivered, or the place of the
plunger. All that it says while it stands is asked until two answers agree, as a digit may be garbled on the line.
"""

from __future__ import annotations

import threading
from dataclasses import dataclass
from typing import TYPE_CHECKING

from drivers.dialect_talk import ATTEMPTS, DialectTalk
from drivers.errors import DeviceGarbledError

if TYPE_CHECKING:
    from configs.dialectfile import PumpSayings


@dataclass(frozen=True, slots=True, kw_only=True)
class Tally:
    """One account. `level_ml` None: the device counts nothing; `remaining_s` None: it does not say."""

    moving: bool
    fault: str | None
    remaining_s: float | None
    level_ml: float | None
    starts: int | None


class DialectAccount:
    """Asks for the account of one pump."""

    def __init__(self, talk: DialectTalk, sayings: PumpSayings) -> None:
        self._talk, self._sayings = talk, sayings
        self.counts_total = sayings.delivered is not None
        self.counts = self.counts_total or sayings.position is not None
        #: how finely the device tells what it delivered, mL
        self.resolution_ml = talk.grammar.resolution("delivered" if sayings.delivered is not None else "position")

    def ask(self, stop: threading.Event | None = None) -> Tally:
        """Ask once. Raises: DeviceError, StoppedError."""
        talk, sayings = self._talk, self._sayings
        told = talk.ask(sayings.state, stop=stop)
        motion = sayings.states.get(told["state"])
        if motion is None:
            raise DeviceGarbledError(
                f"says {told['state']!r} of its state, the dialect knows {', '.join(sayings.states)}",
                where=talk.where,
                remedy="Add the word to states in the dialect, or check the cable's screen",
            )
        words = " ".join(told.get("fault", "").split())
        fault = words if words and words.casefold() not in ("none", "no", "ok", "0", "-") else None
        return Tally(
            moving=motion == "moving",
            fault=(fault or "fault") if motion == "fault" else fault,
            remaining_s=None if "remaining" not in told else max(0.0, talk.quantity(told, "remaining")),
            level_ml=self._level_ml(stop),
            starts=self._starts(stop),
        )

    def standing(self, stop: threading.Event | None = None) -> Tally:
        """Ask until two answers agree, or until it moves. Raises: DeviceError, StoppedError."""
        tally = self.ask(stop)
        for _ in range(2 * ATTEMPTS):
            again = self.ask(stop)
            if again == tally or again.moving:
                return again
            tally = again
        raise DeviceGarbledError(
            "gives another account each time it is asked", where=self._talk.where, remedy="Check the cable's screen"
        )

    def contents_ml(self) -> float | None:
        """What the syringe holds, as the device says; None: it does not. Raises: DeviceError."""
        for saying, name in ((self._sayings.contents, "contents"), (self._sayings.position, "position")):
            if saying is not None:
                return self._talk.quantity(self._talk.ask(saying), name)
        return None

    def _level_ml(self, stop: threading.Event | None) -> float | None:
        talk, sayings = self._talk, self._sayings
        if sayings.delivered is not None:
            return talk.quantity(talk.ask(sayings.delivered, stop=stop), "delivered")
        if sayings.position is not None:
            return -talk.quantity(talk.ask(sayings.position, stop=stop), "position")
        return None

    def _starts(self, stop: threading.Event | None) -> int | None:
        saying = self._sayings.starts
        return None if saying is None else self._talk.whole(self._talk.ask(saying, stop=stop), "starts")
