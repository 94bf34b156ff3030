"""The runner with a small core and devices of plain Python: order of calls, trouble, stops, results."""

from __future__ import annotations

import errno
import json
import math
from collections.abc import Callable
from typing import Any

import pytest

from configs.errors import HalfdropError
from controller.journal import DiskFullError
from controller.planning.plancheck import StartRefusedError
from controller.records.verification import verify_bytes
from controller.runner import run
from controller.running.outcome import NOT_CONFIRMED, RunFailedError, RunResult
from controller.titration.actions import (
    Action,
    Answered,
    Ask,
    Back,
    Command,
    Dose,
    Dosed,
    Failed,
    Finish,
    Observation,
    Prime,
    Primed,
    Read,
    Reading,
    Refill,
    Refilled,
    Refused,
    Report,
    Resumed,
    Wait,
    Waited,
)
from controller.titration.plan import RunPlan
from drivers.errors import DeviceSilentError, StoppedError

GOGGLES = Ask(key="goggles", text="Goggles on?", choices=("yes", "no"))
DONE = Finish(
    result={
        "outcome": "completed",
        "reason": None,
        "end_points": [{"volume_ml": 5.0, "standard_uncertainty_ml": 0.001, "estimator": "model"}],
        "warnings": [],
    }
)


def dose(number: int, volume_ml: float = 0.1) -> Dose:
    return Dose(number=number, volume_ml=volume_ml, reason=f"dose {number}")


class Script:
    """A core that asks for a list of actions and keeps what it was told; a stop ends it."""

    def __init__(self, *actions: Action, at: Callable[[Action], None] = lambda action: None) -> None:
        self._actions, self._at = actions, at
        self.told: list[Observation | None] = []

    def __call__(self) -> Any:
        for action in self._actions:
            self._at(action)
            told = yield action
            self.told.append(told)
            if isinstance(told, Command) and told.name == "stop":
                yield Finish(result={"outcome": "stopped", "reason": "stopped by the operator", "warnings": []})
                return None
        return None

    def kinds(self) -> list[str | None]:
        return [None if told is None else told.kind for told in self.told]


def go(bench: Any, plan: RunPlan, script: Any, **more: Any) -> RunResult:
    return run(plan, script(), bench.devices, bench.journal, clock=bench.clock, stop=bench.stop, **more)


def entries(bench: Any) -> list[dict[str, Any]]:
    return [json.loads(line) for line in bench.sink.lines]


def closing(bench: Any) -> dict[str, Any]:
    found = entries(bench)[-1]["closing"]
    assert verify_bytes(bench.sink.data).state == "intact"
    return found


def test_a_whole_run_is_carried_out_and_recorded(fake_bench: Any, plan: RunPlan) -> None:
    script = Script(
        GOGGLES, Report(what="note", text="begins"), Read(), dose(1), Wait(seconds=2.0), Read(), Refill(), dose(2), DONE
    )
    ended = go(fake_bench, plan, script, operator_name="Ada", hashes={"bench.yaml": "00"})
    assert script.kinds() == ["answered", None, "reading", "dosed", "waited", "reading", "refilled", "dosed"]
    assert (ended.outcome, ended.exit_status, ended.steps) == ("completed", 0, 400)
    assert ended.result["doses"] == 2
    assert ended.result["titrant_ml"] == pytest.approx(0.2)
    assert ended.result["run"] == "runs/fake.jsonl"
    assert ended.result["seed"] == 7
    assert ended.result["warnings"] == []
    header = entries(fake_bench)[0]["header"]
    assert header["plan"]["sample"]["sample_id"] == "press-3"
    assert header["devices"]["pump"]["serial"] == "0001"
    assert header["operator"] == "Ada"
    assert header["hashes"] == {"bench.yaml": "00"}
    assert {"program", "python", "numpy"} <= set(header["versions"])
    assert {**closing(fake_bench)["result"], "run": "runs/fake.jsonl"} == ended.result
    assert closing(fake_bench)["steps"] == fake_bench.pump.steps


