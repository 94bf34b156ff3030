"""A whole run of the core through runner, journal, drivers and wire grammar on the nominal bench, in memory."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import pytest

from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan
from controller.journal import Journal
from controller.records.encoding import plan_from_json
from controller.records.record import points, read_record
from controller.records.recordfile import FileSink
from controller.records.verification import verify
from controller.runner import run
from controller.running.devices import Devices
from controller.running.outcome import RunResult
from controller.running.stopping import StopSwitch
from controller.titration.actions import from_entry, to_entry
from controller.titration.core import titrate
from controller.titration.plan import Question, RunPlan
from drivers.clock import ManualClock
from drivers.identity import Identity
from drivers.link import LinkSettings, open_link
from drivers.operator import AnswersOperator
from drivers.scpi_probe import ScpiProbe
from drivers.scpi_pump import ScpiPump
from simulators.devices import ProbeDevice, PumpDevice
from simulators.nominal import NominalBench, nominal_bench
from simulators.port import VirtualPorts


@dataclass
class Wired:
    """A nominal bench behind drivers."""

    nominal: NominalBench
    clock: ManualClock
    devices: Devices
    stop: StopSwitch
    plan: RunPlan

    def run(self, path: Path) -> RunResult:
        journal = Journal(FileSink(path, durable=False), self.clock, name=str(path))
        return run(
            self.plan, titrate(self.plan), self.devices, journal, clock=self.clock, stop=self.stop, operator_name="Ada"
        )

    def steps_in_truth(self) -> int:
        return self.nominal.bench.mechanism.tip_steps_total(self.clock.now_s())


@contextmanager
def wire(name: str) -> Iterator[Wired]:
    clock, stop = ManualClock(), StopSwitch()
    nominal = nominal_bench("acetic", 11)
    with VirtualPorts(clock) as ports:
        settings = LinkSettings()
        urls = [
            ports.add(f"pump-{name}", PumpDevice(nominal.bench.mechanism, _identity("1")), "memory").url,
            ports.add(f"probe-{name}", ProbeDevice(nominal.bench.sensor, _identity("2")), "memory").url,
        ]
        links = [
            open_link(url, settings, clock=clock, device=name)
            for url, name in zip(urls, ("pump", "probe"), strict=True)
        ]
        devices = Devices(
            pump=ScpiPump(links[0], clock, stop.event, rate_ml_min=5.0),
            probe=ScpiProbe(links[1], clock, stop.event),
            operator=AnswersOperator({"goggles": "yes", "rinse-and-store": "yes"}),
        )
        status = devices.pump.status()
        plan = nominal_plan(nominal, MODEL_GUIDED)
        plan = replace(
            plan,
            questions=(Question(key="goggles", text="Goggles on?", choices=("yes", "no"), must_be="yes"),),
            probe=replace(plan.probe, identity=devices.probe.identify().key),
            pump=replace(
                plan.pump,
                identity=devices.pump.identify().key,
                start_count=status.start_count,
                last_dose_number=status.last_dose_number,
            ),
        )
        yield Wired(nominal=nominal, clock=clock, devices=devices, stop=stop, plan=plan)
        for link in links:
            link.close()


@pytest.fixture
def wired(request: pytest.FixtureRequest) -> Iterator[Wired]:
    with wire(request.node.name) as made:
        yield made


def _identity(serial: str) -> Identity:
    return Identity(maker="Orchard", model="Bench", serial=serial, firmware="1")


def _replayed(path: Path) -> tuple[list[dict[str, Any]], list[dict[str, Any]]]:
    """Feed a record's observations to a fresh core; return the actions recorded and the actions decided now."""
    record = read_record(path)
    decisions = titrate(plan_from_json(record.header["plan"]))
    recorded, decided = [], []
    action, answer = next(decisions), None
    dialogue = [entry for entry in record.entries if "by" not in entry]
    for position, entry in enumerate(dialogue):
        if "action" not in entry:
            continue
        recorded.append({key: value for key, value in entry.items() if key not in _LINE_KEYS})
        decided.append(json.loads(json.dumps(to_entry(action))))
        if entry["action"] == "finish":
            break
        follows = dialogue[position + 1]
        answer = from_entry(follows) if "observation" in follows else None
        action = decisions.send(answer)
    return recorded, decided


_LINE_KEYS = ("line", "utc", "run_s", "previous_sha256")


def test_a_whole_run_over_the_wire(wired: Wired, tmp_path: Path) -> None:
    path = tmp_path / "run.jsonl"
    ended = wired.run(path)
    assert (ended.outcome, ended.exit_status) == ("completed", 0)
    [end_point] = ended.result["end_points"]
    # 5 uL: an allowance of five standard deviations of the bench; its figures are the benchmark's business
    assert end_point["volume_ml"] == pytest.approx(wired.nominal.true_equivalence_ml[0], abs=0.005)
    assert ended.steps == wired.steps_in_truth()
    assert not [warning for warning in ended.result["warnings"] if "account" in warning]
    assert verify(path).state == "intact"
    assert len(points(read_record(path))) >= 10


def test_a_record_replays_to_the_same_decisions(wired: Wired, tmp_path: Path) -> None:
    path = tmp_path / "run.jsonl"
    wired.run(path)
    recorded, decided = _replayed(path)
    assert len(recorded) > 100
    assert decided == recorded


def test_two_runs_with_one_seed_write_identical_records(tmp_path: Path) -> None:
    written = []
    for name in ("first", "second"):
        (tmp_path / name).mkdir()
        path = tmp_path / name / "run.jsonl"
        with wire(f"identical-{name}") as made:
            made.run(path)
        written.append(path.read_bytes())
    assert written[0] == written[1]


@pytest.mark.parametrize("number", [1, 5, 12])
@pytest.mark.parametrize("share", [0.0, 0.5, 0.999, 1.5])
def test_a_stop_at_any_moment_of_a_dose_keeps_every_step(
    wired: Wired, whole_run: Path, tmp_path: Path, number: int, share: float
) -> None:
    [dosed] = [entry for entry in read_record(whole_run).of("dosed") if entry["number"] == number]
    at_s = dosed["started_at_s"] + share * (dosed["at_s"] - dosed["started_at_s"])
    wired.clock.call_at(at_s, lambda: wired.stop.pull("terminate"))
    path = tmp_path / "run.jsonl"
    ended = wired.run(path)
    assert (ended.outcome, ended.exit_status, ended.stop_confirmed) == ("stopped", 143, True)
    assert ended.reason == "terminated by the system"
    assert ended.steps == wired.steps_in_truth()
    assert verify(path).state == "intact"
    last = [*read_record(path).of("dosed")]
    if share == 0.5:
        assert 0.0 < last[-1]["volume_ml"] < dosed["volume_ml"]
    recorded, decided = _replayed(path)
    assert decided == recorded


@pytest.fixture(scope="module")
def whole_run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The record of an undisturbed run."""
    path = tmp_path_factory.mktemp("whole") / "run.jsonl"
    with wire("whole-run") as made:
        made.run(path)
    return path
