"""Failure cases known from trials: each once went wrong somewhere and must not again."""

from __future__ import annotations

from dataclasses import replace

import pytest

from controller.foresight.study_plan import BASELINE, FIXED_WAIT, MODEL_GUIDED, WITHOUT_RECORD
from controller.titration.plan import WeakAcid
from simulators.solution_mixture import Mixture, StrongIon, WeakComponent

BOTH = pytest.mark.parametrize("strategy", [MODEL_GUIDED, WITHOUT_RECORD], ids=lambda s: s.name)


def largest_dose_near_ml(run, true_ml: float, within_ml: float) -> float:
    """Largest dose that began within a distance before equivalence."""
    delivered, largest = 0.0, 0.0
    for action, _ in run.entries:
        if action.kind == "dose":
            if -within_ml < delivered - true_ml < 0.02:
                largest = max(largest, action.volume_ml)
            delivered += action.volume_ml
    return largest


@pytest.mark.parametrize("seed", range(20, 26))
@pytest.mark.parametrize("wrong_pka", [3.9, 5.6])
def test_a_wrong_substance_never_leads_over_the_jump_in_one_dose(core_case, seed, wrong_pka) -> None:
    # the model restarting in a wrong minimum beside equivalence once dosed 500 uL past it
    case = core_case(seed=seed)
    analyte = replace(case.plan.chemistry.analyte, pka=(wrong_pka,))
    case.plan = replace(case.plan, chemistry=replace(case.plan.chemistry, analyte=analyte))
    run = case.run()
    assert run.result["outcome"] == "completed"
    assert largest_dose_near_ml(run, case.true_ml[-1], 0.05) <= 0.1
    assert run.result["titrant_ml"] < case.true_ml[-1] + 0.3
    if wrong_pka < 4.0:  # a constant too high still bends far enough to fit
        assert any("check the substance" in w for w in run.result["warnings"])
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.008)


@BOTH
@pytest.mark.parametrize("volume_ml", [1.0, 4.9, 5.02])
def test_a_bubble_while_settling_spoils_no_point(core_case, strategy, volume_ml) -> None:
    case = core_case(strategy=strategy, seed=1)
    until = [None]

    def answer(action):
        seen = case.world.answer(action)
        if action.kind != "read":
            return seen
        if until[0] is None and case.world.bench.true_delivered_ml(seen.at_s) > volume_ml:
            until[0] = seen.at_s + 5.0
        if until[0] is not None and until[0] - 3.0 <= seen.at_s < until[0]:  # 6 readings
            return replace(seen, potential_mv=seen.potential_mv - 30.0)
        return seen

    run = case.run(answer)
    assert until[0] is not None
    assert run.result["outcome"] == "completed"
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.005)


@BOTH
def test_the_first_rise_of_a_weak_acid_is_no_end_point(core_case, strategy) -> None:
    # acetic acid half neutralised would start flat; the free acid of pKa 6.5 rises steeply first
    sample = Mixture(weak=(WeakComponent(pka=(6.5,), charge=0, concentration_mol_l=0.01),))
    for analyte in (WeakAcid(name="weak", pka=(6.5,), charge=0), None):
        run = core_case(sample, analyte=analyte, strategy=strategy).run()
        found = [r for r in run.reports if r.what == "end-point"]
        assert len(found) == 1
        assert found[0].volume_ml == pytest.approx(5.0, abs=0.02)


def test_the_first_rise_is_no_end_point_without_a_model_either(core_case) -> None:
    sample = Mixture(weak=(WeakComponent(pka=(6.5,), charge=0, concentration_mol_l=0.01),))
    case = core_case(sample, strategy=BASELINE)
    case.plan = replace(case.plan, probe=replace(case.plan.probe, signal="potential", calibration=None))
    run = case.run()
    found = [r for r in run.reports if r.what == "end-point"]
    assert [r.volume_ml for r in found] == [pytest.approx(5.0, abs=0.03)]


