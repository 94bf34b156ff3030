"""Real processes: a run goes on whatever becomes of its viewers, from set-up to archive, on the simulated bench."""

from __future__ import annotations

import os
import re
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from controller.benchwork.work import ask_bench
from controller.labfolder import Lab
from controller.records.record import read_record, summarise
from controller.records.verification import verify
from controller.running.commandclient import running, send_command
from controller.running.launch import RunNotStartedError, record_of, start_run
from controller.ui.app import HalfdropApp
from controller.ui.screens.archive import ArchiveScreen
from controller.ui.screens.run import RunScreen
from controller.ui.widgets.answerfield import AnswerField
from drivers.clock import SystemClock

HALFDROP = [sys.executable, "-P", "-m", "controller.cli"]
DEADLINE_S = 60.0


def _until(holds: Callable[[], Any]) -> Any:
    """Wait in real time, briefly at a time, until something holds; other processes have no other clock."""
    event, deadline = threading.Event(), time.monotonic() + DEADLINE_S
    while not (found := holds()):
        assert time.monotonic() < deadline, "never came true"
        event.wait(0.05)
    return found


def _outcome(record: Path) -> str | None:
    found: str | None = summarise(record).get("outcome")
    return found


@pytest.fixture
def started(stage: Any, request: pytest.FixtureRequest) -> Iterator[tuple[Lab, Path]]:
    """A run of the simulated bench in a process of its own, as the screen starts it."""
    scale = getattr(request, "param", "100")
    process = start_run(stage.lab, ["juice-acidity", "--sample-id=press 4", f"--time-scale={scale}", "--seed=3"])
    try:
        yield stage.lab, record_of(process, SystemClock())
    finally:
        process.process.terminate()
        process.process.wait(DEADLINE_S)


def test_a_run_from_set_up_to_archive_on_the_screen(stage: Any) -> None:
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press("2")
        await stage.until(pilot, lambda: len(app.screen.query(AnswerField)) == 3)
        form = app.screen
        form.query_one("#sample-id").value = "-press [4]"  # looks like an option and like markup, and is neither
        form.query_one("#amount").value = "10,0"
        form.query_one("#scale").value = "50"
        for field in form.query(AnswerField):
            field.focus()
            await pilot.press("y")
        await pilot.press("f9")
        await stage.until(pilot, lambda: isinstance(app.screen, RunScreen), DEADLINE_S)
        screen = app.screen
        await pilot.press("n")
        await stage.until(pilot, lambda: app.screen is not screen)
        await pilot.press(*"cloudy", "enter")
        await stage.until(pilot, lambda: screen.view.over, DEADLINE_S)
        assert "-press [4]" in stage.text(app)
        assert "amount as malic acid" in stage.text(app)
        await pilot.press("q")
        await stage.until(pilot, lambda: isinstance(app.screen, ArchiveScreen) and len(app.screen._shown) == 1)
        assert app.screen._shown[0].outcome == "completed"

    stage.drive(app, steps, (100, 30))
    (record,) = stage.lab.runs.glob("*.jsonl")
    assert verify(record).state == "intact"
    read = read_record(record)
    assert read.header["plan"]["sample"]["sample_id"] == "-press [4]"
    assert any(entry.get("text") == "operator: cloudy" for entry in read.of("report"))
    assert {entry["key"]: entry["answer"] for entry in read.of("answered")}["protection"] == "yes"


