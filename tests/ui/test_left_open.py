"""A run that was killed: the screen offers to go on with it, to end and evaluate it, or to leave it."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from controller.labfolder import Lab
from controller.records.record import read_record, summarise
from controller.records.verification import verify
from controller.running.launch import record_of, start_run
from controller.ui.app import HalfdropApp
from controller.ui.screens import leftopen
from controller.ui.screens.archive import ArchiveScreen
from controller.ui.screens.dialogs import Choice
from controller.ui.screens.run import RunScreen
from drivers.clock import SystemClock

HALFDROP = [sys.executable, "-P", "-m", "controller.cli"]
SIZES = [pytest.param((80, 24), id="80x24"), pytest.param((120, 40), id="120x40")]
SCALE = "--time-scale=60"
ANSWERS = {"protection": "yes", "stirring-and-tip": "yes", "degassed": "yes"}
DEADLINE_S = 90.0


def _outcome(record: Path) -> str | None:
    found: str | None = summarise(record).get("outcome")
    return found


def _wait(record: Path, doses: int) -> None:
    deadline = time.monotonic() + DEADLINE_S
    while record.read_bytes().count(b'"observation":"dosed"') < doses:
        assert time.monotonic() < deadline, "the run never came so far"
        threading.Event().wait(0.05)


def _killed(lab: Lab, arguments: list[str], answers: dict[str, str] | None, doses: int = 4) -> Path:
    """Start a run, and kill its process in the middle."""
    started = start_run(lab, arguments, answers=answers)
    record = record_of(started, SystemClock())
    _wait(record, doses)
    os.kill(started.process.pid, getattr(signal, "SIGKILL", signal.SIGTERM))
    started.process.wait(DEADLINE_S)
    return record


@pytest.fixture
def served(stage: Any) -> Iterator[Lab]:
    """A lab folder whose bench is served by another process, as if it were real."""
    server = subprocess.Popen(
        [*HALFDROP, "bench", "serve", "--lab", str(stage.lab.path), "--link", "tcp", SCALE, "--method=juice-acidity"],
        stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True,
    )  # fmt: skip
    assert server.stdout is not None
    try:
        ports = json.loads(server.stdout.readline())
        text = stage.lab.bench.read_text(encoding="utf-8")
        for role in ("pump", "probe"):
            text = text.replace("port: simulated", f"port: {ports[role]}", 1)
        stage.lab.bench.write_text(text, encoding="utf-8")
        yield stage.lab
    finally:
        server.terminate()
        server.wait(DEADLINE_S)
        server.stdout.close()


async def _answer(stage: Any, pilot: Any, words: str, key: str) -> None:
    """Wait for a question of the run, open it, answer it."""
    app = pilot.app

    def asked() -> bool:
        question = app.screen.question if isinstance(app.screen, RunScreen) else None
        return question is not None and words in question.text

    await stage.until(pilot, asked, DEADLINE_S)
    await pilot.press("enter")
    await stage.until(pilot, lambda: isinstance(app.screen, Choice))
    await pilot.press(key)


def test_a_killed_run_is_gone_on_with_and_its_questions_come_to_the_screen(
    stage: Any, served: Lab, monkeypatch: pytest.MonkeyPatch
) -> None:
    run = ["juice-acidity", "--sample-id=press 4", "--attended", SCALE]
    record = _killed(served, run, ANSWERS)
    assert _outcome(record) is None
    monkeypatch.setattr(
        leftopen, "start_run", lambda lab, given, **more: start_run(lab, [*given, SCALE], **more)
    )  # this bench is served at another pace than a real one
    app = HalfdropApp(lab=served)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: isinstance(app.screen, Choice))
        assert "press 4, juice-acidity" in stage.text(app)
        await pilot.press("g")
        await _answer(stage, pilot, "was anything in beaker", "1")
        await _answer(stage, pilot, "rinsed", "1")
        await stage.until(pilot, lambda: app.screen.view.over, DEADLINE_S)
        await pilot.pause()
        assert "amount as malic acid" in stage.text(app)

    stage.drive(app, steps, (100, 30))
    assert verify(record).state == "intact"
    answered = {entry["key"]: entry["answer"] for entry in read_record(record).of("answered")}
    assert (answered["beaker-touched"], answered["rinse-and-store"]) == ("no", "yes")
    assert summarise(record)["end_points"][0]["volume_ml"] == pytest.approx(7.32, abs=0.1)
    assert list(served.runs.glob("*.jsonl")) == [record]


def test_a_killed_run_is_ended_and_what_is_there_evaluated(stage: Any) -> None:
    record = _killed(stage.lab, ["juice-acidity", "--sample-id=press 4", "--time-scale=100", "--seed=3"], None)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: isinstance(app.screen, Choice))
        await pilot.press("e")
        await stage.until(pilot, lambda: isinstance(app.screen, RunScreen) and app.screen.view.over, DEADLINE_S)
        await pilot.press("4")
        await stage.until(pilot, lambda: isinstance(app.screen, ArchiveScreen) and len(app.screen._shown) == 1)
        assert app.screen._shown[0].outcome == "stopped"

    stage.drive(app, steps)
    assert verify(record).state == "intact"
    assert "after it broke off" in str(summarise(record)["reason"])


def test_what_cannot_be_gone_on_with_says_why_and_can_be_closed(stage: Any) -> None:
    record = stage.script(points=5).path  # no bench answers to the pump of this plan
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: isinstance(app.screen, Choice))
        await pilot.press("g")
        await stage.until(pilot, lambda: "It could not be taken up" in stage.text(app), DEADLINE_S)
        await pilot.press("c")
        await stage.until(pilot, lambda: isinstance(app.screen, RunScreen) and app.screen.view.over, DEADLINE_S)

    stage.drive(app, steps)
    assert _outcome(record) == "abandoned"


def test_what_is_left_is_offered_once_and_again_on_the_bench_and_in_the_archive(
    stage: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    record = stage.script(points=5).path
    monkeypatch.setattr("controller.ui.screens.bench.ask_bench", lambda lab, action, volume_ml=None: {"error": "off"})
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: isinstance(app.screen, Choice))
        await pilot.press("l", "3")
        await stage.until(pilot, lambda: f"left open   {record.stem}" in stage.text(app))
        await pilot.press("u")
        await stage.until(pilot, lambda: isinstance(app.screen, Choice))
        await pilot.press("l", "4")
        await stage.until(pilot, lambda: len(app.screen._shown) == 1)
        await pilot.pause(0.3)
        assert isinstance(app.screen, ArchiveScreen), "offered once only"
        await pilot.press("enter")
        await stage.until(pilot, lambda: isinstance(app.screen, RunScreen) and not app.screen.listens)
        await pilot.press("u")
        await stage.until(pilot, lambda: isinstance(app.screen, Choice))
        await pilot.press("escape")

    stage.drive(app, steps)
    assert _outcome(record) is None


def test_a_run_that_goes_on_is_not_taken_for_one_left_open(stage: Any) -> None:
    script = stage.script(points=5)
    (stage.lab.runs / ".index").mkdir(exist_ok=True)
    from controller.records.archive_index import ArchiveIndex

    with stage.listening(script.path):
        ArchiveIndex(stage.lab.runs).refresh()
        assert leftopen.left_open(stage.lab) == []
    assert leftopen.left_open(stage.lab) == [script.path]


@pytest.mark.parametrize("size", SIZES)
def test_the_offer_as_it_looks(stage: Any, size: tuple[int, int]) -> None:
    stage.script(points=5)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: isinstance(app.screen, Choice))
        await stage.check_snapshot(pilot, f"left-open-{size[0]}x{size[1]}")

    stage.drive(app, steps, size)


def test_a_replicate_waits_for_a_fresh_beaker_and_asks_everything_anew(stage: Any, served: Lab) -> None:
    run = ["juice-acidity", "--sample-id=press 4", "--attended", SCALE, "--replicates=2"]
    started = start_run(served, run, answers=ANSWERS)
    record = record_of(started, SystemClock())
    app = HalfdropApp(lab=served, record=record)

    async def steps(pilot: Any) -> None:
        await _answer(stage, pilot, "rinsed", "1")
        await stage.until(pilot, lambda: app.screen.view.over, DEADLINE_S)
        await stage.until(pilot, lambda: app.screen.question is not None, DEADLINE_S)
        assert app.screen.record == record
        await pilot.press("4")
        await stage.until(pilot, lambda: isinstance(app.screen, ArchiveScreen))
        await pilot.press("1")  # back to where the next beaker is asked for
        await _answer(stage, pilot, "a fresh beaker for replicate 2 of 2", "1")
        await stage.until(pilot, lambda: app.screen.record != record, DEADLINE_S)
        await _answer(stage, pilot, "Eyes and hands", "2")  # no
        await _answer(stage, pilot, "rinsed", "1")
        await stage.until(pilot, lambda: app.screen.view.over, DEADLINE_S)

    stage.drive(app, steps, (100, 30))
    started.process.wait(DEADLINE_S)
    first, second = sorted(served.runs.glob("*.jsonl"))
    assert _outcome(first) == "completed"
    assert list(read_record(second).of("dosed")) == [], "nothing moves before the second beaker is spoken for"
