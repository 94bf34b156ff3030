"""What people do to a run while it goes on: the stop switch, which every wait looks at, and commands."""

from __future__ import annotations

import threading
from dataclasses import dataclass, field
from typing import Literal, Protocol

from controller.titration.actions import Command

StopKind = Literal["interrupt", "terminate", "operator"]

#: exit status of a run that was ended so; None: by its result
STOP_EXIT_STATUS: dict[StopKind, int | None] = {"interrupt": 130, "terminate": 143, "operator": None}
_WORDS: dict[StopKind, str] = {
    "interrupt": "interrupted at the keyboard",
    "terminate": "terminated by the system",
    "operator": "stopped by the operator",
}


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

    def pull(self, kind: StopKind, why: str = "") -> None:
        """Ask for the stop; the first request counts."""
        if self.request is None:
            self.request = StopRequest(kind=kind, why=why or _WORDS[kind])
        self.event.set()

    def why(self) -> str:
        """Return the reason in words."""
        return self.request.why if self.request is not None else _WORDS["operator"]


class Commands(Protocol):
    """Where the operator's commands come from."""

    def waiting(self) -> bool:
        """True if a command has come."""
        ...

    def take(self) -> Command | None:
        """Return the next command, None where there is none."""
        ...
