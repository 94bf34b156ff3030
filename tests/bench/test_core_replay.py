"""The core is a pure function of plan and observations: replays, foreign worlds, rounding."""

from __future__ import annotations

import json
from dataclasses import replace

import pytest

from controller.foresight.study_plan import BASELINE, MODEL_GUIDED, WITHOUT_RECORD
from controller.titration.actions import Dosed, Finish, from_entry, to_entry
from controller.titration.core import titrate


def replayed(plan, entries):
    """Feed the observations of a run to a fresh core; the actions it asks for."""
    decisions = titrate(plan)
    actions = [next(decisions)]
    for _, observation in entries:
        actions.append(decisions.send(observation))
    return actions


@pytest.mark.parametrize("strategy", [MODEL_GUIDED, WITHOUT_RECORD, BASELINE], ids=lambda s: s.name)
def test_the_same_observations_give_the_same_decisions(core_case, strategy) -> None:
    case = core_case(strategy=strategy)
    run = case.run()
    actions = replayed(case.plan, run.entries)
    assert actions[:-1] == [a for a, _ in run.entries]
    assert actions[-1] == Finish(result=run.result)


def test_observations_survive_the_journal(core_case) -> None:
    case = core_case()
    run = case.run()
    lines = [None if o is None else json.loads(json.dumps(to_entry(o))) for _, o in run.entries]
    entries = [(None, None if line is None else from_entry(line)) for line in lines]
    assert replayed(case.plan, entries)[-1] == Finish(result=run.result)
    json.dumps(run.result, allow_nan=False)


def test_a_changed_reading_in_the_last_bit_changes_no_decision(core_case) -> None:
    case = core_case()
    run = case.run()
    nudged = [
        (a, replace(o, potential_mv=o.potential_mv * (1.0 + 2e-16)) if a.kind == "read" else o) for a, o in run.entries
    ]
    actions = replayed(case.plan, nudged)
    assert [a for a in actions if a.kind in {"dose", "wait"}] == [
        a for a, _ in run.entries if a.kind in {"dose", "wait"}
    ]


@pytest.mark.parametrize("step_ml", [0.0005, 0.00129, 0.01])
def test_doses_are_whole_steps_and_waits_whole_tenths(core_case, step_ml) -> None:
    case = core_case(syringe={"step_ml": step_ml})
    case.plan = replace(case.plan, pump=replace(case.plan.pump, step_ml=step_ml))
    run = case.run()
    for action, observation in run.entries:
        if action.kind == "dose":
            assert action.volume_ml == pytest.approx(observation.steps * step_ml, abs=1e-9)
        if action.kind == "wait":
            assert action.seconds == round(action.seconds, 1)
    assert run.result["outcome"] == "completed"
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.004)


def test_only_the_plain_actions_are_asked_for(core_case) -> None:
    run = core_case().run()
    assert {a.kind for a, _ in run.entries} <= {"dose", "read", "wait", "report"}
    kinds = [a.kind for a, _ in run.entries if a.kind != "report"]
    assert kinds[:40] == ["read", "wait"] * 20


def test_a_foreign_world_need_not_say_when_a_dose_began(core_case) -> None:
    case = core_case()

    def answer(action):
        seen = case.world.answer(action)
        return replace(seen, started_at_s=None, steps=None) if isinstance(seen, Dosed) else seen

    run = case.run(answer)
    plain = core_case().run()
    assert run.result == plain.result


def test_a_world_that_is_late_and_delivers_a_little_less_is_understood(core_case) -> None:
    case = core_case()

    def answer(action):
        if action.kind == "wait":
            case.world.now_s += 0.137  # answers take their time
        seen = case.world.answer(action)
        if isinstance(seen, Dosed):
            return replace(seen, started_at_s=None, volume_ml=seen.volume_ml - 1e-5)
        return seen

    result = case.run(answer).result
    assert result["outcome"] == "completed"
    lost_ml = 1e-5 * result["doses"]
    assert result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1] - lost_ml, abs=0.004)


def test_dose_numbers_go_on_from_the_pump(core_case) -> None:
    case = core_case()
    case.plan = replace(case.plan, pump=replace(case.plan.pump, last_dose_number=41))
    numbers = [a.number for a, _ in case.run().entries if a.kind == "dose"]
    assert numbers == list(range(42, 42 + len(numbers)))