def test_times_told_are_run_times(fake_bench: Any, plan: RunPlan) -> None:
    script = Script(GOGGLES, Read(), dose(1), DONE)
    go(fake_bench, plan, script)
    reading, dosed = script.told[1], script.told[2]
    assert isinstance(reading, Reading)
    assert isinstance(dosed, Dosed)
    assert reading.at_s == 0.0  # the clock itself began at 100 s
    assert (dosed.started_at_s, dosed.at_s) == (0.0, pytest.approx(1.2))


def test_every_line_is_written_before_the_core_sees_it(fake_bench: Any, plan: RunPlan) -> None:
    seen: list[tuple[str, int]] = []
    script = Script(
        GOGGLES, Read(), dose(1), DONE, at=lambda action: seen.append((action.kind, len(fake_bench.sink.lines)))
    )
    go(fake_bench, plan, script)
    # header; then two lines for each action answered before
    assert seen == [("ask", 1), ("read", 3), ("dose", 5), ("finish", 7)]


def test_nothing_leaves_before_its_line_is_on_the_medium(fake_bench: Any, plan: RunPlan) -> None:
    script = Script(GOGGLES, Read(), dose(1), Refill(), Wait(seconds=1.0), dose(2), DONE)
    results: list[int] = []
    go(fake_bench, plan, script, amount_of=lambda plan, result: results.append(len(fake_bench.log)))
    written = synced = 0
    checked = []
    for call in fake_bench.log:
        word, _, rest = call.partition(" ")
        if word == "line":
            written = int(rest)
        elif word == "sync":
            synced = int(rest)
        elif call.startswith(("pump dose", "pump fill", "pump prime", "ask")):
            assert synced == written, call
            checked.append(call)
    assert checked == ["ask goggles", "pump dose 1", "pump fill", "pump dose 2", "ask rinse-and-store"]
    assert fake_bench.log[-1] == f"sync {len(fake_bench.sink.lines)}"


def test_lines_are_synced_before_a_long_silence(fake_bench: Any, plan: RunPlan) -> None:
    script = Script(Read(), Wait(seconds=60.0), DONE)
    go(fake_bench, plan, script, ask_afterwards=False)
    line_of_wait = next(i for i, e in enumerate(entries(fake_bench), 1) if e.get("action") == "wait")
    assert f"sync {line_of_wait}" in fake_bench.log


def test_guard_refuses_and_the_core_is_told(fake_bench: Any, plan: RunPlan) -> None:
    script = Script(GOGGLES, dose(1, 1.5), Finish(result={"outcome": "stopped", "reason": "refused"}))
    ended = go(fake_bench, plan, script)
    assert isinstance(script.told[1], Refused)
    assert "allows up to 1 mL" in script.told[1].what
    assert "pump dose 1" not in fake_bench.log
    assert (ended.outcome, ended.exit_status) == ("stopped", 3)


def test_no_dose_before_the_safety_question_is_answered_rightly(fake_bench: Any, plan: RunPlan) -> None:
    fake_bench.operator.answers["goggles"] = "no"
    script = Script(dose(1), GOGGLES, dose(1), DONE)
    go(fake_bench, plan, script)
    assert script.kinds() == ["refused", "answered", "refused"]
    assert fake_bench.pump.steps == 0


def test_a_dose_number_is_never_used_again(fake_bench: Any, plan: RunPlan) -> None:
    script = Script(GOGGLES, dose(1), dose(1), DONE)
    go(fake_bench, plan, script)
    assert script.kinds() == ["answered", "dosed", "refused"]


def test_priming_needs_the_tip_over_the_waste_and_counts(fake_bench: Any, plan: RunPlan) -> None:
    tip = Ask(key="tip-over-waste", text="Tip over waste?", choices=("yes", "no"))
    script = Script(Prime(volume_ml=1.0), tip, Prime(volume_ml=1.0), DONE)
    ended = go(fake_bench, plan, script)
    assert script.kinds() == ["refused", "answered", "primed"]
    assert isinstance(script.told[2], Primed)
    assert ended.steps == 2000
    assert ended.result["titrant_ml"] == 0.0


def silent(*_: object) -> Any:
    raise DeviceSilentError("no reply within 1 s", where="probe", remedy="Look at it")


