"""Commands of the operator during a calibration: pause, go on, a note. The step under way is then asked for again.

Wraps the core of any calibration, so that none of them needs to know: what reaches it in place of an answer is a stop,
a refusal or a failure, never a pause.
"""

from __future__ import annotations

from collections.abc import Generator
from typing import Any

from controller.titration.actions import (
    Action,
    Back,
    Command,
    Decisions,
    Dose,
    Dosed,
    Observation,
    Refused,
    Report,
    Resumed,
    Wait,
)  # fmt: skip

_PAUSED_WAIT_S = 1.0


def obeying(core: Decisions) -> Decisions:
    """Return the core with the operator's commands obeyed.

    A dose by hand is not carried out: what a calibration delivers is weighed, or is no titrant at all.
    """
    try:
        action = next(core)
        while True:
            answer = yield action
            while isinstance(answer, Command | Back | Resumed):
                stop = yield from _obey(answer)
                if stop is not None:
                    answer = stop
                    break
                if isinstance(action, Dose):  # it did not begin; its number may be used up, so the core takes the next
                    answer = Dosed(at_s=answer.at_s or 0.0, number=action.number, volume_ml=0.0, steps=0)
                else:
                    answer = yield action
            action = core.send(answer)
    except StopIteration as end:
        result: dict[str, Any] = end.value
        return result
    finally:
        core.close()


def _obey(told: Command | Back | Resumed) -> Generator[Action, Observation | None, Command | None]:
    """Do as told; return the command that ends the calibration, where one came."""
    match told:
        case Command(name="stop"):
            return told
        case Command(name="pause"):
            return (yield from _paused())
        case Command(name="note"):
            yield Report(what="note", text=f"operator: {told.text or ''}")
        case Command(name="go-on"):
            pass
        case Command():
            yield Report(what="warning", text=f"{told.name.replace('-', ' ')}: not during a calibration")
        case Back():
            yield Report(what="note", text=f"{told.device} answers again")
        case Resumed():
            yield Report(what="note", text=f"went on after a gap of {told.gap_s:.0f} s")
    return None


def _paused() -> Generator[Action, Observation | None, Command | None]:
    yield Report(what="note", text="paused")
    while True:
        seen = yield Wait(seconds=_PAUSED_WAIT_S)
        if isinstance(seen, Refused):
            return Command(name="stop", at_s=seen.at_s, text=seen.what)
        if not isinstance(seen, Command):
            continue
        if seen.name == "stop":
            return seen
        if seen.name == "go-on":
            yield Report(what="note", text="going on")
            return None
        if seen.name != "pause":
            yield from _obey(seen)
