"""Whole runs with a probe that is not as its lag record says: the run finds out, says so, and gives a good number."""

from __future__ import annotations

from dataclasses import replace

import pytest

from controller.titration.plan import WeakAcid
from simulators.solution_mixture import Mixture, StrongIon, WeakComponent

LEFT = "lag record says"

#: a single layer instead of three stages: the film next to nothing, no slow layer, no dead time
SINGLE = {"film_s": 0.005, "slow_share": 0.0, "dead_time_s": 0.0}
MALIC = Mixture(weak=(WeakComponent(pka=(3.40, 5.11), charge=0, concentration_mol_l=0.005),))
STRONG = Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=0.01),))


def stages(times: float) -> dict[str, float]:
    """The stages of the nominal probe so many times as slow."""
    return {"bulk_s": 1.5 * times, "film_s": 2.0 * times, "slow_s": 30.0 * times}


@pytest.mark.parametrize(
    ("lag", "longest_s"),
    [
        pytest.param({"bulk_s": 0.01, **SINGLE}, 330.0, id="no lag"),
        pytest.param({"bulk_s": 7.0, **SINGLE}, 700.0, id="single 7 s"),
        pytest.param({"bulk_s": 10.0, **SINGLE}, 900.0, id="single 10 s"),
        pytest.param(stages(2.0), 600.0, id="twice as slow"),
        pytest.param(stages(3.0), 800.0, id="three times as slow"),
    ],
)
@pytest.mark.parametrize(
    ("sample", "analyte"),
    [
        pytest.param(None, None, id="acetic"),
        pytest.param(MALIC, WeakAcid(name="malic acid", pka=(3.40, 5.11), charge=0), id="malic"),
        pytest.param(STRONG, WeakAcid(name="strong acid", pka=(), charge=0), id="strong"),
    ],
)
def test_a_probe_unlike_its_record_gives_a_good_number(core_case, sample, analyte, lag, longest_s) -> None:
    case = core_case(sample, analyte=analyte, lag=lag, seed=11)
    result = case.run().result
    assert result["outcome"] == "completed"
    assert result["titrant_ml"] > case.true_ml[-1]
    (point,) = result["end_points"]
    assert point["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.005)
    assert abs(point["volume_ml"] - case.true_ml[-1]) < 4.0 * point["standard_uncertainty_ml"]
    assert point["standard_uncertainty_ml"] < 0.01
    assert sum(LEFT in text for text in result["warnings"]) == 1
    found = result["probe_lag"]
    assert found["record_holds"] is False
    true_s, record_s = lag["bulk_s"] + lag["film_s"], 3.5
    assert (found["sum_s"] > record_s) == (true_s > record_s)
    assert result["duration_s"] < longest_s


def test_a_probe_as_its_record_says_is_never_doubted(core_case) -> None:
    for seed in range(60, 66):
        result = core_case(seed=seed).run().result
        assert not any(LEFT in text for text in result["warnings"])
        lag = result["probe_lag"]
        assert lag["record_holds"] is True
        assert lag["transients"] > 10
        assert abs(lag["sum_s"] - 3.5) < 4.0 * lag["sum_standard_uncertainty_s"] + 0.1


def test_a_probe_that_becomes_slow_within_the_run_is_noticed(core_case) -> None:
    case = core_case(seed=21)
    done = []

    def answer(action):
        if action.kind == "dose" and action.number == 8:
            case.world.bench.beaker.slow_film(4.0, case.world.now_s)
            done.append(action.number)
        return case.world.answer(action)

    run = case.run(answer)
    assert done
    assert any(LEFT in text for text in run.result["warnings"])
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.005)


def test_points_seen_again_are_reported_with_a_wider_volume(core_case) -> None:
    case = core_case(seed=11, lag={"bulk_s": 10.0, **SINGLE})
    run = case.run()
    points = [r for r in run.reports if r.what == "point"]
    again = [r for r in run.reports if r.what == "point-again"]
    assert again
    for report in again:
        before = points[report.point]
        assert 0.0 <= report.volume_ml <= before.delivered_ml
        assert report.volume_sd_ml >= before.volume_sd_ml


def test_noise_without_a_transient_is_no_reason_to_doubt_the_record(core_case) -> None:
    case = core_case(seed=3)
    wild = iter(range(10**9))

    def answer(action):
        seen = case.world.answer(action)
        if action.kind == "read" and seen.at_s > 30.0:
            return replace(seen, potential_mv=seen.potential_mv + 40.0 * (-1.0) ** next(wild))
        return seen

    assert not any(LEFT in text for text in case.run(answer).result["warnings"])
