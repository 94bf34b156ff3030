"""What may come in place of an answer: refusals, failures, commands, gaps, bad and stuck readings."""

from __future__ import annotations

from dataclasses import replace

import pytest

from controller.titration.actions import (
    Back,
    Command,
    Dosed,
    Failed,
    Reading,
    Refused,
    Resumed,
    Waited,
)
from controller.titration.plan import Question


class Interrupted:
    """Answers from a world, but the n-th action of a kind gets something else."""

    def __init__(self, world, plan: dict) -> None:
        self.world = world
        self.plan = plan  # (kind, nth): callable(action) -> observation
        self.count: dict[str, int] = {}

    def __call__(self, action):
        if action.kind == "report":
            return self.world.answer(action)
        n = self.count[action.kind] = self.count.get(action.kind, 0) + 1
        made = self.plan.get((action.kind, n))
        return made(action) if made is not None else self.world.answer(action)


def notes(run) -> list[str]:
    return [r.text for r in run.reports if r.what in {"note", "warning"}]


def test_a_wrong_answer_to_a_question_doses_nothing(core_case) -> None:
    case = core_case()
    question = Question(key="stirring", text="Stirring, no vortex?", choices=("no", "yes"), must_be="yes")
    case.plan = replace(case.plan, questions=(question,))
    run = case.run()
    assert run.result["outcome"] == "stopped"
    assert "nothing was dosed" in run.result["reason"]
    assert [a.kind for a, _ in run.entries] == ["ask"]
    assert run.result["doses"] == 0


def test_a_free_answer_is_taken_as_it_is(core_case) -> None:
    case = core_case()
    case.plan = replace(case.plan, questions=(Question(key="lot", text="Which lot?", choices=("a", "b")),))
    assert case.run().result["outcome"] == "completed"


def test_a_refused_dose_ends_the_run(core_case) -> None:
    case = core_case()
    run = case.run(Interrupted(case.world, {("dose", 6): lambda a: Refused(what="vessel full")}))
    assert run.result["outcome"] == "stopped"
    assert run.result["reason"] == "refused by the guard: vessel full"
    assert run.result["doses"] == 5
    assert run.result["end_points"] == []


def test_the_operator_stops_the_run_anywhere(core_case) -> None:
    for kind, n in (("read", 1), ("wait", 30), ("dose", 1), ("dose", 12), ("read", 200)):
        case = core_case()
        run = case.run(Interrupted(case.world, {(kind, n): lambda a: Command(name="stop")}))
        assert run.result["outcome"] == "stopped"
        assert run.result["reason"] == "stopped by the operator"
        assert run.result["end_points"] == []


def test_a_pause_waits_until_it_is_told_to_go_on(core_case) -> None:
    case = core_case()
    plain = core_case().run()
    paused = case.run(
        Interrupted(
            case.world, {("dose", 8): lambda a: Command(name="pause"), ("wait", 200): lambda a: Command(name="go-on")}
        )
    )
    kinds = [a.kind for a, _ in paused.entries]
    at = kinds.index("report", kinds.index("dose"))
    assert "paused" in notes(paused)
    assert "going on" in notes(paused)
    assert at > 0
    assert paused.result["outcome"] == "completed"
    assert paused.result["duration_s"] > plain.result["duration_s"] + 20.0
    assert paused.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.004)


def test_a_dose_by_hand_counts_and_the_run_goes_on(core_case) -> None:
    case = core_case()
    run = case.run(
        Interrupted(
            case.world,
            {
                ("read", 60): lambda a: Command(name="dose", volume_ml=0.3),
                ("wait", 90): lambda a: Command(name="note", text="smells"),
            },
        )
    )
    doses = [a for a, _ in run.entries if a.kind == "dose"]
    assert [d.number for d in doses] == list(range(1, len(doses) + 1))
    assert any("by hand" in d.reason for d in doses)
    assert "operator: smells" in notes(run)
    assert run.result["titrant_ml"] == pytest.approx(sum(d.volume_ml for d in doses))
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.004)


def test_a_dose_by_hand_beyond_the_limits_is_not_carried_out(core_case) -> None:
    case = core_case()
    run = case.run(Interrupted(case.world, {("read", 60): lambda a: Command(name="dose", volume_ml=50.0)}))
    assert any("not carried out" in w for w in run.result["warnings"])
    assert run.result["outcome"] == "completed"
    assert max(a.volume_ml for a, _ in run.entries if a.kind == "dose") < 1.0


def test_a_probe_that_is_back_in_time_costs_nothing(core_case) -> None:
    case = core_case()
    failing = {("read", n): lambda a: Failed(device="probe", what="no reply") for n in range(100, 104)}
    run = case.run(Interrupted(case.world, {**failing, ("read", 104): lambda a: Back(device="probe")}))
    assert run.result["outcome"] == "completed"
    assert any("no reply" in w for w in run.result["warnings"])
    assert "probe answers again" in notes(run)
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.004)


def test_a_probe_that_stays_away_ends_the_run(core_case) -> None:
    case = core_case()
    run = case.run(
        Interrupted(case.world, {("read", n): lambda a: Failed(device="probe", what="gone") for n in range(100, 200)})
    )
    assert run.result["outcome"] == "failed"
    assert run.result["reason"].startswith("probe: gone")
    assert run.result["end_points"] == []


