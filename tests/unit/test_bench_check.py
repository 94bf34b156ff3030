"""The walk through a bench: what it finds where all is well, and where something is not."""

from __future__ import annotations

import io
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from dataclasses import replace
from typing import Any, cast

import pytest

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from configs.settings import shipped_bench, shipped_method
from controller.assembly import Opening, reach_bench
from controller.benchwork.bench_check import BenchCheck
from controller.benchwork.bench_finding import Finding
from controller.benchwork.bench_shutdown import shut_down_steps
from controller.planning.runplan import SampleChoice, plan_sample
from controller.running.stopping import StopSwitch
from drivers.errors import DeviceSilentError, StoppedError
from drivers.pump import Pump, PumpStatus

METHOD = shipped_method("juice-acidity")
Walk = Callable[..., dict[str, Finding]]


def bench_with(**groups: dict[str, Any]) -> BenchSettings:
    """The simulated bench with some settings put in place (None takes one away)."""
    whole = shipped_bench().model_dump(exclude_none=True)
    for name, keys in groups.items():
        whole[name] = {key: value for key, value in {**whole[name], **keys}.items() if value is not None}
    return BenchSettings.model_validate(whole)


@pytest.fixture
def reach() -> Iterator[Callable[..., BenchCheck]]:
    with ExitStack() as held:

        def reached(
            bench: BenchSettings, locked: Callable[[str], None] = lambda identity: None, **opening: Any
        ) -> BenchCheck:
            stop = StopSwitch()
            opened = held.enter_context(
                reach_bench(
                    bench,
                    METHOD,
                    plan_sample(METHOD, SampleChoice()),
                    opening=Opening(route="memory", talk=io.StringIO(), **opening),
                    stop=stop,
                )
            )
            return BenchCheck(bench, opened, stop, locked)

        yield reached


def by_step(findings: Iterator[Finding]) -> dict[str, list[Finding]]:
    found: dict[str, list[Finding]] = {}
    for finding in findings:
        found.setdefault(finding.step, []).append(finding)
    return found


GRAMMARS = {
    "scpi": bench_with(),
    "dialect": bench_with(
        pump={"speaks": "dialect", "dialect": "orchard-lane-pump"},
        probe={"speaks": "dialect", "dialect": "orchard-lane-probe"},
    ),
    "modbus": bench_with(probe={"speaks": "modbus", "dialect": "orchard-lane-transmitter"}),
    "ph": bench_with(
        probe={
            "speaks": "dialect", "dialect": "orchard-lane-ph-meter", "signal": "ph", "ph_standard_uncertainty": 0.02,
            "calibration": None,
        }
    ),
}  # fmt: skip


@pytest.mark.parametrize("grammar", GRAMMARS)
def test_a_sound_bench_passes_every_step(reach: Callable[..., BenchCheck], grammar: str) -> None:
    check = reach(GRAMMARS[grammar])
    found = by_step(check.walk())
    assert {finding.verdict for findings in found.values() for finding in findings} == {"ok"}
    assert list(found) == [
        "pump: port", "pump: identity", "pump: grammar", "pump: account",
        "probe: port", "probe: identity", "probe: grammar", "probe: readings",
        "dry dose", "totals", "stop", "watchdog",
    ]  # fmt: skip
    assert len(found["totals"]) == 2
    # 5 mL/min: the stop comes after 1 s, the watchdog after 5 s of silence
    assert "after 0.083 of 0.3335 mL" in found["stop"][0].what
    assert "after 0.4165 of 0.666 mL" in found["watchdog"][0].what


def test_nothing_moves_without_the_tip_over_the_waste(reach: Callable[..., BenchCheck]) -> None:
    check = reach(bench_with(), answers={"tip-over-waste": "no"})
    found = by_step(check.walk())
    assert [found[step][0].verdict for step in ("dry dose", "totals", "stop", "watchdog")] == ["passed over"] * 4
    assert check.passed.pump is not None
    assert check.passed.pump.delivered_ml() == 0.0


