"""The response check: holds before the end point, the lag that they show, and that a plan without one is untouched."""

from __future__ import annotations

from dataclasses import replace

import pytest

from controller.calibration.response import Dosing, Hold, ResponseError, fit_response
from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan
from controller.planning.responsecheck import response_of
from controller.study import StudyWorld, drive
from controller.titration.actions import Dose, Dosed, Reading, to_entry
from controller.titration.plan import ProbeResponse, ResponseCheck
from simulators.lag import LagCascade, LagConstants
from simulators.nominal import nominal_bench

TRUTH = LagConstants(bulk_s=1.4, film_s=2.3, slow_s=36.0, slow_share=0.014, dead_time_s=0.5)
RECORD = ProbeResponse(bulk_s=1.5, film_s=2.0, slow_s=30.0, slow_share=0.01, dead_time_s=0.5)


def exact_holds(log, slope_mv_ml):
    cascade = LagCascade(TRUTH)
    for dose in log:
        cascade.ramp(dose.began_s, dose.ended_s, dose.volume_ml)
    holds = []
    for dose in log[-2:]:
        times = tuple(dose.ended_s + 0.5 * i for i in range(1, 240))
        # readings of the first hold must not see the second dose
        seen = LagCascade(TRUTH)
        for earlier in log[: log.index(dose) + 1]:
            seen.ramp(earlier.began_s, earlier.ended_s, earlier.volume_ml)
        holds.append(Hold(at_s=times, potential_mv=tuple(slope_mv_ml * seen.seen_ml(t) for t in times)))
    return holds


def test_the_lag_is_found_again_from_exact_readings() -> None:
    log = [
        Dosing(began_s=0.0, ended_s=24.0, volume_ml=2.0),
        Dosing(began_s=60.0, ended_s=66.0, volume_ml=0.5),
        Dosing(began_s=80.0, ended_s=80.3, volume_ml=0.025),
        Dosing(began_s=210.0, ended_s=210.3, volume_ml=0.025),
    ]
    found = fit_response(
        log, exact_holds(log, 2000.0), lambda mv: (mv / 2000.0, 1 / 2000.0), start=RECORD, noise_mv=0.02
    ).lag
    assert found.slow_s == pytest.approx(TRUTH.slow_s, rel=0.02)
    assert found.slow_share == pytest.approx(TRUTH.slow_share, rel=0.02)
    assert found.bulk_s + found.film_s == pytest.approx(TRUTH.bulk_s + TRUTH.film_s, rel=0.01)


def test_too_few_readings_are_refused() -> None:
    hold = Hold(at_s=(1.0, 2.0), potential_mv=(1.0, 2.0))
    with pytest.raises(ResponseError, match="2 readings in 1 holds, needed: 60"):
        fit_response([], [hold], lambda mv: (mv, 1.0), start=None, noise_mv=0.1)


def test_a_run_holds_twice_just_before_its_end_point_and_shows_the_lag() -> None:
    nominal = nominal_bench("acetic", 3)
    plan = nominal_plan(nominal, MODEL_GUIDED)
    checked = replace(plan, response_check=ResponseCheck())
    run = drive(checked, StudyWorld(nominal.bench).answer, keep_entries=True)
    entries = [to_entry(item) for pair in run.entries for item in pair if item is not None]
    found = response_of(checked, entries)
    # the nominal bench's truth: 30 s, 1 %
    assert abs(found.lag.slow_s - 30.0) < 3 * found.slow_standard_uncertainty_s
    assert abs(found.lag.slow_share - 0.01) < 3 * found.share_standard_uncertainty
    assert 0.5 < found.chi_square < 2.0
    (truth,) = nominal.true_equivalence_ml
    assert abs(run.result["end_points"][0]["volume_ml"] - truth) < 0.005
    ended_s, held, delivered_ml = 0.0, [], 0.0
    for action, answer in run.entries:
        if isinstance(answer, Dosed):
            ended_s, delivered_ml = answer.at_s, delivered_ml + answer.volume_ml
        elif isinstance(answer, Reading) and answer.at_s - ended_s > 115.0:
            held.append(delivered_ml)
        assert not isinstance(action, Dose) or action.volume_ml > 0
    volumes = sorted(set(held))
    assert len(volumes) == 2
    assert all(truth - 0.16 < volume < truth for volume in volumes)
    with pytest.raises(ResponseError, match="no response check"):
        response_of(plan, entries)


def test_without_a_check_the_decisions_are_as_before() -> None:
    nominal = nominal_bench("acetic", 4)
    plan = nominal_plan(nominal, MODEL_GUIDED)
    run = drive(plan, StudyWorld(nominal.bench).answer, keep_entries=True)
    ended_s = 0.0
    for _, answer in run.entries:
        if isinstance(answer, Dosed):
            ended_s = answer.at_s
        assert not (isinstance(answer, Reading) and ended_s and answer.at_s - ended_s > 100.0)