@BOTH
def test_early_protons_do_not_bend_the_last_one(core_case, strategy) -> None:
    # citric-like, but with constants 0.15 away from the plan's: early points contradict the model most
    sample = Mixture(weak=(WeakComponent(pka=(3.0, 4.9, 6.3), charge=0, concentration_mol_l=0.0033),))
    case = core_case(sample, analyte=WeakAcid(name="x", pka=(3.13, 4.76, 6.40), charge=0), strategy=strategy)
    result = case.run().result
    assert result["outcome"] == "completed"
    assert result["end_points"][0]["volume_ml"] == pytest.approx(4.95, abs=0.006)


@BOTH
def test_a_long_run_with_strong_drift_ends_well(core_case, strategy) -> None:
    case = core_case(strategy=strategy, electrode={"drift_mv_min": 1.5})
    result = case.run().result
    assert result["outcome"] == "completed"
    assert result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.006)


@BOTH
def test_a_slow_probe_is_waited_for(core_case, strategy) -> None:
    # three times slower than its record says (with record), or than usual (without)
    case = core_case(strategy=strategy, lag={"bulk_s": 3.0, "film_s": 6.0})
    run = case.run()
    assert run.result["outcome"] == "completed"
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.012)


def test_the_lag_is_learned_in_the_run(core_case) -> None:
    off, right = (core_case(seed=5, lag=lag).run() for lag in ({"bulk_s": 2.2, "film_s": 2.9}, {}))
    true_ml = core_case(seed=5).true_ml[-1]
    assert off.result["end_points"][0]["volume_ml"] == pytest.approx(true_ml, abs=0.005)
    assert off.result["duration_s"] < 1.5 * right.result["duration_s"]


def test_a_fixed_wait_too_short_is_biased_and_the_lag_correction_is_not(core_case) -> None:
    # a slow probe and a wait of 5 s: every point lags behind, so the end point seems to come late
    short = replace(FIXED_WAIT, settling=replace(FIXED_WAIT.settling, fixed_wait_s=5.0))
    late, corrected = [], []
    for seed in range(40, 46):
        for strategy, errors in ((short, late), (MODEL_GUIDED, corrected)):
            case = core_case(strategy=strategy, seed=seed)
            volume_ml = case.run().result["end_points"][0]["volume_ml"]
            errors.append(1000.0 * (volume_ml - case.true_ml[-1]))
    assert sum(late) / 6 > 1.5
    assert abs(sum(corrected) / 6) < 1.2


def test_backlash_taken_up_leaves_no_trace(core_case) -> None:
    # 12 uL of play, syringe refilled twice on the way: the fill ends with a push against the reservoir
    small = {"syringe_ml": 2.0, "contents_ml": 2.0, "reservoir_ml": 50.0, "backlash_ml": 0.012}
    case = core_case(syringe={**small, "backlash_taken_up": True})
    case.plan = replace(case.plan, pump=replace(case.plan.pump, syringe_ml=2.0, contents_ml=2.0))
    run = case.run()
    assert sum(a.kind == "refill" for a, _ in run.entries) == 2
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.006)


def test_carbon_dioxide_after_the_end_point_is_no_second_one(core_case) -> None:
    case = core_case(end_points=2, beaker={"carbon_dioxide_mol_l_s": 2e-8})
    result = case.run().result
    assert len(result["end_points"]) == 1


@pytest.mark.parametrize("seed", range(3))
def test_doses_shrink_before_the_jump_whatever_the_settings(core_case, seed) -> None:
    sample = Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=0.0113),))
    case = core_case(sample, analyte=WeakAcid(name="strong", pka=(), charge=0), seed=seed)
    case.plan = replace(
        case.plan, dosing=replace(case.plan.dosing, model_step_mv=200.0, largest_ml=2.0, slope_step_mv=50.0)
    )
    run = case.run()
    assert run.result["outcome"] == "completed"
    assert largest_dose_near_ml(run, case.true_ml[-1], 0.1) <= 0.2