def test_nothing_moves_where_the_waste_has_no_room(reach: Callable[..., BenchCheck]) -> None:
    check = reach(bench_with(vessel={"waste_ml": 0.5}))
    found = by_step(check.walk())
    assert found["dry dose"][0].verdict == "passed over"
    assert "vessel.waste_ml" in str(found["dry dose"][0].remedy)
    assert check.passed.pump is not None
    assert check.passed.pump.delivered_ml() == 0.0


def test_a_bench_file_that_does_not_fit_the_pump_fails_its_account(reach: Callable[..., BenchCheck]) -> None:
    check = reach(bench_with())
    other = bench_with(pump={"syringe_ml": 5.0})
    check._bench = other
    found = by_step(check.walk())
    assert found["pump: account"][0].verdict == "failed"
    assert "its syringe 10 mL; the bench file says 0.0005 and 5 mL" in found["pump: account"][0].what
    assert found["dry dose"][0].verdict == "passed over"


def test_a_device_in_use_fails_its_identity(reach: Callable[..., BenchCheck]) -> None:
    def locked(identity: str) -> None:
        raise HalfdropError("a run uses it", where=identity, remedy="Wait")

    found = by_step(reach(bench_with(), locked).walk())
    assert (found["pump: identity"][0].verdict, found["pump: identity"][0].what) == ("failed", "a run uses it")
    assert found["pump: grammar"][0].verdict == "passed over"
    assert found["probe: readings"][0].verdict == "passed over"


def test_ports_that_are_not_there_fail_and_the_rest_is_passed_over(reach: Callable[..., BenchCheck]) -> None:
    whole = bench_with(pump={"port": "/dev/no-such-pump"}, probe={"port": "/dev/no-such-probe"})
    found = by_step(reach(whole, answers={}).walk())
    assert found["pump: port"][0].verdict == found["probe: port"][0].verdict == "failed"
    assert "halfdrop bench ports" in str(found["pump: port"][0].remedy)
    others = [one for step, findings in found.items() if "port" not in step for one in findings]
    assert {one.verdict for one in others} == {"passed over"}


def test_a_temperature_outside_the_window_is_a_warning(reach: Callable[..., BenchCheck]) -> None:
    vessel = {"lowest_temperature_c": 30.0, "highest_temperature_c": 35.0}
    found = by_step(reach(bench_with(vessel=vessel)).walk(moving=False))
    assert [one.verdict for one in found["probe: readings"]] == ["ok", "warning"]
    assert "25.0 degrees C is outside 30 to 35" in found["probe: readings"][1].what
    assert "dry dose" not in found


def test_readings_that_stand_still_or_do_not_count_on_are_named(
    reach: Callable[..., BenchCheck], monkeypatch: pytest.MonkeyPatch
) -> None:
    check = reach(bench_with())
    list(check.probe())
    probe = check.passed.probe
    assert probe is not None
    first = probe.read()
    monkeypatch.setattr(probe, "read", lambda: first)
    (finding,) = check.readings()
    assert finding.verdict == "failed"
    assert "comes after" in finding.what


def test_a_pump_that_does_not_stop_is_not_confirmed(
    reach: Callable[..., BenchCheck], monkeypatch: pytest.MonkeyPatch
) -> None:
    check = reach(bench_with())
    list(check.pump())
    pump = check.passed.pump
    assert pump is not None
    monkeypatch.setattr(pump, "stop", lambda: False)
    monkeypatch.setattr(type(pump._talk), "stop", lambda talk: False)  # type: ignore[attr-defined]
    found = by_step(check.walk_motion())
    assert found["stop"][0].verdict == "failed"
    assert found["stop"][0].what == "NOT CONFIRMED STOPPED"


