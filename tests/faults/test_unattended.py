"""Unattended: messages to people elsewhere hold nothing up, the log says what happened, the computer stays awake."""

from __future__ import annotations

import json
import sys
import threading
from collections.abc import Iterator
from http.server import BaseHTTPRequestHandler, HTTPServer
from pathlib import Path
from typing import Any

import pytest

from configs.errors import SettingsError
from configs.loading import parse
from configs.notifying import NotifySettings
from controller.cli import main
from controller.running.attendance import attended
from controller.running.awake import kept_awake
from controller.running.notify import MOST_UNDER_WAY, Notifier
from drivers.clock import ManualClock
from drivers.operator import AnswersOperator

WRITE = "import pathlib, sys; pathlib.Path(sys.argv[1]).write_bytes(sys.stdin.buffer.read())"


def _notify(**given: Any) -> NotifySettings:
    return NotifySettings.model_validate(given)


def test_a_command_gets_the_facts_on_standard_input_and_nothing_on_its_line(tmp_path: Path) -> None:
    told = tmp_path / "told $(touch x); é.json"
    notifier = Notifier(_notify(command=(sys.executable, "-c", WRITE, str(told))), pytest.fail)
    notifier.tell("failure", {"reason": "$(touch y) `touch z` <b>", "warnings": ["=1+1"]})
    notifier.finish()
    facts = json.loads(told.read_text(encoding="utf-8"))
    assert facts == {"occasion": "failure", "reason": "$(touch y) `touch z` <b>", "warnings": ["=1+1"]}
    assert [path.name for path in tmp_path.iterdir()] == [told.name]


def test_only_wanted_occasions_are_told(tmp_path: Path) -> None:
    told = tmp_path / "told.json"
    notifier = Notifier(_notify(command=(sys.executable, "-c", WRITE, str(told)), on=("failure",)), pytest.fail)
    notifier.tell("end", {})
    notifier.finish()
    assert not told.exists()


@pytest.mark.parametrize(
    ("code", "words"),
    [("import time; time.sleep(60)", "longer than 1 s"), ("raise SystemExit(7)", "ended with 7")],
)
def test_a_command_that_hangs_or_fails_is_given_up_and_logged(code: str, words: str) -> None:
    said: list[str] = []
    notifier = Notifier(_notify(command=(sys.executable, "-c", code), time_limit_s=1), said.append)
    notifier.tell("end", {})
    notifier.finish()
    notifier.finish()
    assert len(said) == 1
    assert words in said[0]


def test_a_command_that_is_not_there_is_logged() -> None:
    said: list[str] = []
    notifier = Notifier(_notify(command=("/no/such/program",)), said.append)
    notifier.tell("end", {})
    notifier.finish()
    assert "not sent" in said[0]


def test_messages_under_way_are_bounded() -> None:
    said: list[str] = []
    hang = (sys.executable, "-c", "import sys; sys.stdin.read(); import time; time.sleep(60)")
    notifier = Notifier(_notify(command=hang, time_limit_s=1), said.append)
    for _ in range(MOST_UNDER_WAY + 3):
        notifier.tell("end", {})
    assert sum("dropped" in text for text in said) == 3
    notifier.finish()


@pytest.fixture
def web() -> Iterator[tuple[str, list[bytes]]]:
    got: list[bytes] = []

    class Takes(BaseHTTPRequestHandler):
        def do_POST(self) -> None:
            got.append(self.rfile.read(int(self.headers["Content-Length"])))
            self.send_response(204)
            self.end_headers()

        def log_message(self, *_: object) -> None:
            pass

    server = HTTPServer(("127.0.0.1", 0), Takes)
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.02}, daemon=True)
    thread.start()
    yield f"http://127.0.0.1:{server.server_port}/told", got
    server.shutdown()
    server.server_close()


def test_a_web_address_gets_the_facts_by_post(web: tuple[str, list[bytes]]) -> None:
    address, got = web
    notifier = Notifier(_notify(webhook=address), pytest.fail)
    notifier.tell("question", {"question": "Filled?"})
    notifier.finish()
    assert [json.loads(body) for body in got] == [{"occasion": "question", "question": "Filled?"}]


@pytest.mark.parametrize(
    "text", ["time_limit_s: 5", "webhook: file:///etc/passwd", "command: []", "webhook: ftp://x/y", "on: [never]"]
)
def test_settings_that_tell_nobody_or_too_much_are_refused(text: str) -> None:
    with pytest.raises(SettingsError):
        parse(text.encode(), NotifySettings, where="bench.yaml")


def test_questions_are_told_only_after_a_while(tmp_path: Path) -> None:
    clock, told = ManualClock(), tmp_path / "told.json"
    settings = _notify(command=(sys.executable, "-c", WRITE, str(told)), question_after_s=60)
    inner = AnswersOperator({"early": "yes", "late": "yes"})
    with attended(tmp_path, settings, clock, run="run-1") as watch:
        operator = watch.operator(inner)
        assert operator.ask("early", "Goggles on?", ("yes", "no")) == "yes"
        assert not told.exists()
        clock.wait(61.0)
        assert operator.ask("late", "Filled?", ("yes", "no")) == "yes"
    facts = json.loads(told.read_text(encoding="utf-8"))
    assert (facts["occasion"], facts["run"], facts["question"]) == ("question", "run-1", "Filled?")
    log = (tmp_path / "halfdrop.log").read_text(encoding="utf-8").splitlines()
    assert [line.split(": ", 1)[1] for line in log] == [
        "begins",
        "question early: Goggles on?",
        "question late: Filled?",
    ]


def test_an_error_is_logged_and_told(tmp_path: Path) -> None:
    told = tmp_path / "told.json"
    settings = _notify(command=(sys.executable, "-c", WRITE, str(told)))
    with pytest.raises(ZeroDivisionError), attended(tmp_path, settings, ManualClock(), run="run-1"):
        raise ZeroDivisionError("by nought")
    assert json.loads(told.read_text(encoding="utf-8"))["reason"] == "ZeroDivisionError: by nought"
    assert "ended by an error" in (tmp_path / "halfdrop.log").read_text(encoding="utf-8")


def test_a_run_leaves_its_lines_in_the_log(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    lab = tmp_path / "lab"
    assert main(["init", str(lab)]) == 0
    assert main(["run", "juice-acidity", "--lab", str(lab), "--headless", "--json"]) == 0
    capsys.readouterr()
    lines = (lab / "logs" / "halfdrop.log").read_text(encoding="utf-8").splitlines()
    assert lines[0].endswith("begins")
    assert lines[-1].endswith("completed, exit status 0")
    assert any("end-point: end point 1 at" in line for line in lines)


def test_staying_awake_costs_nothing_where_the_system_has_nothing_for_it(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("controller.running.awake.shutil.which", lambda name: None)
    if sys.platform == "win32":
        pytest.skip("Windows is asked directly")
    with kept_awake("test") as done:
        assert done is False


@pytest.mark.skipif(sys.platform == "win32", reason="Windows is asked directly")
def test_what_keeps_the_computer_awake_ends_with_the_block(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(
        "controller.running.awake._command", lambda why: [sys.executable, "-c", "import sys; sys.stdin.read()"]
    )
    with kept_awake("test") as done:
        assert done is True