def test_a_silent_probe_is_told_and_its_return_too(fake_bench: Any, plan: RunPlan) -> None:
    fake_bench.probe.trouble = silent

    def mend(action: Action) -> None:
        if isinstance(action, Wait):
            fake_bench.probe.trouble = None

    script = Script(Read(), Wait(seconds=5.0), Read(), DONE, at=mend)
    ended = go(fake_bench, plan, script)
    assert isinstance(script.told[0], Failed)
    assert script.told[0].device == "probe"
    assert "no reply" in script.told[0].what
    assert isinstance(script.told[1], Back)
    assert isinstance(script.told[2], Reading)
    assert ended.exit_status == 0


def test_a_reading_that_is_no_number_is_a_failure(fake_bench: Any, plan: RunPlan) -> None:
    fake_bench.probe.potential_mv = math.nan
    script = Script(Read(), DONE)
    go(fake_bench, plan, script)
    assert isinstance(script.told[0], Failed)


@pytest.mark.parametrize(
    ("happened", "told", "steps"),
    [
        pytest.param(
            ("done", 200, 1, 1), Dosed(at_s=0.0, number=1, volume_ml=0.1, steps=200), 200, id="it was delivered"
        ),
        pytest.param(
            ("stopped", 50, 1, 1),
            Failed(device="pump", what="", number=1, lowest_ml=0.025, highest_ml=0.025, steps=50),
            50,
            id="it halted within",
        ),
        pytest.param(
            ("armed", 0, 1, 1),
            Failed(device="pump", what="", number=1, lowest_ml=0.0, highest_ml=0.0, steps=0),
            0,
            id="it was never started",
        ),
        pytest.param(
            ("done", 200, 0, 1),
            Failed(device="pump", what="", number=1, lowest_ml=0.0, highest_ml=0.0, steps=0),
            0,
            id="it was never armed",
        ),
        pytest.param(
            ("done", 200, 1, 2),
            Failed(device="pump", what="", number=1, lowest_ml=0.0, highest_ml=0.1),
            0,
            id="the pump was switched off and on",
        ),
    ],
)
def test_a_dose_in_doubt_is_settled_by_what_the_pump_says(
    fake_bench: Any, plan: RunPlan, happened: tuple[str, int, int, int], told: Any, steps: int
) -> None:
    state, moved, number, start_count = happened

    def trouble(pump: Any, _number: int, _steps: int) -> int:
        pump.moved(number, moved if number else 0, state)
        pump.last = (number, moved, state)
        pump.start_count = start_count
        raise DeviceSilentError("no reply within 1 s", where="pump", remedy="Look at it")

    fake_bench.pump.trouble = trouble
    script = Script(GOGGLES, dose(1), DONE)
    ended = go(fake_bench, plan, script)
    got = script.told[1]
    assert type(got) is type(told)
    for name in ("number", "volume_ml", "lowest_ml", "highest_ml", "steps"):
        assert getattr(got, name, None) == getattr(told, name, None)
    assert ended.steps == steps
    # where bounds are apart the pump may be moving: it is halted
    assert ("pump stop" in fake_bench.log) == (start_count == 2)


def test_bounds_that_the_driver_found_are_taken_over(fake_bench: Any, plan: RunPlan) -> None:
    def trouble(*_: object) -> int:
        fake_bench.pump.last_dose = gone
        raise DeviceSilentError("gone", where="pump", remedy="Look", lowest_ml=0.02, highest_ml=0.08)

    def gone() -> None:
        raise DeviceSilentError("gone", where="pump", remedy="Look")

    fake_bench.pump.trouble = trouble
    script = Script(GOGGLES, dose(1), DONE)
    ended = go(fake_bench, plan, script)
    assert isinstance(script.told[1], Failed)
    assert (script.told[1].lowest_ml, script.told[1].highest_ml) == (0.02, 0.08)
    assert ended.result["titrant_ml"] == pytest.approx(0.05)
    assert any("not known exactly" in warning for warning in ended.result["warnings"])


