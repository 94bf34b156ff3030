"""A program that dies at any moment: the record is cut at any byte behind the last barrier, and the run goes on."""

from __future__ import annotations

import random
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import pytest

from controller.foresight.study_plan import (
    BASELINE,
    EQUAL_VOLUMES,
    MODEL_GUIDED,
    WITHOUT_RECORD,
    Strategy,
    nominal_plan,
)
from controller.journal import Journal
from controller.records.brokenrun import read_broken
from controller.records.record import read_record
from controller.records.verification import verify
from controller.replay import replay
from controller.resuming.resume import GO_ON, GoingOn, go_on
from controller.runner import run
from controller.running.devices import Devices
from controller.running.outcome import RunFailedError, RunResult
from controller.running.stopping import Commands, StopSwitch
from controller.titration.actions import Command
from controller.titration.core import titrate
from controller.titration.plan import RunPlan
from drivers.clock import ManualClock
from drivers.identity import Identity
from drivers.link import LinkSettings, open_link
from drivers.operator import AnswersOperator
from drivers.scpi_dose import ScpiDose
from drivers.scpi_probe import ScpiProbe
from drivers.scpi_pump import ScpiPump
from simulators.devices import ProbeDevice, PumpDevice
from simulators.nominal import NominalBench, NominalCase, nominal_bench
from simulators.port import VirtualPorts

ANSWERS = {**GO_ON, "rinse-and-store": "yes"}


class Died(BaseException):
    """The power failed: nothing that the program does afterwards reaches disk or devices."""


@dataclass
class DyingSink:
    """A record's file as a crash leaves it: what was synced is there, of the rest any prefix."""

    dies: Callable[[int], bool] = lambda line: False
    data: bytearray = field(default_factory=bytearray)
    synced: int = 0
    lines: int = 0
    dead: bool = False

    def write(self, line: bytes) -> None:
        if self.dead:
            raise Died
        self.data += line
        self.lines += 1
        if self.dies(self.lines):
            self.die()

    def die(self) -> None:
        self.dead = True
        raise Died

    def sync(self) -> None:
        if self.dead:
            raise Died
        self.synced = len(self.data)

    def give_back_reserve(self) -> None:
        if self.dead:
            raise Died

    def close(self) -> None:
        """The file is the test's."""


class Cable:
    """Passes everything on to a device until the program is dead."""

    def __init__(self, device: Any, sink: DyingSink) -> None:
        self._device, self._sink = device, sink

    def __getattr__(self, name: str) -> Any:
        if self._sink.dead:
            raise Died
        return getattr(self._device, name)


class Once:
    """A person who gives one command."""

    def __init__(self, command: Command) -> None:
        self._commands = [command]

    def waiting(self) -> bool:
        return bool(self._commands)

    def take(self) -> Command | None:
        return self._commands.pop() if self._commands else None


@dataclass
class Survivor:
    """A bench that outlives the program."""

    nominal: NominalBench
    clock: ManualClock
    pump_device: PumpDevice
    urls: tuple[str, str]
    strategy: Strategy

    @contextmanager
    def devices(self, stop: StopSwitch) -> Iterator[Devices]:
        links = [open_link(url, LinkSettings(), clock=self.clock, device="x") for url in self.urls]
        try:
            yield Devices(
                pump=ScpiPump(links[0], self.clock, stop.event, rate_ml_min=5.0),
                probe=ScpiProbe(links[1], self.clock, stop.event),
                operator=AnswersOperator(ANSWERS),
            )
        finally:
            for link in links:
                link.close()

    def plan(self, devices: Devices) -> RunPlan:
        plan, status = nominal_plan(self.nominal, self.strategy), devices.pump.status()
        return replace(
            plan,
            probe=replace(plan.probe, identity=devices.probe.identify().key),
            pump=replace(
                plan.pump,
                identity=devices.pump.identify().key,
                start_count=status.start_count,
                last_dose_number=status.last_dose_number,
            ),
        )

    def die(self, sink: DyingSink, *, stop: StopSwitch | None = None) -> bool:
        """Run until the program dies; False where it came to its end before."""
        stop = stop or StopSwitch()
        with self.devices(stop) as devices:
            plan = self.plan(devices)
            cabled = Devices(
                pump=Cable(devices.pump, sink), probe=Cable(devices.probe, sink), operator=devices.operator
            )
            try:
                run(plan, titrate(plan), cabled, Journal(sink, self.clock), clock=self.clock, stop=stop)
            except Died:
                return True
        return False

    def resume(
        self, path: Path, *, gap_s: float = 0.0, evaluate_only: bool = False, commands: Commands | None = None
    ) -> RunResult:
        self.clock.wait(gap_s)
        stop = StopSwitch()
        with self.devices(stop) as devices:
            broken = read_broken(path)
            how = GoingOn(
                devices=devices,
                clock=self.clock,
                stop=stop,
                gap_s=gap_s,
                evaluate_only=evaluate_only,
                commands=commands,
                durable=False,
            )
            return go_on(broken, how)

    def steps_in_truth(self) -> int:
        return self.nominal.bench.mechanism.tip_steps_total(self.clock.now_s())