def test_a_watchdog_that_does_not_bark_fails(reach: Callable[..., BenchCheck], monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("simulators.devices.PumpDevice._watchdog_due_s", lambda device: float("inf"))
    found = by_step(reach(bench_with()).walk())
    assert found["watchdog"][0].verdict == "failed"
    assert "still moves" in found["watchdog"][0].what
    assert found["watchdog"][0].remedy == "Do not leave it alone"


# shutting down


def test_shutting_down_empties_the_syringe_into_the_waste(reach: Callable[..., BenchCheck]) -> None:
    bench = bench_with()
    check = reach(bench)
    list(check.pump())
    found = by_step(shut_down_steps(check.passed.pump, check.passed.status, check.operator, bench, empty=True))
    assert {one[0].verdict for one in found.values()} == {"ok"}
    assert check.passed.pump is not None
    assert check.passed.pump.status().contents_ml == 0.0


def test_a_pump_that_does_not_answer_is_not_confirmed_stopped(
    reach: Callable[..., BenchCheck], monkeypatch: pytest.MonkeyPatch
) -> None:
    check = reach(bench_with())
    found = by_step(shut_down_steps(None, None, check.operator, bench_with(), empty=False))
    assert found["stop"][0].what.startswith("NOT CONFIRMED STOPPED")
    list(check.pump())
    pump = check.passed.pump

    def silent() -> bool:
        raise DeviceSilentError("no answer", where="pump", remedy="Look")

    monkeypatch.setattr(pump, "stop", silent)
    found = by_step(shut_down_steps(pump, check.passed.status, check.operator, bench_with(), empty=False))
    assert (found["stop"][0].verdict, found["stop"][0].what) == ("failed", "NOT CONFIRMED STOPPED")


def test_a_person_who_stops_the_walk_is_not_taken_for_the_trial_of_the_stop(reach: Callable[..., BenchCheck]) -> None:
    check = reach(bench_with())
    steps = []

    def walked() -> None:
        for finding in check.walk():
            steps.append(finding.step)
            if finding.step == "dry dose":
                check.stop.pull("interrupt")

    with pytest.raises(StoppedError):
        walked()
    assert "stop" not in steps
    assert check.stop.event.is_set()
    assert check.passed.pump is not None
    assert not check.passed.pump.status().moving


def test_the_trial_of_the_stop_leaves_the_switch_as_it_was(reach: Callable[..., BenchCheck]) -> None:
    check = reach(bench_with())
    assert by_step(check.walk())["stop"][0].verdict == "ok"
    assert not check.stop.event.is_set()
    assert check.stop.request is None


def test_a_port_that_another_program_holds_as_well_is_a_warning(monkeypatch: pytest.MonkeyPatch) -> None:
    from controller.benchwork.bench_check import _shared

    monkeypatch.setattr("controller.benchwork.bench_check.owner_of", lambda path: (4711, "terminal"))
    (finding,) = _shared("probe", "/dev/ttyUSB0")
    assert (finding.verdict, finding.what) == ("warning", "terminal (process 4711) holds it open as well")
    for url in ("memory://probe", "socket://127.0.0.1:9", "/dev/pts/3"):
        assert list(_shared("probe", url)) == []


@pytest.mark.parametrize(("answer", "verdict"), [("filled", "ok"), ("stop", "passed over")])
def test_a_syringe_filled_by_hand_is_asked_for_not_assumed(
    reach: Callable[..., BenchCheck], answer: str, verdict: str
) -> None:
    check = reach(bench_with(), answers={"refill-by-hand": answer})
    list(check.pump())
    pump, status = check.passed.pump, check.passed.status
    assert pump is not None
    assert status is not None
    empty = Empty(pump, status)
    check.passed.pump, check.passed.status = cast("Pump", empty), replace(status, contents_ml=0.0)
    found = {finding.step: finding for finding in check.walk_motion()}
    assert found["dry dose"].verdict == verdict
    assert empty.filled == (answer == "filled")


class Empty:
    """A pump that cannot fill itself."""

    refill = "by-hand"

    def __init__(self, pump: Pump, full: PumpStatus) -> None:
        self._pump, self._full, self.filled = pump, full, 0

    def __getattr__(self, name: str) -> Any:
        return getattr(self._pump, name)

    def fill(self) -> PumpStatus:
        self.filled += 1
        return self._full
