"""The core over JSON lines."""

from __future__ import annotations

import io
import json
from typing import Any

import pytest

from controller.running.decide import decide
from controller.titration.actions import Ask, Dose, EntryError, Finish, Read, Report, Wait, to_entry

DOSE = Dose(number=1, volume_ml=0.1, reason="first")
ASK = Ask(key="goggles", text="Goggles on?", choices=("yes", "no"))


def core(*actions: Any, told: list[Any] | None = None) -> Any:
    for action in actions:
        answer = yield action
        if told is not None:
            told.append(answer)


def talk(lines: list[str], *actions: Any, told: list[Any] | None = None) -> list[dict[str, Any]]:
    sink = io.StringIO()
    assert decide(core(*actions, told=told), io.StringIO("".join(line + "\n" for line in lines)), sink) == 0
    return [json.loads(line) for line in sink.getvalue().splitlines()]


def test_actions_go_out_and_observations_come_in() -> None:
    told: list[Any] = []
    out = talk(
        [
            '{"observation": "answered", "key": "goggles", "answer": "yes"}',
            "",
            '{"observation": "dosed", "at_s": 1, "number": 1, "volume_ml": 0.1, "colour": "more keys are fine"}',
            '{"observation": "reading", "at_s": 2.5, "potential_mv": -3, "temperature_c": 25.0, "status": "ok"}',
            '{"observation": "waited", "at_s": 3}',
            "this line is behind the finish and never read",
        ],
        ASK,
        DOSE,
        Report(what="note", text="needs no answer"),
        Read(),
        Wait(seconds=0.5),
        Finish(result={"outcome": "completed"}),
        told=told,
    )
    assert out == [
        {"action": "ask", "key": "goggles", "text": "Goggles on?", "choices": ["yes", "no"]},
        {"action": "dose", "number": 1, "volume_ml": 0.1, "reason": "first"},
        {"action": "report", "what": "note", "text": "needs no answer"},
        {"action": "read"},
        {"action": "wait", "seconds": 0.5},
        {"action": "finish", "result": {"outcome": "completed"}},
    ]
    assert [None if answer is None else answer.kind for answer in told] == [
        "answered", "dosed", None, "reading", "waited",
    ]  # fmt: skip


def test_a_core_that_returns_its_result_finishes_too() -> None:
    def returns() -> Any:
        yield Read()
        return {"outcome": "stopped"}

    sink = io.StringIO()
    decide(returns(), io.StringIO('{"observation":"reading","at_s":0,"potential_mv":1}\n'), sink)
    assert json.loads(sink.getvalue().splitlines()[-1]) == {"action": "finish", "result": {"outcome": "stopped"}}


def test_every_action_is_flushed_before_the_answer_is_awaited() -> None:
    flushed: list[int] = []

    class Sink(io.StringIO):
        def flush(self) -> None:
            flushed.append(len(self.getvalue().splitlines()))

    class Source(io.StringIO):
        def readline(self, *_: Any) -> str:
            assert flushed[-1] == 1
            return '{"observation":"reading","at_s":0,"potential_mv":1}\n'

    decide(core(Read(), Finish(result={})), Source(), Sink())
    assert flushed == [1, 2]


@pytest.mark.parametrize("kind", ["refused", "failed", "back", "resumed", "command"])
def test_what_may_come_in_place_of_an_answer(kind: str) -> None:
    more = {"refused": {"what": "x"}, "failed": {"device": "pump", "what": "x"}, "back": {"device": "pump"},
            "resumed": {"at_s": 1, "gap_s": 3}, "command": {"name": "stop"}}[kind]  # fmt: skip
    told: list[Any] = []
    talk([json.dumps({"observation": kind, **more})], DOSE, Finish(result={}), told=told)
    assert told[0].kind == kind


@pytest.mark.parametrize(
    ("line", "action", "text"),
    [
        pytest.param("{not json", Read(), "input line 1: not JSON", id="no JSON"),
        pytest.param("[" * 100_000, Read(), "input line 1: not JSON", id="deep"),
        pytest.param("[1, 2]", Read(), "allowed: an object with reading, refused", id="no object"),
        pytest.param('{"action": "read"}', Read(), "input line 1: got", id="an action"),
        pytest.param('{"observation": "seen"}', Read(), "unknown observation 'seen'; known: dosed", id="unknown"),
        pytest.param('{"observation": 3}', Read(), "unknown observation 3", id="a number for a word"),
        pytest.param('{"observation": "reading", "at_s": 0}', Read(), "potential_mv is missing", id="missing"),
        pytest.param(
            '{"observation": "reading", "at_s": 0, "potential_mv": "12"}', Read(), "potential_mv: got '12'", id="kind"
        ),
        pytest.param(
            '{"observation": "reading", "at_s": 0, "potential_mv": NaN}', Read(), "potential_mv: got nan", id="NaN"
        ),
        pytest.param(
            '{"observation": "waited", "at_s": 0}',
            Read(),
            "'waited' does not answer 'read', allowed: reading",
            id="other",
        ),
        pytest.param(
            '{"observation": "dosed", "at_s": 0, "number": 2, "volume_ml": 0.1}', DOSE, "got 2, allowed: 1", id="number"
        ),
        pytest.param('{"observation": "answered", "key": "g", "answer": "yes"}', ASK, "got 'g'", id="key"),
        pytest.param(
            '{"observation": "answered", "key": "goggles", "answer": "maybe"}', ASK, "allowed: yes, no", id="answer"
        ),
    ],
)  # fmt: skip
def test_a_wrong_line_is_named_with_what_is_allowed(line: str, action: Any, text: str) -> None:
    with pytest.raises(EntryError) as caught:
        talk([line], action, Finish(result={}))
    assert text in str(caught.value)
    assert caught.value.exit_status == 2


def test_an_input_that_ends_too_early_is_an_error() -> None:
    with pytest.raises(EntryError, match=r"input after line 1: the input ended before 'wait' was answered"):
        talk(['{"observation":"reading","at_s":0,"potential_mv":1}'], Read(), Wait(seconds=1.0), Finish(result={}))


def test_bytes_that_are_no_utf8_are_an_error() -> None:
    source = io.TextIOWrapper(io.BytesIO(b'{"observation": "\xff"}\n'), encoding="utf-8")
    with pytest.raises(EntryError, match="not UTF-8"):
        decide(core(Read()), source, io.StringIO())


def test_numbers_go_out_as_they_are() -> None:
    dose = Dose(number=1, volume_ml=0.1 + 0.2, reason="x")
    [out, _] = talk(['{"observation": "refused", "what": "x"}'], dose, Finish(result={}))
    assert out == to_entry(dose)