@contextmanager
def surviving(
    name: str,
    *,
    seed: int = 11,
    case: NominalCase = "acetic",
    strategy: Strategy = MODEL_GUIDED,
    nominal: NominalBench | None = None,
) -> Iterator[Survivor]:
    clock = ManualClock()
    nominal = nominal or nominal_bench(case, seed)
    with VirtualPorts(clock) as ports:
        pump_device = PumpDevice(
            nominal.bench.mechanism, Identity(maker="Orchard", model="Bench", serial="1", firmware="1")
        )
        probe_device = ProbeDevice(
            nominal.bench.sensor, Identity(maker="Orchard", model="Bench", serial="2", firmware="1")
        )
        urls = (ports.add(f"pump-{name}", pump_device).url, ports.add(f"probe-{name}", probe_device).url)
        yield Survivor(nominal=nominal, clock=clock, pump_device=pump_device, urls=urls, strategy=strategy)


def dose_steps(path: Path) -> int:
    """Steps that the record knows of."""
    return sum(entry.get("steps") or 0 for kind in ("dosed", "failed") for entry in read_record(path).of(kind))


def check(bench: Survivor, ended: RunResult, path: Path, *, before: bytes) -> None:
    """No synced byte lost, no step lost or doubled, the record sound and decided again the same, the number right."""
    assert path.read_bytes().startswith(before)
    assert verify(path).state == "intact"
    assert replay(read_record(path)).identical
    assert ended.outcome == "completed", ended.reason
    assert ended.steps == dose_steps(path) == bench.steps_in_truth()
    [end_point] = ended.result["end_points"]
    uncertainty_ml = end_point["standard_uncertainty_ml"]
    # 5 standard uncertainties of the run, as everywhere in this suite
    assert abs(end_point["volume_ml"] - bench.nominal.true_equivalence_ml[0]) < 5.0 * uncertainty_ml
    assert not [text for text in ended.result["warnings"] if "account" in text]


@pytest.mark.parametrize("line", [2, 3, 40, 44, 45, 46, 47, 48, 120, 300, 333])
@pytest.mark.parametrize("gap_s", [0.0, 40.0])
def test_a_run_that_dies_after_any_line_goes_on(line: int, gap_s: float, tmp_path: Path):
    with surviving(f"line-{line}-{gap_s}") as bench:
        sink = DyingSink(dies=lambda written: written == line)
        assert bench.die(sink)
        path = tmp_path / "run.jsonl"
        path.write_bytes(sink.data)
        check(bench, bench.resume(path, gap_s=gap_s), path, before=bytes(sink.data))


@pytest.mark.parametrize("share", [0.001, 0.1, 0.5, 0.9, 0.999])
@pytest.mark.parametrize("number", [1, 3, 9])
@pytest.mark.parametrize("gap_s", [0.0, 30.0])
def test_a_run_that_dies_in_a_dose_settles_it_by_asking(number: int, share: float, gap_s: float, tmp_path: Path):
    with surviving(f"whole-{number}-{share}-{gap_s}") as bench:
        sink = DyingSink()
        assert not bench.die(sink)
        path = tmp_path / "whole.jsonl"
        path.write_bytes(sink.data)
        [dosed] = [entry for entry in read_record(path).of("dosed") if entry["number"] == number]
    at_s = dosed["started_at_s"] + share * (dosed["at_s"] - dosed["started_at_s"])
    with surviving(f"dies-{number}-{share}-{gap_s}") as bench:
        sink = DyingSink()
        bench.clock.call_at(at_s, sink.die)
        assert bench.die(sink)
        path = tmp_path / "run.jsonl"
        path.write_bytes(sink.data)
        ended = bench.resume(path, gap_s=gap_s)
        check(bench, ended, path, before=bytes(sink.data))
        [line] = [entry for entry in read_record(path).of("resumed") if "event" in entry]
        assert line["dose_in_doubt"]["number"] == number
        assert line["dose_in_doubt"]["found"] in {"done", "partly done", "not done"}


