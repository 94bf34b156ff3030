"""Limits, syringes and reservoirs that end a run, and probes that stick."""

from __future__ import annotations

from dataclasses import replace

import pytest

from controller.foresight.study_plan import WITHOUT_RECORD
from controller.titration.actions import Refilled
from simulators.solution_mixture import Mixture, WeakComponent


def test_limits_end_the_run(core_case) -> None:
    for change, said in (
        ({"titrant_ml": 2.0}, "titrant limit reached"),
        ({"run_time_s": 100.0}, "run time limit of 100 s"),
        ({"highest_ph": 5.0}, "above the limit of 5"),
        ({"lowest_mv": 120.0}, "below the limit of 120"),
    ):
        case = core_case()
        case.plan = replace(case.plan, limits=replace(case.plan.limits, **change))
        result = case.run().result
        assert result["outcome"] == "stopped"
        assert said in result["reason"]
        assert result["end_points"] == []
        assert result["titrant_ml"] <= 2.0 or "titrant_ml" not in change


def test_the_vessel_is_never_overfilled(core_case) -> None:
    case = core_case()
    case.plan = replace(case.plan, vessel=replace(case.plan.vessel, capacity_ml=68.0))
    result = case.run().result
    assert result["titrant_ml"] <= 3.0
    assert "titrant limit reached" in result["reason"]


@pytest.mark.parametrize("route", ["valve", "by-hand", "none"])
def test_a_small_syringe_is_refilled_or_the_run_says_it_is_empty(core_case, route) -> None:
    case = core_case(syringe={"syringe_ml": 2.0, "contents_ml": 2.0, "reservoir_ml": 50.0})
    case.plan = replace(case.plan, pump=replace(case.plan.pump, syringe_ml=2.0, contents_ml=2.0, refill=route))
    run = case.run()
    kinds = [a.kind for a, _ in run.entries]
    if route == "none":
        assert run.result["outcome"] == "stopped"
        assert "refill" not in kinds
        assert run.result["titrant_ml"] <= 2.0
        return
    assert run.result["outcome"] == "completed"
    assert kinds.count("refill") == 2
    assert kinds.count("ask") == (2 if route == "by-hand" else 0)
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.006)


def test_an_operator_who_does_not_refill_stops_the_run(core_case) -> None:
    case = core_case()
    case.plan = replace(case.plan, pump=replace(case.plan.pump, contents_ml=1.0, refill="by-hand"))
    run = case.run(lambda a: replace(case.world.answer(a), answer="stop") if a.kind == "ask" else case.world.answer(a))
    assert run.result["outcome"] == "stopped"
    assert "did not refill" in run.result["reason"]


def test_a_flat_curve_ends_by_its_limit(core_case) -> None:
    # a buffer that takes everything: 0.5 mol/L of pKa 7
    sample = Mixture(weak=(WeakComponent(pka=(7.0,), charge=0, concentration_mol_l=0.5),))
    case = core_case(sample)
    result = case.run().result
    assert result["outcome"] == "stopped"
    assert result["end_points"] == []


def test_a_quiet_coarse_meter_is_not_taken_for_stuck(core_case) -> None:
    # 1 mV resolution, no noise, and the hold of 60 s before the end point: long without change, yet alive
    case = core_case(strategy=WITHOUT_RECORD, seed=2, electrode={"noise_sd_mv": 0.0, "resolution_mv": 1.0})
    case.plan = replace(case.plan, probe=replace(case.plan.probe, resolution_mv=1.0))
    result = case.run().result
    assert result["outcome"] == "completed"
    assert result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.006)


def test_a_quiet_meter_that_sticks_ends_the_run_too(core_case) -> None:
    case = core_case(electrode={"noise_sd_mv": 0.0, "resolution_mv": 1.0})
    case.plan = replace(case.plan, probe=replace(case.plan.probe, resolution_mv=1.0))

    def answer(action):
        seen = case.world.answer(action)
        return replace(seen, potential_mv=150.0) if action.kind == "read" and seen.at_s > 60.0 else seen

    result = case.run(answer).result
    assert result["outcome"] == "failed"
    assert "sticks" in result["reason"]


def test_an_empty_reservoir_stops_the_run(core_case) -> None:
    case = core_case()
    case.plan = replace(case.plan, pump=replace(case.plan.pump, contents_ml=1.0))

    def answer(action):
        if action.kind == "refill":
            return Refilled(at_s=case.world.now_s, contents_ml=0.02, reservoir_ml=0.0)
        return case.world.answer(action)

    result = case.run(answer).result
    assert result["outcome"] == "stopped"
    assert "reservoir is empty" in result["reason"]
    assert result["titrant_ml"] <= 1.02
