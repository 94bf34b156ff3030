"""The command port: who may command, what is refused, and that a hold halts the pump without ending the run."""

from __future__ import annotations

import json
import os
import socket
import stat
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from configs.errors import HalfdropError
from controller.runner import run
from controller.running.commandclient import (
    MOST_LINE_BYTES,
    RunNotListeningError,
    read_announcement,
    running,
    send_command,
)
from controller.running.commandport import MOST_CONNECTIONS, MOST_WAITING, CommandPort, command_port
from controller.running.stopping import StopSwitch
from controller.titration.actions import Ask, Command, Dose, Dosed, Finish, Wait, Waited
from controller.titration.core import titrate
from controller.titration.plan import RunPlan

DEADLINE_S = 5.0


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


def _talk(port: CommandPort, data: bytes) -> bytes:
    """Send bytes and return everything that comes back until the other end hangs up."""
    with socket.create_connection(("127.0.0.1", port.port), timeout=DEADLINE_S) as connection:
        try:
            connection.sendall(data)
            connection.shutdown(socket.SHUT_WR)
            heard = b""
            while got := connection.recv(4096):
                heard += got
        except OSError:  # reset, or hung up before it could be
            return b"reset"
        return heard


def test_commands_are_queued_in_order_for_the_engine(port: CommandPort, record: Path) -> None:
    assert not port.waiting()
    assert port.take() is None
    send_command(record, "pause")
    send_command(record, "dose", volume_ml=0.05)
    send_command(record, "note", text="  cloudy sample ")
    send_command(record, "go-on")
    assert port.waiting()
    taken = [port.take() for _ in range(4)]
    assert taken == [
        Command(name="pause"),
        Command(name="dose", volume_ml=0.05),
        Command(name="note", text="cloudy sample"),
        Command(name="go-on"),
    ]


def test_half_a_character_in_a_note_is_replaced_before_the_run_sees_it(port: CommandPort, record: Path) -> None:
    send_command(record, "note", text="cloudy \ud83c sample")
    assert port.take() == Command(name="note", text="cloudy ? sample")


def test_halt_holds_the_switch_and_end_pulls_it(port: CommandPort, record: Path, stop: StopSwitch) -> None:
    send_command(record, "halt")
    assert stop.event.is_set()
    assert stop.held
    assert stop.request is None
    send_command(record, "end")
    assert not stop.held
    assert stop.request is not None
    assert stop.request.kind == "operator"
    stop.release()
    assert stop.event.is_set(), "a stop is never taken back"


@pytest.mark.parametrize("command", ["halt", "end", "pause", "dose", "hello", "time-scale"])
@pytest.mark.parametrize("token", ["", "0" * 32, None, 5, ["x"]])
def test_a_wrong_token_commands_nothing(port: CommandPort, stop: StopSwitch, command: str, token: Any) -> None:
    line = {"token": token, "command": command, "volume_ml": 0.1, "scale": 2}
    heard = _talk(port, json.dumps(line).encode() + b"\n")
    assert json.loads(heard) == {"done": False, "what": "wrong token"}
    assert not port.waiting()
    assert not stop.event.is_set()


@pytest.mark.parametrize("line", [b"\n", b"halt\n", b"[]\n", b"{\n", b"\xff\xfe\n", b"[" * 1500 + b"\n"])
def test_a_line_that_is_no_command_is_refused_and_its_sender_dropped(port: CommandPort, line: bytes) -> None:
    heard = _talk(port, line + line)
    assert json.loads(heard)["what"] == "wrong token", "one reply only: the second line was not read"


def test_endless_bytes_are_dropped(port: CommandPort, record: Path) -> None:
    assert _talk(port, b"x" * (20 * MOST_LINE_BYTES)) in (b"", b"reset")
    send_command(record, "hello")


def test_many_silent_connections_do_not_lock_the_operator_out(port: CommandPort, record: Path) -> None:
    held = [socket.create_connection(("127.0.0.1", port.port)) for _ in range(3 * MOST_CONNECTIONS)]
    send_command(record, "pause")
    assert port.take() == Command(name="pause")
    for connection in held:
        connection.close()


@pytest.mark.parametrize(
    ("command", "details", "what"),
    [
        ("dose", {}, "volume_ml"),
        ("dose", {"volume_ml": -0.1}, "volume_ml: got -0.1"),
        ("dose", {"volume_ml": True}, "volume_ml"),
        ("dose", {"volume_ml": 5000}, "at most 1000"),
        ("note", {}, "needs a text"),
        ("note", {"text": "  "}, "needs a text"),
        ("note", {"text": 5}, "needs a text"),
        ("fill", {}, "no command 'fill'"),
        ("time-scale", {"scale": 5}, "time is real"),
    ],
)
def test_what_cannot_be_obeyed_is_refused_with_the_reason(
    port: CommandPort, record: Path, command: str, details: dict[str, Any], what: str
) -> None:
    with pytest.raises(HalfdropError, match=what):
        send_command(record, command, **details)
    assert not port.waiting()


def test_no_more_commands_wait_than_there_is_room_for(port: CommandPort, record: Path) -> None:
    for _ in range(MOST_WAITING):
        send_command(record, "pause")
    with pytest.raises(HalfdropError, match="wait already"):
        send_command(record, "pause")


def test_a_simulated_benchs_time_can_be_set(record: Path, stop: StopSwitch) -> None:
    scales: list[float] = []
    with command_port(stop, record, set_time_scale=scales.append):
        send_command(record, "time-scale", scale=40)
        with pytest.raises(HalfdropError, match="at most 1000"):
            send_command(record, "time-scale", scale=1e9)
    assert scales == [40.0]


