"""The barrier, on bytes: one log of every byte into a record, every fsync of it and every byte written to a port.

What a device is told to do, a question and the result leave only when every line before is on the medium, whatever
command they come from. Messages that only ask (and the stop of a pump, which waits for no disk) may overtake the lines.
"""

from __future__ import annotations

import io
import json
import re
import sys
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

from controller.cli import main
from controller.records import recordfile
from controller.records.record import list_records
from drivers import heldport, operator
from simulators import balance, buffer_beaker, chemist

#: a message that asks: every command in it ends with a question mark, a number may follow
_ASKS = re.compile(rb"(?:[*:A-Za-z]+\?(?: [^;]*)?)(?:;:?[*:A-Za-z]+\?(?: [^;]*)?)*\r?\n?$")
#: stopping waits for nothing, and what was read from a queue or cleared moves nothing
_ALLOWED = re.compile(rb"(?i)^:?(?:PUMP|BURette|BUR):STOP|\*CLS")


@dataclass
class Watch:
    """Everything in the order in which it happened: ("line" | "sync" | "wire" | "ask" | "told" | "closing", what)."""

    events: list[tuple[str, bytes, int]] = field(default_factory=list)
    unsynced: dict[int, int] = field(default_factory=dict)
    lines: dict[int, bytes] = field(default_factory=dict)
    synced: dict[int, bytes] = field(default_factory=dict)

    def wrote(self, descriptor: int, data: bytes) -> None:
        closing = b'"closing":' in data
        if closing:
            self.left("closing", data)
        self.unsynced[descriptor] = self.unsynced.get(descriptor, 0) + len(data)
        self.lines[descriptor] = self.lines.get(descriptor, b"") + data

    def synced_to_disk(self, descriptor: int) -> None:
        self.unsynced[descriptor] = 0
        self.synced[descriptor] = self.lines.get(descriptor, b"")
        self.events.append(("sync", b"", 0))

    def closed(self, descriptor: int) -> None:
        self.unsynced.pop(descriptor, None)
        self.lines.pop(descriptor, None)
        self.synced.pop(descriptor, None)

    def left(self, what: str, data: bytes) -> None:
        """Something leaves the program: note how many bytes are not on the medium."""
        self.events.append((what, bytes(data), sum(self.unsynced.values())))

    def of(self, *kinds: str) -> list[tuple[str, bytes, int]]:
        return [event for event in self.events if event[0] in kinds]


@pytest.fixture
def watch(monkeypatch: pytest.MonkeyPatch) -> Watch:
    """Put the log between program and file, ports, operator and standard output."""
    found = Watch()
    own_write, own_close, own_sync = recordfile.FileSink.write, recordfile.FileSink.close, recordfile.sync_to_disk
    own_open = heldport.open_port

    def write(self: Any, line: bytes) -> None:
        found.wrote(self._descriptor, line)
        own_write(self, line)

    def close(self: Any) -> None:
        own_close(self)
        found.closed(self._descriptor)

    def sync(descriptor: int) -> None:
        own_sync(descriptor)
        found.synced_to_disk(descriptor)

    class Wire:
        """A port that notes what is written to it."""

        def __init__(self, port: Any) -> None:
            object.__setattr__(self, "_port", port)

        def write(self, data: bytes) -> Any:
            found.left("wire", data)
            return self._port.write(data)

        def __getattr__(self, name: str) -> Any:
            return getattr(self._port, name)

        def __setattr__(self, name: str, value: Any) -> None:
            setattr(self._port, name, value)

    monkeypatch.setattr(recordfile.FileSink, "write", write)
    monkeypatch.setattr(recordfile.FileSink, "close", close)
    monkeypatch.setattr(recordfile, "sync_to_disk", sync)
    monkeypatch.setattr(heldport, "open_port", lambda *given: Wire(own_open(*given)))
    monkeypatch.setattr(heldport, "close_port", lambda port: own_close_port(getattr(port, "_port", port)))
    for module in (operator, chemist, buffer_beaker, balance):
        for one in vars(module).values():
            if isinstance(one, type) and "ask" in vars(one) and one.__module__ == module.__name__:
                monkeypatch.setattr(one, "ask", _noted(one.ask, found))
    return found


own_close_port = heldport.close_port


def _noted(ask: Callable[..., str], watch: Watch) -> Callable[..., str]:
    def asked(self: Any, key: str, *rest: Any) -> str:
        watch.left("ask", key.encode())
        return ask(self, key, *rest)

    return asked


class Told(io.StringIO):
    """Standard output that notes when it was written to."""

    def __init__(self, watch: Watch) -> None:
        super().__init__()
        self._watch = watch

    def write(self, text: str) -> int:
        self._watch.left("told", text.encode())
        return super().write(text)