def test_a_failed_dose_of_known_volume_goes_on(core_case) -> None:
    case = core_case()

    def half(action):
        real = case.world.answer(replace(action, volume_ml=round(action.volume_ml / 2, 4)))
        return Failed(
            device="pump",
            what="stalled",
            at_s=real.at_s,
            number=action.number,
            lowest_ml=real.volume_ml,
            highest_ml=real.volume_ml,
        )

    run = case.run(Interrupted(case.world, {("dose", 5): half}))
    assert run.result["outcome"] == "completed"
    assert any("stalled" in w for w in run.result["warnings"])
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.004)


def test_a_dose_of_unknown_volume_ends_the_run_and_nothing_is_guessed(core_case) -> None:
    case = core_case()
    failed = {("dose", 9): lambda a: Failed(device="pump", what="restarted", lowest_ml=0.0, highest_ml=a.volume_ml)}
    run = case.run(Interrupted(case.world, failed))
    assert run.result["outcome"] == "failed"
    assert "unknown between 0.0000 and" in run.result["reason"]
    assert run.result["end_points"] == []
    bare = case.__class__(case.plan, core_case().world, case.true_ml)
    run = bare.run(Interrupted(bare.world, {("dose", 9): lambda a: Failed(device="pump", what="gone")}))
    assert "unknown between" in run.result["reason"]


def test_doubt_about_a_step_widens_the_uncertainty(core_case) -> None:
    case = core_case()
    step = case.plan.pump.step_ml

    def nearly(action):
        real = case.world.answer(action)
        return Failed(
            device="pump",
            what="counted twice",
            at_s=real.at_s,
            lowest_ml=real.volume_ml - 2 * step,
            highest_ml=real.volume_ml,
        )

    doubtful = case.run(Interrupted(case.world, {("dose", 4): nearly})).result
    plain = core_case().run().result
    assert doubtful["outcome"] == "completed"
    assert doubtful["end_points"][0]["standard_uncertainty_ml"] > plain["end_points"][0]["standard_uncertainty_ml"]


def test_a_pump_that_fails_again_and_again_ends_the_run(core_case) -> None:
    case = core_case()
    nothing = {
        ("dose", n): lambda a: Failed(device="pump", what="stalled", lowest_ml=0.0, highest_ml=0.0)
        for n in range(5, 50)
    }
    run = case.run(Interrupted(case.world, nothing))
    assert run.result["outcome"] == "failed"
    assert "3 doses in a row" in run.result["reason"]


def test_an_answer_for_another_dose_ends_the_run(core_case) -> None:
    case = core_case()
    run = case.run(Interrupted(case.world, {("dose", 3): lambda a: Dosed(at_s=60.0, number=99, volume_ml=0.1)}))
    assert run.result["outcome"] == "failed"
    assert "answered for dose 99" in run.result["reason"]


def test_a_gap_is_noted_and_the_point_settles_again(core_case) -> None:
    case = core_case()

    def gap(action):
        case.world.now_s += 900.0
        return Resumed(at_s=case.world.now_s, gap_s=900.0)

    run = case.run(Interrupted(case.world, {("wait", 150): gap}))
    assert "resumed after a gap of 900 s" in notes(run)
    assert run.result["outcome"] == "completed"
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.004)


def test_an_answer_of_another_kind_is_asked_again(core_case) -> None:
    case = core_case()
    run = case.run(Interrupted(case.world, {("read", 50): lambda a: Waited(at_s=case.world.now_s)}))
    assert run.result["outcome"] == "completed"
    assert any("in place of an answer to read" in w for w in run.result["warnings"])


def test_bad_readings_are_dropped(core_case) -> None:
    case = core_case()

    def answer(action):
        seen = case.world.answer(action)
        if action.kind == "read" and seen.sequence % 5 == 0:
            return replace(seen, potential_mv=9999.0, status="open circuit")
        return seen

    run = case.run(answer)
    assert run.result["outcome"] == "completed"
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.004)


def test_a_probe_with_nothing_but_bad_readings_ends_the_run(core_case) -> None:
    case = core_case()
    run = case.run(
        lambda a: (
            Reading(at_s=case.world.now_s, potential_mv=0.0, status="open")
            if a.kind == "read"
            else case.world.answer(a)
        )
    )
    assert run.result["outcome"] == "failed"
    assert "bad readings in a row: open" in run.result["reason"]
    assert run.result["doses"] == 0


def test_a_probe_that_sticks_ends_the_run(core_case) -> None:
    case = core_case()

    def answer(action):
        seen = case.world.answer(action)
        return replace(seen, potential_mv=123.4) if action.kind == "read" and seen.at_s > 60.0 else seen

    run = case.run(answer)
    assert run.result["outcome"] == "failed"
    assert "sticks at 123.4 mV" in run.result["reason"]
    assert run.result["titrant_ml"] < 4.0


def test_a_probe_that_never_settles_ends_the_run(core_case) -> None:
    case = core_case()
    wild = iter(range(10**9))

    def answer(action):
        seen = case.world.answer(action)
        if action.kind == "read" and seen.at_s > 30.0:
            return replace(seen, potential_mv=seen.potential_mv + 40.0 * (-1.0) ** next(wild))
        return seen

    run = case.run(answer)
    assert run.result["outcome"] == "failed"
    assert "did not settle" in run.result["reason"]
    assert run.result["end_points"] == []