def test_the_announcement_is_the_owners_and_goes_with_the_run(record: Path, stop: StopSwitch) -> None:
    assert running(record.parent) is None
    with command_port(stop, record) as port:
        told = read_announcement(record)
        assert told is not None
        assert (told.port, told.pid) == (port.port, os.getpid())
        assert len(told.token) == 32
        if os.name == "posix":
            assert stat.S_IMODE(record.with_suffix(".port").stat().st_mode) == 0o600
        assert running(record.parent) == record
    assert not record.with_suffix(".port").exists()
    with pytest.raises(RunNotListeningError, match="the run is over"):
        send_command(record, "halt")


def test_an_announcement_left_by_a_killed_run_is_seen_through(record: Path) -> None:
    record.with_suffix(".port").write_text('{"pid": 1, "port": 9, "token": "left"}', encoding="utf-8")
    assert running(record.parent) is None
    with pytest.raises(RunNotListeningError, match="does not answer"):
        send_command(record, "halt")
    record.with_suffix(".port").write_text('{"pid": ', encoding="utf-8")
    assert read_announcement(record) is None


# --- the hold in a run -----------------------------------------------------------------------------------------------


class Bench:
    """A core of a few lines on the small bench, and a person who acts at set times."""

    def __init__(self, fake_bench: Any) -> None:
        self.bench = fake_bench
        self.told: list[Any] = []

    def core(self, *actions: Any) -> Any:
        for action in actions:
            told = yield action
            while isinstance(told, Command):
                self.told.append(told)
                if told.name == "stop":
                    yield Finish(result={"outcome": "stopped", "reason": "stopped", "warnings": []})
                    return
                told = yield action
            self.told.append(told)
        yield Finish(result={"outcome": "completed", "reason": None, "end_points": [], "warnings": []})

    def go(self, plan: RunPlan, *actions: Any) -> Any:
        bench = self.bench
        return run(
            plan, self.core(*actions), bench.devices, bench.journal, clock=bench.clock, stop=bench.stop,
        )  # fmt: skip

    def events(self) -> list[dict[str, Any]]:
        return [entry for line in self.bench.sink.lines if "event" in (entry := json.loads(line))]


GOGGLES = Ask(key="goggles", text="Goggles on?", choices=("yes", "no"))


def _dose(number: int, volume_ml: float) -> Dose:
    return Dose(number=number, volume_ml=volume_ml, reason="by the script")


def test_a_hold_halts_a_moving_pump_and_the_run_goes_on(fake_bench: Any, plan: RunPlan) -> None:
    people = Bench(fake_bench)
    fake_bench.clock.call_at(103.0, fake_bench.stop.hold)  # 3 s into a dose of 6 s
    people.go(plan, GOGGLES, _dose(1, 0.5), _dose(2, 0.1))
    _, first, hold, second = people.told
    assert isinstance(first, Dosed)
    assert first.volume_ml == pytest.approx(0.25, abs=0.0005), "what was delivered up to the halt counts"
    assert (hold.name, hold.text) == ("pause", "halted by the operator")
    assert isinstance(second, Dosed)
    assert second.volume_ml == pytest.approx(0.1)
    stops = [event for event in people.events() if event["event"] == "pump-stop"]
    assert [(event["confirmed"], event["why"]) for event in stops] == [(True, "halted by the operator")]


def test_a_hold_reaches_a_standing_pump_within_the_wait(fake_bench: Any, plan: RunPlan) -> None:
    people = Bench(fake_bench)
    fake_bench.clock.call_at(104.0, fake_bench.stop.hold)
    people.go(plan, GOGGLES, Wait(seconds=60.0), _dose(1, 0.1))
    _, waited, hold, dosed = people.told
    assert isinstance(waited, Waited)
    assert waited.at_s == pytest.approx(4.0)
    assert hold.name == "pause"
    assert isinstance(dosed, Dosed)
    assert "pump stop" in fake_bench.log


def test_a_hold_that_the_pump_does_not_confirm_ends_the_run(fake_bench: Any, plan: RunPlan) -> None:
    people = Bench(fake_bench)
    fake_bench.pump.stops = False
    fake_bench.clock.call_at(104.0, fake_bench.stop.hold)
    result = people.go(plan, GOGGLES, Wait(seconds=60.0), _dose(1, 0.1))
    assert people.told[-1].name == "stop"
    assert result.outcome == "stopped"
    assert result.stop_confirmed is False
    assert "did not confirm" in result.reason


def test_the_core_waits_after_a_hold_until_it_is_told_to_go_on(fake_bench: Any, plan: RunPlan) -> None:
    """The real core: held while it waits, it does nothing but wait until somebody answers."""

    class Person:
        def __init__(self) -> None:
            self.commands: list[Command] = []

        def waiting(self) -> bool:
            return bool(self.commands)

        def take(self) -> Command | None:
            return self.commands.pop(0) if self.commands else None

    person = Person()
    fake_bench.clock.call_at(105.0, fake_bench.stop.hold)
    fake_bench.clock.call_at(400.0, lambda: person.commands.append(Command(name="go-on")))
    fake_bench.clock.call_at(420.0, lambda: fake_bench.stop.pull("operator"))
    run(
        plan, titrate(plan), fake_bench.devices, fake_bench.journal, clock=fake_bench.clock, stop=fake_bench.stop,
        commands=person,
    )  # fmt: skip
    lines = [json.loads(line) for line in fake_bench.sink.lines]
    during = [line for line in lines if 6.5 < line["run_s"] < 299.0]
    assert len(during) > 500
    assert {line.get("action") or line.get("observation") for line in during} == {"wait", "waited"}
    assert any(line.get("action") == "read" for line in lines if line["run_s"] > 301.0)
    assert lines[-1]["closing"]["outcome"] == "stopped"