def test_a_stop_in_the_middle_of_a_dose_keeps_what_was_delivered(fake_bench: Any, plan: RunPlan) -> None:
    fake_bench.clock.call_at(100.6, lambda: fake_bench.stop.pull("interrupt"))
    script = Script(GOGGLES, dose(1), Read(), dose(2), DONE)
    ended = go(fake_bench, plan, script)
    dosed = script.told[1]
    assert isinstance(dosed, Dosed)
    assert dosed.steps == 100  # half of the dose
    assert script.kinds() == ["answered", "dosed", "command"]
    assert (ended.outcome, ended.exit_status, ended.stop_confirmed) == ("stopped", 130, True)
    assert ended.reason == "interrupted at the keyboard"
    assert ended.steps == fake_bench.pump.steps == 100
    assert "ask rinse-and-store" not in fake_bench.log
    assert closing(fake_bench)["stop_confirmed"] is True


def test_a_stop_while_waiting_halts_the_pump_and_ends_the_run(fake_bench: Any, plan: RunPlan) -> None:
    fake_bench.clock.call_at(103.0, lambda: fake_bench.stop.pull("terminate"))
    script = Script(Wait(seconds=10.0), Read(), DONE)
    ended = go(fake_bench, plan, script)
    assert isinstance(script.told[0], Waited)
    assert script.told[0].at_s == pytest.approx(3.0)
    assert fake_bench.log.count("pump stop") == 1
    assert ended.exit_status == 143


def test_a_pump_that_does_not_confirm_is_said_to(fake_bench: Any, plan: RunPlan) -> None:
    fake_bench.pump.stops = False
    fake_bench.clock.call_at(103.0, lambda: fake_bench.stop.pull("interrupt"))
    ended = go(fake_bench, plan, Script(Wait(seconds=10.0), Read(), DONE))
    assert ended.exit_status == 3
    assert ended.stop_confirmed is False
    assert NOT_CONFIRMED in ended.result["warnings"]
    assert NOT_CONFIRMED in closing(fake_bench)["reason"]


def test_a_core_that_ignores_the_stop_is_cut_off(fake_bench: Any, plan: RunPlan) -> None:
    def deaf() -> Any:
        while True:
            yield Read()

    fake_bench.stop.pull("operator", "stopped from the screen")
    ended = go(fake_bench, plan, deaf)
    assert (ended.outcome, ended.reason) == ("stopped", "stopped from the screen")
    assert fake_bench.probe.count == 0
    assert closing(fake_bench)["outcome"] == "stopped"


def test_a_core_that_is_always_refused_is_cut_off(fake_bench: Any, plan: RunPlan) -> None:
    def stubborn() -> Any:
        while True:
            yield dose(1, 5.0)

    ended = go(fake_bench, plan, stubborn)
    assert (ended.outcome, ended.exit_status) == ("stopped", 3)
    assert ended.stop_confirmed is True


def test_a_temperature_outside_the_window_stops_the_run(fake_bench: Any, plan: RunPlan) -> None:
    fake_bench.probe.temperature_c = 41.0
    script = Script(GOGGLES, Read(), Read(), Read(), dose(1), DONE)
    ended = go(fake_bench, plan, script)
    assert script.kinds() == ["answered", "reading", "reading", "reading", "command"]
    assert ended.exit_status == 3
    assert ended.reason is not None
    assert "temperature 41 °C is outside 10 to 40 °C" in ended.reason
    assert "pump dose 1" not in fake_bench.log
    assert [e for e in entries(fake_bench) if e.get("event") == "guard"]


def test_the_longest_run_time_stops_the_run(fake_bench: Any, make_plan: Any) -> None:
    plan = make_plan(vessel={"longest_run_s": 3600.0})
    script = Script(Wait(seconds=3000.0), Wait(seconds=3000.0), Wait(seconds=599.0), Wait(seconds=2.0), DONE)
    go(fake_bench, plan, script)
    assert script.kinds() == ["waited", "refused", "waited", "refused"]


def test_readings_too_pass_no_time_limit(fake_bench: Any, make_plan: Any) -> None:
    fake_bench.probe.trouble = lambda: fake_bench.clock.wait(5000.0)
    script = Script(Read(), Read(), Read(), DONE)
    ended = go(fake_bench, make_plan(), script)
    assert script.kinds() == ["reading", "reading", "command"]
    assert ended.exit_status == 3
    assert "longest run time is 7200 s" in str(ended.reason)


