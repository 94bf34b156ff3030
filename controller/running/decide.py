"""The core alone, spoken to over JSON lines: actions out, observations in, in the record's own encoding."""

from __future__ import annotations

import json
from typing import TextIO

from controller.journal import encode
from controller.titration.actions import (
    OBSERVATIONS,
    Action,
    Answered,
    Ask,
    Decisions,
    Dose,
    Dosed,
    EntryError,
    Finish,
    Observation,
    Prime,
    Primed,
    Read,
    Reading,
    Refill,
    Refilled,
    Report,
    Stir,
    Stirring,
    Wait,
    Waited,
    from_entry,
    to_entry,
)

#: the observation that answers an action; the others may come in place of any
_ANSWERS: dict[type, type] = {
    Dose: Dosed, Read: Reading, Wait: Waited, Refill: Refilled, Prime: Primed, Stir: Stirring, Ask: Answered,
}  # fmt: skip
_IN_PLACE = ("refused", "failed", "back", "resumed", "command")
_REMEDY = "Send one JSON object a line, the answer to the action before it"


def decide(decisions: Decisions, source: TextIO, sink: TextIO) -> int:
    """Write every action, read what answers it, until the core finishes.

    A report needs no answer. Empty lines are passed over. Nothing is read after the finish.

    Args:
        decisions: the core, not yet begun.
        source: observations, one JSON object a line.
        sink: actions, one JSON object a line, each flushed.

    Returns:
        0, when the core has finished.

    Raises:
        EntryError: a line is no observation or does not answer the action; or the input ended too early.
    """
    number = 0
    action = next(decisions)
    while True:
        sink.write(encode(to_entry(action)) + "\n")
        sink.flush()
        if isinstance(action, Finish):
            decisions.close()
            return 0
        answer: Observation | None = None
        if not isinstance(action, Report):
            number, text = _next_line(source, number, action)
            answer = _observation(text, action, where=f"input line {number}")
        try:
            action = decisions.send(answer)
        except StopIteration as end:
            action = Finish(result=end.value if isinstance(end.value, dict) else {})


def _next_line(source: TextIO, number: int, action: Action) -> tuple[int, str]:
    while True:
        try:
            text = source.readline()
        except UnicodeDecodeError as error:
            raise EntryError(f"not UTF-8: {error}", where=f"input line {number + 1}", remedy=_REMEDY) from None
        if not text:
            raise EntryError(
                f"the input ended before {action.kind!r} was answered",
                where=f"input after line {number}",
                remedy=f"Send an observation {_allowed(action)}",
            )
        number += 1
        if text.strip():
            return number, text


def _observation(text: str, action: Action, *, where: str) -> Observation:
    try:
        entry = json.loads(text)
    except (ValueError, RecursionError) as error:
        raise EntryError(f"not JSON: {error}", where=where, remedy=_REMEDY) from None
    if not isinstance(entry, dict) or "observation" not in entry:
        raise EntryError(
            f"got {text.strip()[:60]!r}, allowed: an object with {_allowed(action)} as its observation",
            where=where,
            remedy=_REMEDY,
        )
    found = from_entry({key: value for key, value in entry.items() if key != "action"}, where=where)
    if found.kind not in _IN_PLACE and not isinstance(found, _ANSWERS[type(action)]):
        raise EntryError(
            f"{found.kind!r} does not answer {action.kind!r}, allowed: {_allowed(action)}", where=where, remedy=_REMEDY
        )
    _check_fit(action, found, where)
    return found  # type: ignore[return-value]  # only observations carry "observation"


def _check_fit(action: Action, found: object, where: str) -> None:
    if isinstance(action, Dose) and isinstance(found, Dosed) and found.number != action.number:
        raise EntryError(f"dosed.number: got {found.number}, allowed: {action.number}", where=where, remedy=_REMEDY)
    if isinstance(action, Ask) and isinstance(found, Answered):
        if found.key != action.key:
            raise EntryError(f"answered.key: got {found.key!r}, allowed: {action.key!r}", where=where, remedy=_REMEDY)
        if action.choices and found.answer not in action.choices:
            allowed = ", ".join(action.choices)
            raise EntryError(f"answered.answer: got {found.answer!r}, allowed: {allowed}", where=where, remedy=_REMEDY)


def _allowed(action: Action) -> str:
    answers: type[object] = _ANSWERS[type(action)]
    kinds = [kind for kind, cls in OBSERVATIONS.items() if cls is answers]
    return ", ".join([*kinds, *_IN_PLACE])
