"""What people do to a run while it goes on: the stop switch, which every wait looks at, and commands.

A hold of the switch halts the pump at once like a stop does, but the run then waits for an answer: go on, or end.
"""

from __future__ import annotations

import threading
from dataclasses import dataclass, field
from typing import Literal, Protocol

from controller.titration.actions import Command
from drivers.clock import Clock
from drivers.pump import Pump

#: a command that arrives during a wait is heard within this time, s
COMMAND_POLL_S = 0.5
#: tries to halt the pump before it is called not confirmed
STOP_TRIES = 3

StopKind = Literal["interrupt", "terminate", "operator"]

#: exit status of a run that was ended so; None: by its result
STOP_EXIT_STATUS: dict[StopKind, int | None] = {"interrupt": 130, "terminate": 143, "operator": None}
_WORDS: dict[StopKind, str] = {
    "interrupt": "interrupted at the keyboard",
    "terminate": "terminated by the system",
    "operator": "stopped by the operator",
}
HALTED = "halted by the operator"


@dataclass(frozen=True, slots=True, kw_only=True)
class StopRequest:
    """Who asked for the stop, and in words why."""

    kind: StopKind
    why: str


@dataclass(slots=True)
class StopSwitch:
    """Pulled once, never reset. `pull` may be called from a signal handler or another thread."""

    event: threading.Event = field(default_factory=threading.Event)
    request: StopRequest | None = None
    _hold: str | None = None
    _holding: threading.Lock = field(default_factory=threading.Lock)  # never taken by `pull`: it may be a signal's

    def pull(self, kind: StopKind, why: str = "") -> None:
        """Ask for the stop; the first request counts."""
        if self.request is None:
            self.request = StopRequest(kind=kind, why=why or _WORDS[kind])
        self.event.set()

    def hold(self, why: str = HALTED) -> None:
        """Cut short whatever goes on, without ending the run; may be called from another thread."""
        with self._holding:
            self._hold = why
            self.event.set()

    @property
    def held(self) -> bool:
        """True while a hold stands that no stop has overtaken."""
        return self._hold is not None and self.request is None

    def release(self) -> None:
        """Take the hold back, once the pump stands: waits and devices work again."""
        with self._holding:
            self._hold = None
            self.event.clear()
        if self.request is not None:  # pulled meanwhile
            self.event.set()

    def why(self) -> str:
        """Return the reason in words."""
        if self.request is not None:
            return self.request.why
        return self._hold or _WORDS["operator"]


class Commands(Protocol):
    """Where the operator's commands come from."""

    def waiting(self) -> bool:
        """True if a command has come."""
        ...

    def take(self) -> Command | None:
        """Return the next command, None where there is none."""
        ...


def halted(pump: Pump) -> bool:
    """Stop the pump now; True when it confirmed that it stands."""
    for _ in range(STOP_TRIES):
        try:
            if pump.stop():
                return True
        except Exception:  # whatever it is, halting is tried again
            continue
    return False


def wait_out(clock: Clock, seconds: float, stop: StopSwitch, commands: Commands | None) -> None:
    """Let `seconds` pass, or less where the switch is pulled or a command comes."""
    if commands is None:
        clock.wait(seconds, stop.event)
        return
    until_s = clock.now_s() + seconds
    while (left_s := until_s - clock.now_s()) > 0 and not commands.waiting():
        if clock.wait(min(left_s, COMMAND_POLL_S), stop.event):
            return