@pytest.mark.skipif(os.name != "posix", reason="pseudo-terminals and SIGHUP are POSIX")
@pytest.mark.parametrize("end", ["hang up", "kill"])
def test_a_closed_terminal_and_a_killed_viewer_leave_the_run_going(tmp_path: Path, end: str) -> None:
    import fcntl
    import pty
    import struct
    import termios

    lab = tmp_path / "cider-lab"
    master, terminal = pty.openpty()
    fcntl.ioctl(terminal, termios.TIOCSWINSZ, struct.pack("HHHH", 24, 80, 0, 0))
    # a session of its own whose controlling terminal is this one: closing it sends SIGHUP
    viewer = subprocess.Popen(
        [*HALFDROP, "demo", "--dir", str(lab), "--time-scale", "60"],
        stdin=terminal, stdout=terminal, stderr=terminal, start_new_session=True,
        preexec_fn=lambda: fcntl.ioctl(0, termios.TIOCSCTTY, 0),  # noqa: PLW1509
        env={**os.environ, "TERM": "xterm-256color"},
    )  # fmt: skip
    os.close(terminal)
    shown = bytearray()

    def painted() -> bool:
        shown.extend(os.read(master, 65536))
        return b"settling" in shown or b"dose" in shown

    _until(painted)
    (record,) = (lab / "runs").glob("*.jsonl")
    assert _outcome(record) is None
    if end == "kill":
        viewer.kill()
        viewer.wait(DEADLINE_S)
        os.close(master)
    else:
        os.close(master)
        assert viewer.wait(DEADLINE_S) != 0, "the viewer went with its terminal"
    assert running(lab / "runs") == record
    send_command(record, "time-scale", scale=500)
    assert _until(lambda: _outcome(record)) == "completed"
    assert verify(record).state == "intact"


def test_two_viewers_see_the_same_run(started: tuple[Lab, Path]) -> None:
    lab, record = started
    viewers = [
        subprocess.Popen(
            [*HALFDROP, "watch", "--lab", str(lab.path)],
            stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        )
        for _ in range(2)
    ]  # fmt: skip
    said = [viewer.communicate(timeout=DEADLINE_S)[0] for viewer in viewers]
    assert [viewer.returncode for viewer in viewers] == [0, 0]
    assert said[0] == said[1]
    assert re.search(r"^\[\d+:\d\d\] end point 1 at 7\.\d+ mL", said[0], re.MULTILINE)
    assert _outcome(record) == "completed"


@pytest.mark.parametrize("started", ["1"], indirect=True)
def test_a_halt_stops_the_pump_and_the_end_closes_the_record(started: tuple[Lab, Path]) -> None:
    _, record = started

    def events(kind: str) -> list[dict[str, Any]]:
        return list(read_record(record).of(kind))

    send_command(record, "halt")
    (stopped,) = _until(lambda: events("pump-stop"))
    assert (stopped["confirmed"], stopped["why"]) == (True, "halted by the operator")
    assert _until(lambda: events("command"))[-1]["name"] == "pause"
    send_command(record, "end")
    assert _until(lambda: _outcome(record)) == "stopped"
    assert verify(record).state == "intact"


def test_a_run_that_cannot_begin_says_why(stage: Any) -> None:
    process = start_run(stage.lab, ["juice-acidty", "--sample-id=x"])
    with pytest.raises(RunNotStartedError, match="did you mean juice-acidity"):
        record_of(process, SystemClock())
    assert list(stage.lab.runs.glob("*.jsonl")) == []


def test_the_bench_is_asked_by_a_process_of_its_own(stage: Any) -> None:
    told = ask_bench(stage.lab, "look")
    assert (told["pump"]["contents_ml"], told["probe"]["status"]) == (10.0, "ok")
    assert ask_bench(stage.lab, "prime", volume_ml=0.05)["pump"]["contents_ml"] == pytest.approx(9.95)
    assert "at most 200 mL" in ask_bench(stage.lab, "prime", volume_ml=500.0)["error"]


def test_a_silent_device_is_an_error_with_a_remedy(stage: Any) -> None:
    with socket.create_server(("127.0.0.1", 0)) as silent:
        port = f"socket://127.0.0.1:{silent.getsockname()[1]}"
        text = stage.lab.bench.read_text(encoding="utf-8")
        text = text.replace("port: simulated", f"port: {port}\n  reply_time_out_s: 0.05")
        stage.lab.bench.write_text(text, encoding="utf-8")
        told = ask_bench(stage.lab, "look")
    assert told["where"].startswith("pump on socket://")
    assert told["remedy"]


def test_a_bench_in_use_is_not_disturbed(started: tuple[Lab, Path]) -> None:
    lab, record = started
    assert "in use by process" in ask_bench(lab, "look")["error"]
    assert _until(lambda: _outcome(record)) == "completed"


def test_signals_end_a_run_as_they_should(started: tuple[Lab, Path]) -> None:
    _, record = started
    from controller.running.commandclient import read_announcement

    told = read_announcement(record)
    assert told is not None
    os.kill(told.pid, signal.SIGTERM)
    assert _until(lambda: _outcome(record)) == "stopped"
