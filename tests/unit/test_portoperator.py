"""Questions put to viewers: answers given beforehand first, then whoever watches; nobody there is an error."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from pathlib import Path

import pytest

from configs.errors import HalfdropError
from controller.running.aftercare import RINSE_AND_STORE
from controller.running.commandclient import Asked, say_hello, send_command
from controller.running.commandport import CommandPort, command_port
from controller.running.portoperator import PortOperator
from controller.running.stopping import StopSwitch
from drivers.clock import ManualClock
from drivers.errors import StoppedError
from drivers.operator import AnswerMissingError, AnswersOperator

QUESTION = ("refill-by-hand", "Syringe empty. Filled?", ("filled", "stop"))


class Viewer(ManualClock):
    """A clock on which a viewer acts in every wait of the operator."""

    def __init__(self, record: Path) -> None:
        super().__init__()
        self.record = record
        self.says: list[tuple[str, str]] = []
        self.seen: list[Asked | None] = []
        self.refusals: list[str] = []
        self.waits = 0

    def wait(self, seconds: float, stop: threading.Event | None = None) -> bool:
        self.waits += 1
        assert self.waits < 50, "it waits for ever"
        self.seen.append(say_hello(self.record))
        if self.says:
            key, text = self.says.pop(0)
            try:
                send_command(self.record, "answer", key=key, text=text)
            except HalfdropError as error:
                self.refusals.append(str(error))
        return super().wait(seconds, stop)


@pytest.fixture
def record(tmp_path: Path) -> Path:
    path = tmp_path / "2026-12-01T080000Z-juice-acidity.jsonl"
    path.write_text('{"record":"halfdrop run","record_version":1,"header":{}}\n', encoding="utf-8")
    return path


@pytest.fixture
def stop() -> StopSwitch:
    return StopSwitch()


@pytest.fixture
def port(record: Path, stop: StopSwitch) -> Iterator[CommandPort]:
    with command_port(stop, record) as opened:
        yield opened


def _operator(
    port: CommandPort, clock: ManualClock, stop: StopSwitch, *, attended: bool = False, **beforehand: str
) -> PortOperator:
    return PortOperator(AnswersOperator(beforehand), port, clock, stop, attended=attended)


def test_an_answer_given_beforehand_is_taken_without_asking_anybody(
    port: CommandPort, record: Path, stop: StopSwitch
) -> None:
    viewer = Viewer(record)
    assert _operator(port, viewer, stop, attended=True, protection="yes").ask("protection", "?", ("yes", "no")) == "yes"
    assert viewer.waits == 0


def test_where_nobody_ever_watched_a_missing_answer_is_an_error(
    port: CommandPort, record: Path, stop: StopSwitch
) -> None:
    with pytest.raises(AnswerMissingError, match="refill-by-hand"):
        _operator(port, Viewer(record), stop).ask(*QUESTION)


@pytest.mark.parametrize("attended", [True, False])
def test_whoever_watches_is_told_what_is_asked_and_answers(
    port: CommandPort, record: Path, stop: StopSwitch, attended: bool
) -> None:
    viewer = Viewer(record)
    if not attended:
        say_hello(record)  # somebody watched before
    viewer.says = [("another-question", "filled"), ("refill-by-hand", "perhaps"), ("refill-by-hand", " FILLED ")]
    assert _operator(port, viewer, stop, attended=attended).ask(*QUESTION) == "filled"
    assert viewer.seen[0] == Asked(key=QUESTION[0], text=QUESTION[1], choices=QUESTION[2])
    assert "not asked" in viewer.refusals[0]
    assert "allowed: filled, stop" in viewer.refusals[1]
    assert say_hello(record) is None, "nothing is asked any more"
    with pytest.raises(HalfdropError, match="not asked"):
        send_command(record, "answer", key=QUESTION[0], text="filled")


def test_any_text_answers_a_question_without_choices(port: CommandPort, record: Path, stop: StopSwitch) -> None:
    viewer = Viewer(record)
    viewer.says = [("balance-reading-g-1-1", "0,9983")]
    assert _operator(port, viewer, stop, attended=True).ask("balance-reading-g-1-1", "Mass?", ()) == "0,9983"


@pytest.mark.parametrize("how", ["halt", "end"])
def test_a_halt_or_the_end_cuts_a_question_short(port: CommandPort, record: Path, stop: StopSwitch, how: str) -> None:
    viewer = Viewer(record)
    send_command(record, how)
    with pytest.raises(StoppedError):
        _operator(port, viewer, stop, attended=True).ask(*QUESTION)
    assert viewer.waits == 1


def test_the_last_question_waits_only_while_somebody_is_there(
    port: CommandPort, record: Path, stop: StopSwitch, monkeypatch: pytest.MonkeyPatch
) -> None:
    viewer = Viewer(record)
    there = iter([True, True, False])
    monkeypatch.setattr(port, "watched_within", lambda seconds: True if seconds is None else next(there))
    with pytest.raises(AnswerMissingError):
        _operator(port, viewer, stop).ask(RINSE_AND_STORE.key, RINSE_AND_STORE.text, RINSE_AND_STORE.choices)
    assert viewer.waits == 2