@pytest.fixture
def lab(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setenv("XDG_STATE_HOME", str(tmp_path / "state"))
    monkeypatch.delenv("HALFDROP_LAB", raising=False)
    monkeypatch.chdir(tmp_path)
    assert main(["init", "lab"]) == 0
    return tmp_path / "lab"


def halfdrop(watch: Watch, monkeypatch: pytest.MonkeyPatch, *arguments: str) -> str:
    told = Told(watch)
    with monkeypatch.context() as patched:
        patched.setattr(sys, "stdout", told)
        status = main([*arguments, "--lab", "lab"])
    assert status in (0, 1), arguments
    return told.getvalue()


def check(watch: Watch, *, doses: int, questions: int) -> None:
    """Nothing that acts left while a byte of a record was not on the medium; and something did leave."""
    acts = [event for event in watch.of("wire") if not _ASKS.match(event[1]) and not _ALLOWED.match(event[1])]
    starts = [event for event in acts if b"STAR" in event[1].upper()]
    assert len(starts) >= doses, sorted({event[1] for event in acts})[:20]
    asked = watch.of("ask")
    assert len(asked) >= questions
    closing = watch.of("closing")
    assert closing
    assert [event for event in (*acts, *asked, *closing) if event[2]] == []
    # nor does a result, a line of progress or a table leave before what it tells of
    assert [event for event in watch.of("told") if event[2]] == []
    assert any(event[2] for event in watch.of("wire"))  # the log sees lines that wait: readings are asked for at once


def test_a_dose_starts_only_when_its_own_line_is_on_the_medium(
    watch: Watch, lab: Path, monkeypatch: pytest.MonkeyPatch
):
    seen: list[tuple[int, bool]] = []
    own = watch.left

    def left(what: str, data: bytes) -> None:
        own(what, data)
        number = re.search(rb"STAR[A-Z]* (\d+)", data.upper())
        if what == "wire" and number:
            line = b'"action":"dose","number":' + number[1] + b","
            seen.append((int(number[1]), any(line in data for data in watch.synced.values())))

    monkeypatch.setattr(watch, "left", left)
    halfdrop(watch, monkeypatch, "run", "juice-acidity", "--headless", "--json")
    assert len(seen) > 10
    assert all(on_medium for _, on_medium in seen)


def small_syringe(lab: Path) -> None:
    bench = lab / "bench.yaml"
    text = bench.read_text()
    found = re.search(r"syringe_ml: *([0-9.]+)", text)
    assert found
    bench.write_text(text.replace(found[0], "syringe_ml: 1.0"))


ROUTES: dict[str, tuple[list[str], int, int]] = {
    "run": (["run", "juice-acidity", "--headless", "--json"], 10, 3),
    "probe": (["calibrate", "probe", "--headless", "--json"], 0, 3),
    "titrant": (["calibrate", "titrant", "standardise-sodium-hydroxide", "--portions", "0.1512,0.1490,0.1533"], 30, 3),
    "burette": (["calibrate", "burette", "--headless", "--json"], 10, 3),
    "blank": (
        ["calibrate", "blank", "juice-acidity", "--lot-id", "W-1", "--replicates", "2", "--headless", "--json"],
        3,
        1,
    ),
}


@pytest.mark.parametrize("route", ROUTES)
def test_nothing_leaves_before_its_barrier(route: str, watch: Watch, lab: Path, monkeypatch: pytest.MonkeyPatch):
    arguments, doses, questions = ROUTES[route]
    halfdrop(watch, monkeypatch, *arguments)
    check(watch, doses=doses, questions=questions)


def test_nor_does_a_refill(watch: Watch, lab: Path, monkeypatch: pytest.MonkeyPatch):
    small_syringe(lab)
    halfdrop(watch, monkeypatch, "run", "juice-acidity", "--headless", "--json")
    check(watch, doses=10, questions=3)
    fills = [event for event in watch.of("wire") if b"FILL" in event[1].upper() and not _ASKS.match(event[1])]
    assert len(fills) >= 2
    assert {event[2] for event in fills} == {0}


@pytest.mark.parametrize("share", [0.1, 0.5, 0.9])
def test_nor_does_anything_of_a_resumed_run(share: float, watch: Watch, lab: Path, monkeypatch: pytest.MonkeyPatch):
    halfdrop(watch, monkeypatch, "run", "juice-acidity", "--headless", "--json")
    [path] = list_records(lab / "runs")
    data = path.read_bytes()
    path.write_bytes(data[: int(share * len(data))])
    watch.events.clear()
    told = halfdrop(watch, monkeypatch, "resume", path.stem, "--headless", "--json")
    assert json.loads(told)["outcome"] == "completed"
    check(watch, doses=1, questions=2)


def test_nor_does_anything_of_a_series(watch: Watch, lab: Path, monkeypatch: pytest.MonkeyPatch):
    Path("samples.csv").write_text("sample_id,volume_ml\nvat-1,10\nvat-2,10\n")
    halfdrop(watch, monkeypatch, "run", "juice-acidity", "--series", "samples.csv", "--headless", "--json")
    check(watch, doses=20, questions=6)
