"""Commands during a calibration: a pause holds every step, a halted delivery is finished, a stop ends it."""

from __future__ import annotations

from collections.abc import Callable
from datetime import date
from typing import Any

import pytest

from configs.settings import shipped_bench
from controller.calibration.burette_session import check_burette
from controller.calibration.obeying import obeying
from controller.calibration.planning_burette import WeighingConditions, plan_burette
from controller.calibration.plans import Stability
from controller.calibration.stability import Stable, read_until_stable
from controller.planning.runplan import PumpAccount
from controller.titration.actions import (
    Action,
    Answered,
    Ask,
    Command,
    Decisions,
    Dose,
    Dosed,
    Observation,
    Read,
    Reading,
    Refill,
    Refilled,
    Report,
    Resumed,
    Wait,
    Waited,
)

ASK = Ask(key="ready", text="Ready?", choices=("ready", "stop"))


def _core() -> Decisions:
    answer = yield ASK
    return {"answer": answer}


def _talk(core: Decisions, answers: list[Observation | None]) -> tuple[list[Action], dict[str, Any]]:
    """Give these answers one after another; return what was asked for, and the result."""
    asked: list[Action] = [next(core)]
    try:
        for answer in answers:
            action = core.send(answer)
            asked.append(action)
    except StopIteration as end:
        return asked, end.value
    raise AssertionError(f"it goes on with {asked[-1]}")


def test_a_pause_waits_until_one_goes_on_and_then_asks_again() -> None:
    answered = Answered(key="ready", answer="ready")
    asked, result = _talk(
        obeying(_core()),
        [Command(name="pause"), None, Waited(at_s=1.0), Waited(at_s=2.0), Command(name="go-on"), None, answered],
    )
    assert [one.text for one in asked if isinstance(one, Report)] == ["paused", "going on"]
    assert sum(isinstance(one, Wait) for one in asked) == 3
    assert asked[-1] == ASK
    assert result["answer"] == answered


@pytest.mark.parametrize("paused", [False, True])
def test_a_stop_reaches_the_core_also_from_a_pause(paused: bool) -> None:
    stop = Command(name="stop", text="stopped by the operator")
    before: list[Observation | None] = [Command(name="pause"), None] if paused else []
    assert _talk(obeying(_core()), [*before, stop])[1]["answer"] == stop


def test_notes_are_kept_and_a_dose_by_hand_is_not_carried_out() -> None:
    answered = Answered(key="ready", answer="ready")
    told: list[Observation | None] = [
        Command(name="note", text="bottle nearly empty"), None,
        Command(name="dose", volume_ml=0.1), None,
        Resumed(at_s=9.0, gap_s=3.0), None,
        answered,
    ]  # fmt: skip
    asked, _ = _talk(obeying(_core()), told)
    said = [(one.what, one.text) for one in asked if isinstance(one, Report)]
    assert said == [
        ("note", "operator: bottle nearly empty"),
        ("warning", "dose: not during a calibration"),
        ("note", "went on after a gap of 3 s"),
    ]


def _deliveries(spoil: Callable[[Dose], Observation | None]) -> list[tuple[int, float]]:
    """Check the burette with one dose spoiled; return number and volume of what was delivered until the first mass."""
    core = check_burette(
        plan_burette(
            shipped_bench(),
            pump=PumpAccount(identity="b", start_count=1, last_dose_number=7, contents_ml=10.0, reservoir_ml=250.0),
            today=date(2026, 12, 1),
            last=None,
            conditions=WeighingConditions(water_temperature_c=20.0),
            readings_g=None,
        )
    )
    done: list[tuple[int, float]] = []
    answer: Observation | None = None
    while True:
        action = core.send(answer)
        match action:
            case Ask(key=key) if key.startswith("balance-reading"):
                return done
            case Ask(key=key):
                answer = Answered(key=key, answer="yes")
            case Dose(number=number, volume_ml=volume_ml):
                answer = spoil(action) or Dosed(at_s=0.0, number=number, volume_ml=volume_ml)
                if isinstance(answer, Dosed):
                    done.append((number, answer.volume_ml))
            case Wait():
                answer = Command(name="go-on")
            case Refill():
                answer = Refilled(at_s=0.0, contents_ml=10.0)
            case _:
                answer = None


def test_a_halted_delivery_is_finished_with_another_dose() -> None:
    halted = iter([True])

    def cut(action: Dose) -> Observation | None:
        return Dosed(at_s=0.0, number=action.number, volume_ml=0.4) if next(halted, False) else None

    assert _deliveries(cut) == [(8, 0.4), (9, pytest.approx(0.6))]


def test_a_dose_that_a_pause_came_before_is_given_under_a_new_number() -> None:
    paused = iter([True])

    def pause(action: Dose) -> Observation | None:
        return Command(name="pause") if next(paused, False) else None

    assert _deliveries(pause) == [(9, 1.0)]


def test_what_was_read_before_a_pause_does_not_count_towards_stability() -> None:
    rule = Stability(
        window_s=10.0, limit_mv_min=1.0, longest_s=60.0, lowest_temperature_c=15.0, highest_temperature_c=35.0
    )
    core, at_s, answer = read_until_stable(rule, 1.0, 0.1), 0.0, None
    reads = 0
    try:
        while True:
            action = core.send(answer)
            if isinstance(action, Read):
                reads += 1
                drifting = reads <= 20
                answer = Reading(at_s=at_s, potential_mv=5.0 * reads if drifting else 3.4, temperature_c=25.0)
            else:
                at_s += 400.0 if reads == 20 else 1.0
                answer = Waited(at_s=at_s)
    except StopIteration as end:
        found = end.value
    assert isinstance(found, Stable), found
    assert found.waited_s < 20.0
