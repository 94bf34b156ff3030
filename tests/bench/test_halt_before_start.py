"""A halt that comes while a dose is armed and not yet started: nothing moves, and the run goes on when told to."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from configs.settings import shipped_bench, shipped_method
from controller.assembly import Opening, open_bench
from controller.journal import Journal
from controller.planning.runplan import SampleChoice, make_plan, plan_sample
from controller.records.record import Record, read_record
from controller.records.recordfile import FileSink
from controller.replay import replay
from controller.runner import run
from controller.running.outcome import RunResult
from controller.running.stopping import StopSwitch
from controller.titration.actions import Command
from controller.titration.core import titrate
from drivers.dialect_push import DialectPush
from drivers.scpi_burette import BuretteTalk
from drivers.scpi_dose import ScpiDose

GOES_ON_AFTER_S = 30.0
# the simulated juice by stoichiometry, see tests/bench/test_commands.py
TRUE_JUICE_ML = 10.0 * (2 * 0.045 + 3 * 0.001 - 0.020) / 0.0997
HALTED_DOSE = 4


class Person:
    """Halts the run once, and lets it go on half a minute later."""

    def __init__(self) -> None:
        self.stop = StopSwitch()
        self.halted_at_s: float | None = None
        self.now_s: Callable[[], float] = lambda: 0.0
        self.calls = 0

    def halts_at(self, monkeypatch: pytest.MonkeyPatch, cls: type, name: str, *, before: bool = False) -> None:
        """Hold the switch right behind (or before) the fourth call of a method."""
        real = getattr(cls, name)

        def watched(this: Any, *args: Any, **kwargs: Any) -> Any:
            self.calls += 1
            now = self.calls == HALTED_DOSE
            if now and before:
                self.hold()
            done = real(this, *args, **kwargs)
            if now and not before:
                self.hold()
            return done

        monkeypatch.setattr(cls, name, watched)

    def hold(self) -> None:
        self.stop.hold()
        self.halted_at_s = self.now_s()

    def waiting(self) -> bool:
        return self.halted_at_s is not None and self.now_s() >= self.halted_at_s + GOES_ON_AFTER_S

    def take(self) -> Command | None:
        if not self.waiting():
            return None
        self.halted_at_s = None
        return Command(name="go-on")


def _titrated(place: Path, person: Person, grammar: str) -> tuple[RunResult, Record]:
    bench, method = shipped_bench(), shipped_method("juice-acidity")
    if grammar == "dialect":
        pump = bench.pump.model_copy(update={"speaks": "dialect", "dialect": "orchard-lane-pump"})
        bench = bench.model_copy(update={"pump": pump})
    choice, stop = SampleChoice(sample_id="press 3"), person.stop
    opening = Opening(place=place, route="memory", seed=4)
    with open_bench(bench, method, plan_sample(method, choice), opening=opening, stop=stop) as opened:
        person.now_s = opened.clock.now_s
        plan = make_plan(
            method, bench, choice, pump=opened.account, probe_identity=opened.probe_identity, seed=opened.seed
        )
        journal = Journal(FileSink(place / "run.jsonl", durable=False), opened.clock)
        ended = run(plan, titrate(plan), opened.devices, journal, clock=opened.clock, stop=stop, commands=person)
    return ended, read_record(place / "run.jsonl")


@pytest.mark.parametrize(
    ("grammar", "step", "before"),
    [
        pytest.param("scpi", (ScpiDose, "arm"), True, id="SCPI, before it is armed"),
        pytest.param("scpi", (ScpiDose, "arm"), False, id="SCPI, armed and not started"),
        pytest.param("scpi", (BuretteTalk, "start"), True, id="SCPI, as the start leaves"),
        pytest.param("dialect", (DialectPush, "set_target"), True, id="dialect, before its target is told"),
        pytest.param("dialect", (DialectPush, "set_target"), False, id="dialect, target told and not begun"),
        pytest.param("dialect", (DialectPush, "_begin"), True, id="dialect, as the push leaves"),
    ],
)
def test_a_dose_halted_before_its_start_counts_nothing_and_the_run_goes_on(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, grammar: str, step: tuple[type, str], before: bool
) -> None:
    person = Person()
    person.halts_at(monkeypatch, *step, before=before)
    ended, record = _titrated(tmp_path, person, grammar)
    assert ended.outcome == "completed", ended.reason
    assert next(record.of("command"))["name"] == "pause"
    doses, dosed = list(record.of("dose")), list(record.of("dosed"))
    numbers = [entry["number"] for entry in dosed]
    assert numbers == sorted(set(numbers)), "a number is used once"
    assert [entry["number"] for entry in doses] == sorted(entry["number"] for entry in doses)
    (halted,) = [entry for entry in dosed if entry["number"] == HALTED_DOSE]
    whole = next(entry["volume_ml"] for entry in doses if entry["number"] == HALTED_DOSE)
    assert halted["volume_ml"] in (0.0, whole), "nothing of it came, or all of it"
    # what the syringe pushed is what the record holds: see tests/conftest.py, which compares the steps of every run
    assert sum(entry["steps"] for entry in dosed) == ended.steps
    (point,) = ended.result["end_points"]
    assert abs(point["volume_ml"] - TRUE_JUICE_ML) < 4 * point["standard_uncertainty_ml"]
    assert replay(record).identical
