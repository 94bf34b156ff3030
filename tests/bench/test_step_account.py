"""The suite's own account of steps (tests/conftest.py) sees whole runs, and sees a step that a record lacks."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

from configs.settings import shipped_bench, shipped_method
from controller.assembly import Opening, open_bench
from controller.journal import Journal
from controller.planning.runplan import SampleChoice, make_plan, plan_sample
from controller.records.recordfile import FileSink, MemorySink
from controller.runner import run
from controller.running.devices import Devices
from controller.running.outcome import RunResult
from controller.running.stopping import StopSwitch
from controller.titration.core import titrate
from drivers.pump import Delivered


class ForgetfulPump:
    """Says of its third dose that it was a step shorter than it was."""

    def __init__(self, pump: Any) -> None:
        self._pump = pump

    def __getattr__(self, name: str) -> Any:
        return getattr(self._pump, name)

    def dose(self, number: int, volume_ml: float) -> Delivered:
        delivered: Delivered = self._pump.dose(number, volume_ml)
        return replace(delivered, steps=delivered.steps - 1) if number == 3 else delivered


def _run(place: Path, *, forgetful: bool, record: Path | None = None) -> RunResult:
    bench, method = shipped_bench(), shipped_method("juice-acidity")
    choice, stop = SampleChoice(sample_id="press 3"), StopSwitch()
    with open_bench(
        bench, method, plan_sample(method, choice), opening=Opening(place=place, route="memory", seed=4), stop=stop
    ) as opened:
        plan = make_plan(
            method, bench, choice, pump=opened.account, probe_identity=opened.probe_identity, seed=opened.seed
        )
        pump = ForgetfulPump(opened.devices.pump) if forgetful else opened.devices.pump
        devices = Devices(pump=pump, probe=opened.devices.probe, operator=opened.devices.operator)
        sink = MemorySink() if record is None else FileSink(record, durable=False)
        journal = Journal(sink, opened.clock)
        return run(plan, titrate(plan), devices, journal, clock=opened.clock, stop=stop)


def test_a_whole_run_is_held_against_the_simulated_syringe(step_accounts: Any, tmp_path: Path) -> None:
    before = step_accounts.checked
    assert _run(tmp_path, forgetful=False).steps > 1000
    assert step_accounts.checked == before + 1
    assert step_accounts.wrong == []


def test_a_single_step_that_the_record_lacks_is_seen(step_accounts: Any, tmp_path: Path) -> None:
    steps = _run(tmp_path, forgetful=True).steps
    [wrong] = step_accounts.wrong
    assert f"holds {steps} steps, {steps + 1} were pushed" in wrong
    step_accounts.wrong.clear()


def test_a_record_is_held_against_the_pump_s_own_account(
    step_accounts: Any, accounts_of_records: Any, tmp_path: Path
) -> None:
    record = tmp_path / "run.jsonl"
    _run(tmp_path, forgetful=False, record=record)
    assert list(accounts_of_records(tmp_path)) == []
    record.unlink()
    steps = _run(tmp_path, forgetful=True, record=record).steps
    [wrong] = accounts_of_records(tmp_path)
    assert f"holds {steps} steps, the pump counted [{steps + 1}]" in wrong
    record.unlink()
    step_accounts.wrong.clear()