def test_a_pump_that_delivers_more_than_asked_is_found_out(fake_bench: Any, plan: RunPlan) -> None:
    fake_bench.pump.trouble = lambda pump, number, steps: 70_000  # 35 mL on 50 mL; the limit is 80 mL
    script = Script(GOGGLES, dose(1), Read(), DONE)
    ended = go(fake_bench, plan, script)
    assert script.kinds() == ["answered", "dosed", "command"]
    assert ended.exit_status == 3
    assert "85 mL are in the vessel" in str(ended.reason)


def test_a_full_disk_stops_the_pump_first_and_still_closes(fake_bench: Any, plan: RunPlan) -> None:
    def full(action: Action) -> None:
        if action == dose(2):
            fake_bench.sink.error = OSError(errno.ENOSPC, "No space left on device")

    with pytest.raises(DiskFullError, match="disk is full"):
        go(fake_bench, plan, Script(GOGGLES, dose(1), dose(2), DONE, at=full))
    assert "pump dose 2" not in fake_bench.log
    assert fake_bench.log.index("pump stop") < fake_bench.log.index("reserve")
    ended = closing(fake_bench)
    assert ended["outcome"] == "failed"
    assert ended["stop_confirmed"] is True
    # the line that did not fit at first was not lost
    assert entries(fake_bench)[-2]["number"] == 2


