"""Whole runs of the decision core: every policy and rule, rising and falling curves, one and several end points."""

from __future__ import annotations

import itertools
from dataclasses import replace

import pytest

from controller.foresight.study_plan import (
    BASELINE,
    EQUAL_VOLUMES,
    FIXED_WAIT,
    LAX_BASELINE,
    MODEL_GUIDED,
    WITHOUT_RECORD,
    Strategy,
)
from controller.study import nominal_run
from controller.titration.plan import WeakAcid
from simulators.solution_mixture import Mixture, StrongIon, WeakComponent

EVERY_RULE = [
    pytest.param(replace(MODEL_GUIDED, settling=replace(MODEL_GUIDED.settling, rule=rule)), id=rule)
    for rule in ("lag-corrected", "extrapolated", "stability-limit", "fixed-wait")
]


def weak(*pka: float, mol_l: float, charge: int = 0) -> WeakComponent:
    return WeakComponent(pka=pka, charge=charge, concentration_mol_l=mol_l)


def cation(mol_l: float) -> StrongIon:
    return StrongIon(charge=1, concentration_mol_l=mol_l)


@pytest.mark.parametrize(
    ("strategy", "most_ul"),
    [
        pytest.param(MODEL_GUIDED, 4.0, id="model-guided"),
        pytest.param(WITHOUT_RECORD, 4.0, id="no-record"),
        pytest.param(BASELINE, 4.0, id="slope-adaptive"),
        pytest.param(LAX_BASELINE, 5.0, id="lax"),
        pytest.param(FIXED_WAIT, 5.0, id="fixed-wait"),
        pytest.param(EQUAL_VOLUMES, 15.0, id="equal-volumes"),
    ],
)
@pytest.mark.parametrize("case", ["acetic", "strong-acid"])
def test_every_policy_finds_the_end_point(case, strategy: Strategy, most_ul: float) -> None:
    for seed in (1, 2):
        run = nominal_run(case, seed, strategy)
        assert run.outcome == "completed"
        assert run.found == 1
        assert abs(run.error_ul[0]) < most_ul


@pytest.mark.parametrize("strategy", EVERY_RULE)
def test_every_settling_rule_serves_model_guided_dosing(strategy: Strategy) -> None:
    run = nominal_run("malic", 3, strategy)
    assert run.outcome == "completed"
    assert abs(run.error_ul[0]) < 5.0


@pytest.mark.parametrize("strategy", [MODEL_GUIDED, WITHOUT_RECORD, BASELINE], ids=lambda s: s.name)
def test_both_jumps_of_phosphoric_acid_are_found(strategy: Strategy) -> None:
    run = nominal_run("phosphoric", 4, strategy)
    assert run.found == 2
    assert abs(run.error_ul[0]) < 6.0
    assert abs(run.error_ul[1]) < 6.0


def test_a_base_is_titrated_with_an_acid(core_case) -> None:
    # ammonia, pKa 9.25 (CRC Handbook, from memory)
    case = core_case(
        Mixture(weak=(weak(9.25, mol_l=0.011, charge=1),)),
        analyte=WeakAcid(name="ammonia", pka=(9.25,), charge=1),
        acid_titrant=True,
    )
    result = case.run().result
    assert result["outcome"] == "completed"
    assert result["end_points"][0]["volume_ml"] == pytest.approx(5.5, abs=0.004)
    assert result["end_points"][0]["ph"] == pytest.approx(5.6, abs=0.2)


def test_carbonate_shows_two_end_points_with_an_acid(core_case) -> None:
    # carbonic acid, pKa 6.35 and 10.33 (CRC Handbook, from memory); the vessel is closed: nothing escapes
    case = core_case(
        Mixture(weak=(weak(6.35, 10.33, mol_l=0.005),), ions=(cation(0.010),)),
        analyte=WeakAcid(name="carbonate", pka=(6.35, 10.33), charge=0, counter_ion_charge=2),
        acid_titrant=True,
        end_points=2,
    )
    result = case.run().result
    assert result["outcome"] == "completed"
    first, second = (e["volume_ml"] for e in result["end_points"])
    assert first == pytest.approx(2.5, abs=0.02)
    assert second == pytest.approx(5.0, abs=0.008)


@pytest.mark.parametrize("strategy", [MODEL_GUIDED, BASELINE], ids=lambda s: s.name)
def test_two_end_points_are_found_without_knowing_the_substance(core_case, strategy: Strategy) -> None:
    case = core_case(
        Mixture(weak=(weak(6.35, 10.33, mol_l=0.005),), ions=(cation(0.010),)),
        analyte=None,
        acid_titrant=True,
        end_points=2,
        strategy=strategy,
        expected_ml=None,
    )
    result = case.run().result
    assert result["outcome"] == "completed"
    for found, true_ml in zip(result["end_points"], (2.5, 5.0), strict=True):
        assert abs(found["volume_ml"] - true_ml) < 4.0 * found["standard_uncertainty_ml"]
        assert found["standard_uncertainty_ml"] < 0.02


