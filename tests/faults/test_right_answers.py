"""Every fault and its stated right answer (the table in DEVELOPERS.md): recover and note, or stop safely."""

from __future__ import annotations

import json
from collections.abc import Callable
from typing import Any

import pytest

from configs.faultfile import FAULT_NAMES

Faulty = Callable[..., Any]
#: faults that a run gets over: it ends with a result that is true
RECOVERED = [
    pytest.param({"what": "silence", "device": "pump", "at_dose": 4, "for_s": 20}, id="silence of the pump"),
    pytest.param({"what": "silence", "device": "probe", "at_dose": 4, "for_s": 20}, id="silence of the probe"),
    pytest.param({"what": "lost-reply", "device": "pump", "chance": 0.1}, id="lost-reply"),
    pytest.param({"what": "lost-message", "device": "pump", "at_dose": 2, "times": 2}, id="lost-message"),
    pytest.param({"what": "garbled-reply", "device": "pump", "chance": 0.05}, id="garbled-reply"),
    pytest.param({"what": "garbled-message", "device": "pump", "chance": 0.05}, id="garbled-message"),
    pytest.param({"what": "late-reply", "device": "pump", "chance": 0.05, "by_s": 0.8}, id="late-reply"),
    pytest.param({"what": "earlier-reply", "device": "probe", "chance": 0.1}, id="earlier-reply"),
    pytest.param({"what": "unplugged", "device": "pump", "at_dose": 5, "for_s": 8}, id="unplugged"),
    pytest.param({"what": "open-circuit", "at_dose": 6, "for_s": 8}, id="open-circuit"),
    pytest.param({"what": "bubble-at-probe", "at_dose": 3, "by_mv": 40, "for_s": 6}, id="bubble-at-probe"),
    pytest.param({"what": "stalled-plunger", "at_dose": 5, "for_s": 6}, id="stalled-plunger"),
    pytest.param({"what": "slow-probe", "at_s": 0.5, "factor": 2.0}, id="slow-probe"),
    pytest.param({"what": "clock-jump", "at_s": 60, "by_s": 3600}, id="clock-jump"),
    pytest.param({"what": "computer-asleep", "at_dose": 7, "for_s": 600}, id="computer-asleep"),
    pytest.param({"what": "temperature-step", "at_dose": 5, "by_c": 6}, id="temperature-step"),
    pytest.param({"what": "drift", "at_s": 5, "by_mv_min": 1.0}, id="drift"),
]
#: faults that end a run without a number, and words of the reason
STOPPED = [
    pytest.param({"what": "pump-restart", "at_dose": 6}, "started anew", id="pump-restart"),
    pytest.param({"what": "stuck-reading", "at_dose": 6}, "sticks", id="stuck-reading"),
    pytest.param({"what": "open-circuit", "at_dose": 6}, "open circuit", id="open-circuit for good"),
    pytest.param({"what": "stalled-plunger", "at_dose": 6}, "does not move", id="stalled-plunger for good"),
    pytest.param({"what": "unplugged", "device": "probe", "at_dose": 6}, "probe", id="unplugged for good"),
    pytest.param({"what": "cracked-probe", "at_dose": 4}, "", id="cracked-probe"),
    pytest.param({"what": "stirrer-stopped", "at_dose": 3}, "", id="stirrer-stopped"),
    pytest.param({"what": "leaking-valve", "at_dose": 2, "rate_ml_min": 0.8}, "no number is given", id="leaking-valve"),
    pytest.param({"what": "disk-full", "at_dose": 5}, "disk is full", id="disk-full"),
    pytest.param({"what": "read-only-disk", "at_dose": 5}, "cannot be written", id="read-only-disk"),
]


@pytest.mark.parametrize("fault", RECOVERED)
def test_a_run_gets_over_it_and_says_so(campaign: Any, faulty: Faulty, fault: dict[str, Any]) -> None:
    bench = faulty(fault)
    ended = campaign.carry_out(bench, faults=(fault["what"],))
    assert ended.wrong == ()
    assert (ended.outcome, ended.end_points) == ("completed", 1), ended.reason
    assert ended.off_u < 4.0
    assert fault.get("chance") is not None or fault["what"] in ended.happened


@pytest.mark.parametrize(("fault", "words"), STOPPED)
def test_a_run_ends_safely_without_a_number(campaign: Any, faulty: Faulty, fault: dict[str, Any], words: str) -> None:
    ended = campaign.carry_out(faulty(fault), faults=(fault["what"],))
    assert ended.wrong == ()
    assert (ended.outcome in ("stopped", "failed"), ended.end_points) == (True, 0)
    assert words in ended.reason


def test_air_in_the_syringe_widens_the_uncertainty(campaign: Any, faulty: Faulty) -> None:
    ended = campaign.carry_out(faulty({"what": "air-in-syringe", "at_dose": 9, "volume_ml": 0.25}))
    assert ended.wrong == ()
    assert any("mL do not fit" in warning and "air" in warning for warning in ended.warnings) or not ended.end_points


def test_an_empty_reservoir_ends_the_run(campaign: Any, faulty: Faulty) -> None:
    ended = campaign.carry_out(faulty({"what": "empty-reservoir", "at_s": 1}, contents_ml=2.0))
    assert ended.wrong == ()
    assert (ended.outcome, ended.end_points) == ("stopped", 0)


def test_a_killed_process_leaves_a_record_that_is_cut_and_a_pump_that_stands(campaign: Any, faulty: Faulty) -> None:
    bench = faulty({"what": "process-killed", "at_dose": 5})
    ended = campaign.carry_out(bench)
    assert (ended.outcome, ended.wrong) == ("killed", ())
    assert campaign.verify_bytes(bench.disk.data).state == "cut"


def test_a_dose_in_doubt_is_noted_and_delivered_once(campaign: Any, faulty: Faulty) -> None:
    bench = faulty({"what": "silence", "device": "pump", "at_dose": 4, "for_s": 20})
    campaign.carry_out(bench)
    lines = [json.loads(line) for line in bench.disk.data.splitlines()]
    doubts = [line for line in lines if line.get("event") == "dose-in-doubt"]
    assert [doubt["number"] for doubt in doubts] == [4]
    answers = [e for e in lines if e.get("number") == 4 and e.get("observation") in ("dosed", "failed")]
    assert len(answers) == 1
    assert answers[0]["observation"] == "dosed"  # it ended while nobody heard; the pump said so when it spoke again


def test_every_fault_of_the_language_has_its_test() -> None:
    tested = {param.values[0]["what"] for param in [*RECOVERED, *STOPPED]}
    assert set(FAULT_NAMES) - tested == {"air-in-syringe", "empty-reservoir", "process-killed"}


def test_no_fault_no_change(campaign: Any, faulty: Faulty) -> None:
    """The parts of a script that wait for their moment change nothing before it."""
    quiet, waiting = faulty(), faulty({"what": "drift", "at_s": 1e6, "by_mv_min": 5})
    assert campaign.carry_out(quiet).off_u == campaign.carry_out(waiting).off_u
    assert quiet.disk.data == waiting.disk.data