@pytest.mark.parametrize("where", ["core", "progress", "clock"])
def test_any_exception_stops_the_pump_closes_the_record_and_is_told(
    fake_bench: Any, plan: RunPlan, where: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    def core() -> Any:
        yield GOGGLES
        yield dose(1)
        if where == "core":
            raise ZeroDivisionError("slope of nothing")
        yield Wait(seconds=1.0)

    def progress(told: Any) -> None:
        if where == "progress" and isinstance(told.item, Dosed):
            raise ZeroDivisionError("slope of nothing")

    if where == "clock":
        monkeypatch.setattr(fake_bench.probe, "read", silent)
        monkeypatch.setattr("controller.running.execution.Execution._wait", lambda *_: 1 / 0)
    with pytest.raises(RunFailedError, match="ZeroDivisionError"):
        go(fake_bench, plan, core, on_progress=progress)
    assert fake_bench.log.count("pump stop") == 1
    assert closing(fake_bench)["outcome"] == "failed"
    assert "ZeroDivisionError" in closing(fake_bench)["reason"]
    assert any("test_runner.py" in place for place in closing(fake_bench)["came_from"])


def test_an_error_with_a_pump_that_does_not_stop_says_so(fake_bench: Any, plan: RunPlan) -> None:
    def core() -> Any:
        yield GOGGLES
        raise HalfdropError("no such thing", where="core", remedy="Nothing")

    fake_bench.pump.stops = False
    with pytest.raises(RunFailedError, match="NOT CONFIRMED STOPPED"):
        go(fake_bench, plan, core)
    assert closing(fake_bench)["stop_confirmed"] is False


def test_a_missing_answer_refuses_the_run(fake_bench: Any, plan: RunPlan) -> None:
    def missing(key: str) -> None:
        raise HalfdropError("goggles: no answer", where="answers", remedy="Add it")

    fake_bench.operator.trouble = missing
    with pytest.raises(HalfdropError, match="goggles: no answer"):
        go(fake_bench, plan, Script(GOGGLES, dose(1), DONE))
    assert fake_bench.pump.steps == 0
    assert closing(fake_bench)["outcome"] == "failed"


def test_an_interrupt_at_a_question_stops_the_run(fake_bench: Any, plan: RunPlan) -> None:
    def interrupt(key: str) -> None:
        raise KeyboardInterrupt

    fake_bench.operator.trouble = interrupt
    script = Script(GOGGLES, dose(1), DONE)
    ended = go(fake_bench, plan, script)
    assert script.kinds() == ["command"]
    assert ended.exit_status == 130


def test_a_bare_interrupt_stops_the_pump_and_passes_through(fake_bench: Any, plan: RunPlan) -> None:
    def core() -> Any:
        yield GOGGLES
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        go(fake_bench, plan, core)
    assert "pump stop" in fake_bench.log
    assert closing(fake_bench)["outcome"] == "stopped"


def test_a_stop_that_a_driver_raises_outside_a_dose_ends_the_run(fake_bench: Any, plan: RunPlan) -> None:
    def stopped() -> None:
        fake_bench.stop.pull("interrupt")
        raise StoppedError("stopped", where="probe", remedy="Nothing")

    fake_bench.probe.trouble = stopped
    script = Script(Read(), DONE)
    ended = go(fake_bench, plan, script)
    assert script.kinds() == ["command"]
    assert ended.stop_confirmed is True


def test_a_gap_is_given_to_the_core_in_place_of_the_answer(fake_bench: Any, plan: RunPlan) -> None:
    fake_bench.clock.call_at(100.0 + 1.0, lambda: fake_bench.clock.shift_utc(30.0))
    script = Script(Wait(seconds=2.0), Read(), Read(), DONE)
    go(fake_bench, plan, script)
    gap = script.told[1]
    assert isinstance(gap, Resumed)
    assert gap.gap_s == pytest.approx(30.0)
    assert script.kinds() == ["waited", "resumed", "reading"]


@pytest.mark.parametrize("seconds", [1.5, -1.5, -30.0])
def test_a_clock_set_back_or_a_little_is_no_gap(fake_bench: Any, plan: RunPlan, seconds: float) -> None:
    fake_bench.clock.call_at(100.0 + 1.0, lambda: fake_bench.clock.shift_utc(seconds))
    script = Script(Wait(seconds=2.0), Read(), DONE)
    go(fake_bench, plan, script)
    assert script.kinds() == ["waited", "reading"]
    assert bool([e for e in entries(fake_bench) if e.get("event") == "clock-step"]) == (seconds == -30.0)


class Queue:
    """Commands that come at certain times."""

    def __init__(self, bench: Any, *due: tuple[float, Command]) -> None:
        self._bench, self._due = bench, list(due)

    def waiting(self) -> bool:
        return bool(self._due) and self._due[0][0] <= self._bench.clock.now_s()

    def take(self) -> Command | None:
        return self._due.pop(0)[1] if self.waiting() else None


def test_a_command_cuts_the_wait_and_stands_in_place_of_the_next_answer(fake_bench: Any, plan: RunPlan) -> None:
    queue = Queue(fake_bench, (101.2, Command(name="pause")))
    script = Script(Wait(seconds=10.0), Read(), Read(), DONE)
    go(fake_bench, plan, script, commands=queue)
    waited = script.told[0]
    assert isinstance(waited, Waited)
    assert 1.2 <= waited.at_s <= 1.8
    assert script.kinds() == ["waited", "command", "reading"]


def test_a_plan_beyond_the_bench_is_refused_before_anything_happens(fake_bench: Any, make_plan: Any) -> None:
    with pytest.raises(StartRefusedError, match="titrant limit of 40 mL"):
        go(fake_bench, make_plan(limits={"titrant_ml": 40.0}), Script(DONE))
    assert fake_bench.log == []
    assert fake_bench.sink.closed


@pytest.mark.parametrize(
    ("change", "text"),
    [
        ({"pump": {"identity": "Another Burette 9"}}, "the plan was made for 'Another Burette 9'"),
        ({"probe": {"identity": "Another Meter 9"}}, "the plan was made for 'Another Meter 9'"),
        ({"pump": {"start_count": 2}}, "switched on again or used"),
        ({"pump": {"last_dose_number": 4}}, "switched on again or used"),
    ],
)
def test_a_plan_for_other_devices_is_refused(fake_bench: Any, make_plan: Any, change: Any, text: str) -> None:
    with pytest.raises(HalfdropError, match=text):
        go(fake_bench, make_plan(**change), Script(DONE))
    assert fake_bench.sink.lines == []


def test_the_pumps_own_account_is_compared(fake_bench: Any, plan: RunPlan) -> None:
    def slips(pump: Any, number: int, steps: int) -> int:
        pump.waste_steps += 40
        return steps

    fake_bench.pump.trouble = slips
    ended = go(fake_bench, plan, Script(GOGGLES, dose(1), DONE))
    assert any("by its own account" in warning for warning in ended.result["warnings"])


def test_rinsing_is_asked_after_the_finish_and_recorded(fake_bench: Any, plan: RunPlan) -> None:
    fake_bench.operator.trouble = lambda key: fake_bench.clock.wait(90.0) if key == "rinse-and-store" else None
    go(fake_bench, plan, Script(GOGGLES, DONE))
    kinds = [e.get("action") or e.get("observation") or e.get("event") or "-" for e in entries(fake_bench)]
    assert kinds[-5:] == ["finish", "account", "ask", "answered", "-"]
    assert closing(fake_bench)["probe_stored"] == "yes"
    assert closing(fake_bench)["probe_stood_s"] == pytest.approx(90.0)


def test_a_missing_answer_afterwards_costs_nothing(fake_bench: Any, plan: RunPlan) -> None:
    def missing(key: str) -> None:
        if key == "rinse-and-store":
            raise HalfdropError("no answer", where="answers", remedy="Add it")

    fake_bench.operator.trouble = missing
    assert go(fake_bench, plan, Script(GOGGLES, DONE)).exit_status == 0
    assert closing(fake_bench)["probe_stored"] == "not answered"


def test_a_completed_run_without_end_point_is_not_to_be_trusted(fake_bench: Any, plan: RunPlan) -> None:
    done = Finish(result={"outcome": "completed", "reason": None, "end_points": []})
    assert go(fake_bench, plan, Script(done)).exit_status == 1


def test_the_amount_is_added_and_its_failure_is_a_warning(fake_bench: Any, plan: RunPlan) -> None:
    amount = {"value": 6.7, "unit": "g/L"}
    ended = go(fake_bench, plan, Script(DONE), amount_of=lambda plan, result: amount)
    assert ended.result["result"] == amount


def test_the_amount_that_fails_is_a_warning(fake_bench: Any, plan: RunPlan) -> None:
    ended = go(fake_bench, plan, Script(DONE), amount_of=lambda plan, result: {"value": 1 / 0})
    assert ended.result["result"] is None
    assert any("amount could not be computed" in warning for warning in ended.result["warnings"])
    assert ended.exit_status == 1  # a run whose amount is missing is not to be trusted


def test_progress_hears_every_entry(fake_bench: Any, plan: RunPlan) -> None:
    heard: list[Any] = []
    script = Script(
        GOGGLES,
        dose(1, 0.5),
        Report(what="point", volume_ml=0.5),
        Wait(seconds=9.0),
        dose(2, 0.5),
        Report(what="point", volume_ml=1.0),
        DONE,
    )
    go(fake_bench, plan, script, on_progress=heard.append)
    assert [told.item.kind for told in heard] == [
        "ask", "answered", "dose", "dosed", "report", "wait", "waited", "dose", "dosed", "report", "finish",
    ]  # fmt: skip
    assert heard[0].time_left_s is None
    assert 60.0 < heard[-1].time_left_s < 600.0
    assert (heard[-1].doses, heard[-1].delivered_ml) == (2, pytest.approx(1.0))


def test_results_that_json_cannot_hold_do_not_break_the_record(fake_bench: Any, plan: RunPlan) -> None:
    done = Finish(result={**DONE.result, "estimators": {"gran": [math.nan, 5.0]}})
    go(fake_bench, plan, Script(done))
    assert closing(fake_bench)["result"]["estimators"] == {"gran": [None, 5.0]}


def test_refilled_and_answered_carry_what_was_said(fake_bench: Any, plan: RunPlan) -> None:
    script = Script(GOGGLES, Refill(), DONE)
    go(fake_bench, plan, script)
    answered, refilled = script.told
    assert answered == Answered(key="goggles", answer="yes", at_s=0.0)
    assert refilled == Refilled(at_s=0.0, contents_ml=10.0, reservoir_ml=100.0)