def test_a_half_neutralised_salt_counts_its_last_proton(core_case) -> None:
    # hydrogen phthalate: 2.95 and 5.41 (NIST 46, from memory)
    case = core_case(
        Mixture(weak=(weak(2.95, 5.41, mol_l=0.010),), ions=(cation(0.010),)),
        analyte=WeakAcid(name="potassium hydrogen phthalate", pka=(2.95, 5.41), charge=0, counter_ion_charge=1),
    )
    result = case.run().result
    assert result["end_points"][0]["volume_ml"] == pytest.approx(5.0, abs=0.004)


def test_juice_with_potassium_does_not_mislead_the_model(core_case) -> None:
    # malic acid (3.40, 5.11: from memory) with a third of its protons gone to potassium
    case = core_case(
        Mixture(weak=(weak(3.40, 5.11, mol_l=0.008),), ions=(cation(0.005),)),
        analyte=WeakAcid(name="malic acid", pka=(3.40, 5.11), charge=0),
        expected_ml=8.0,
    )
    run = case.run()
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(5.5, abs=0.004)
    assert run.result["doses"] < 40


def test_an_unknown_acid_is_titrated_by_the_data_alone(core_case) -> None:
    case = core_case(Mixture(weak=(weak(4.2, mol_l=0.009),)), analyte=None, expected_ml=None)
    result = case.run().result
    assert result["outcome"] == "completed"
    assert result["end_points"][0]["volume_ml"] == pytest.approx(4.5, abs=0.005)


def test_a_plain_potential_is_titrated_by_its_slope(core_case) -> None:
    case = core_case(strategy=BASELINE)
    plan = replace(case.plan, probe=replace(case.plan.probe, signal="potential", calibration=None))
    case.plan = plan
    run = case.run()
    assert run.result["outcome"] == "completed"
    assert run.result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.010)
    assert run.result["end_points"][0]["ph"] is None


def test_a_very_weak_acid_gives_an_end_point_that_covers_the_truth() -> None:
    run = nominal_run("very-weak-acid", 2, MODEL_GUIDED)
    assert run.found == 1
    assert abs(run.error_ul[0]) < 4.0 * run.standard_uncertainty_ul[0]


def test_nothing_is_reported_where_nothing_is(core_case) -> None:
    # boric acid's like, pKa 12.5 at 10 mM: no jump at all
    case = core_case(Mixture(weak=(weak(12.5, mol_l=0.010),)), analyte=WeakAcid(name="x", pka=(12.5,), charge=0))
    result = case.run().result
    assert result["outcome"] == "stopped"
    assert result["end_points"] == []
    assert result["half_equivalence"] == []
    assert result["estimators"] == {}
    assert "titrant limit" in result["reason"]
    assert "no end point" in result["reason"]


def test_fewer_jumps_than_expected_are_said(core_case) -> None:
    case = core_case(end_points=2)
    result = case.run().result
    assert result["outcome"] == "stopped"
    assert len(result["end_points"]) == 1
    assert "1 of 2 end points found" in result["reason"]


def test_a_run_that_goes_on_ends_at_the_overrun(core_case) -> None:
    case = core_case()
    case.plan = replace(
        case.plan,
        end_points=replace(case.plan.end_points, stop_at_last=False),
        limits=replace(case.plan.limits, overrun_ml=0.5),
    )
    result = case.run().result
    assert result["outcome"] == "completed"
    assert case.true_ml[-1] + 0.5 < result["titrant_ml"] < case.true_ml[-1] + 0.75
    assert result["end_points"][0]["volume_ml"] == pytest.approx(case.true_ml[-1], abs=0.004)


def test_every_dose_has_a_reason_and_the_forecast_narrows(core_case) -> None:
    run = core_case().run()
    reasons = [a.reason for a, _ in run.entries if a.kind == "dose"]
    assert all(f"dose {n}: " in reason for n, reason in enumerate(reasons, start=1))
    assert "expecting" in reasons[-1]
    assert "equivalence predicted at" in reasons[-1]
    forecasts = [r for r in run.reports if r.what == "forecast"]
    assert forecasts[-1].standard_uncertainty_ml < 0.1 * forecasts[0].standard_uncertainty_ml
    points = [r for r in run.reports if r.what == "point"]
    assert all(b.volume_ml >= a.volume_ml for a, b in itertools.pairwise(points))
    assert [r.what for r in run.reports].count("end-point") == 1