def test_a_run_that_dies_halted_with_a_dose_that_never_began_goes_on(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    with surviving("halted") as bench:
        stop, sink = StopSwitch(), DyingSink()
        sink.dies = lambda written: b'"observation":"command"' in bytes(sink.data[-300:])
        arm = ScpiDose.arm

        def armed(dose: ScpiDose) -> None:
            arm(dose)
            if dose.number == 4:
                stop.hold()

        monkeypatch.setattr(ScpiDose, "arm", armed)
        assert bench.die(sink, stop=stop)
        path = tmp_path / "run.jsonl"
        path.write_bytes(sink.data)
        [halted] = [entry for entry in read_record(path).of("dosed") if entry["number"] == 4]
        assert (halted["volume_ml"], halted["steps"]) == (0.0, 0)
        going_on = Once(Command(name="go-on"))
        check(bench, bench.resume(path, gap_s=20.0, commands=going_on), path, before=bytes(sink.data))


@pytest.mark.parametrize("seed", range(4))
def test_every_byte_behind_the_last_barrier_may_be_missing(seed: int, tmp_path: Path):
    draws = random.Random(seed)
    line = draws.randrange(5, 500)
    strategy = (MODEL_GUIDED, WITHOUT_RECORD, BASELINE, EQUAL_VOLUMES)[seed % 4]
    with surviving(f"counts-{seed}", seed=seed, strategy=strategy) as bench:
        sink = DyingSink(dies=lambda written: written == line)
        assert bench.die(sink)
        lengths = draws.sample(range(sink.synced, len(sink.data) + 1), k=min(3, len(sink.data) + 1 - sink.synced))
    for length in lengths:
        with surviving(f"cut-{seed}-{length}", seed=seed, strategy=strategy) as bench:
            sink = DyingSink(dies=lambda written: written == line)
            assert bench.die(sink)
            path = tmp_path / f"run-{length}.jsonl"
            path.write_bytes(sink.data[:length])
            ended = bench.resume(path, gap_s=5.0)
            assert verify(path).state == "intact"
            assert replay(read_record(path)).identical
            assert ended.steps == dose_steps(path) == bench.steps_in_truth()
            assert ended.result["end_points"] or strategy.name.startswith("equal")


def test_a_run_may_break_off_more_than_once(tmp_path: Path):
    with surviving("twice") as bench:
        sink = DyingSink(dies=lambda written: written == 200)
        assert bench.die(sink)
        path = tmp_path / "run.jsonl"
        path.write_bytes(sink.data[:-7])
        stop = StopSwitch()
        with bench.devices(stop) as devices:
            broken = read_broken(path)

            def break_off(_: Any) -> Callable[[Any], None]:
                return breaks_off

            def breaks_off(_: Any) -> None:
                if len(path.read_bytes()) > 60_000:
                    raise Died

            how = GoingOn(
                devices=devices, clock=bench.clock, stop=stop, gap_s=3.0, durable=False, on_progress=break_off
            )
            with pytest.raises(RunFailedError):  # an error of the program closes the record; see below
                go_on(broken, how)
        torn = path.read_bytes()
        closing = torn.rindex(b'{"line"')
        path.write_bytes(torn[: closing + 25])  # the line that closed the record is torn off too
        ended = bench.resume(path, gap_s=9.0)
        assert verify(path).state == "intact"
        assert len([entry for entry in read_record(path).of("resumed") if "event" in entry]) == 2
        assert ended.result["end_points"]


def test_a_pump_that_was_switched_off_in_a_dose_leaves_it_unknown(tmp_path: Path):
    with surviving("restarted") as bench:
        sink = DyingSink()
        bench.clock.call_at(60.0, lambda: None)
        sink.dies = lambda written: b'"action":"dose","number":8' in bytes(sink.data[-700:])
        assert bench.die(sink)
        path = tmp_path / "run.jsonl"
        path.write_bytes(sink.data)
        bench.pump_device.restart(bench.clock.now_s())
        ended = bench.resume(path, gap_s=10.0)
        assert ended.outcome == "failed"
        assert "unknown between 0.0000 and" in str(ended.reason)
        [line] = [entry for entry in read_record(path).of("resumed") if "event" in entry]
        assert line["dose_in_doubt"] == {"number": 8, "found": "unknown"}
        assert replay(read_record(path)).identical


def test_what_is_there_can_be_evaluated_without_going_on(tmp_path: Path):
    with surviving("evaluate") as bench:
        sink = DyingSink(dies=lambda written: written == 620)
        assert bench.die(sink)
        path = tmp_path / "run.jsonl"
        path.write_bytes(sink.data)
        steps = bench.steps_in_truth()
        ended = bench.resume(path, evaluate_only=True)
        assert ended.outcome == "stopped"
        assert "ended by the operator after it broke off" in str(ended.reason)
        assert bench.steps_in_truth() == steps
        assert verify(path).state == "intact"


def test_no_dose_and_no_question_leaves_before_its_barrier(tmp_path: Path):
    with surviving("barrier") as bench:
        sink, unsynced = DyingSink(), []
        stop = StopSwitch()
        with bench.devices(stop) as devices:
            plan = bench.plan(devices)
            pump = devices.pump

            class Watched:
                """Notes what had not reached the medium when something left."""

                def __getattr__(self, name: str) -> Any:
                    if name in {"dose", "fill", "prime"}:
                        unsynced.append((name, len(sink.data) - sink.synced))
                    return getattr(pump, name)

            watched = Devices(pump=Watched(), probe=devices.probe, operator=devices.operator)
            run(plan, titrate(plan), watched, Journal(sink, bench.clock), clock=bench.clock, stop=stop)
        assert len(unsynced) > 10
        assert {left for _, left in unsynced} == {0}
        assert sink.synced == len(sink.data)
