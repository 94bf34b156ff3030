"""From method, bench and sample to the plan: what the catalogue adds, what is expected, which questions are asked."""

from __future__ import annotations

import pytest

from configs.errors import HalfdropError
from configs.settings import shipped_bench, shipped_method
from controller.planning.runplan import SampleChoice, expected_account, make_plan
from controller.titration.plan import RunPlan

BENCH = shipped_bench()


def planned(name: str, choice: SampleChoice | None = None) -> RunPlan:
    return make_plan(
        shipped_method(name),
        BENCH,
        choice or SampleChoice(),
        pump=expected_account(BENCH),
        probe_identity="probe of the test",
    )


def test_expected_volumes_follow_from_stoichiometry() -> None:
    juice = planned("juice-acidity")
    assert juice.chemistry.expected_equivalence_volume_ml == pytest.approx(10 * 0.04 * 2 / 0.0997)
    # 0.15 g of potassium hydrogen phthalate, M = 204.2212 g/mol (EURACHEM/CITAC CG 4, example A2), purity of the method
    standard = planned("standardise-sodium-hydroxide", SampleChoice(mass_g=0.15))
    assert standard.chemistry.expected_equivalence_volume_ml == pytest.approx(150 * 0.9997 / 204.2212 / 0.1, rel=1e-6)


def test_the_acid_question_is_asked_of_every_acid_titrant_and_of_no_other() -> None:
    by_method = {name: {q.key: q.must_be for q in planned(name).questions} for name in (
        "juice-acidity", "wash-water-alkalinity"
    )}  # fmt: skip
    assert by_method["wash-water-alkalinity"]["toxic-gas"] == "no"
    assert "toxic-gas" not in by_method["juice-acidity"]
    for asked in by_method.values():
        assert asked["protection"] == asked["stirring-and-tip"] == "yes"


def test_a_method_cannot_soften_a_question_of_safety() -> None:
    method = shipped_method("wash-water-alkalinity")
    soft = method.model_copy(
        update={
            "questions": (
                *method.questions,
                type(shipped_method("juice-acidity").questions[0])(
                    key="toxic-gas", text="Go on?", choices=("yes", "no"), must_be=None
                ),
            )
        }
    )
    plan = make_plan(soft, BENCH, SampleChoice(), pump=expected_account(BENCH), probe_identity="p")
    assert [q.must_be for q in plan.questions if q.key == "toxic-gas"] == ["no"]


def test_constants_are_taken_at_the_methods_temperature() -> None:
    method = shipped_method("standardise-sodium-hydroxide").model_copy(update={"temperature_c": 15.0})
    plan = make_plan(method, BENCH, SampleChoice(), pump=expected_account(BENCH), probe_identity="p")
    # phthalic acid at 15 °C: 2.936 and 5.404, computed from Goldberg et al. 2002 (constants from memory)
    assert plan.chemistry.analyte is not None
    assert plan.chemistry.analyte.pka == pytest.approx((2.936, 5.404), abs=5e-4)
    assert plan.chemistry.pkw == pytest.approx(14.346, abs=6e-3)  # Harned and Owen, from memory


def test_without_a_lag_record_the_plan_has_none() -> None:
    bare = BENCH.model_copy(update={"probe": BENCH.probe.model_copy(update={"response": None})})
    plan = make_plan(
        shipped_method("juice-acidity"), bare, SampleChoice(), pump=expected_account(bare), probe_identity="p"
    )
    assert plan.probe.response is None
    assert planned("juice-acidity").probe.response is not None
    assert plan.settling.rule == "lag-corrected"  # the core settles by extrapolation then, and says so


def test_without_a_calibration_a_method_in_ph_is_refused() -> None:
    bare = BENCH.model_copy(update={"probe": BENCH.probe.model_copy(update={"calibration": None})})
    with pytest.raises(HalfdropError, match=r"no calibration.*calibrate probe"):
        make_plan(
            shipped_method("juice-acidity"), bare, SampleChoice(), pump=expected_account(bare), probe_identity="p"
        )


@pytest.mark.parametrize(
    ("name", "choice", "says"),
    [
        ("juice-acidity", SampleChoice(mass_g=1.0), "takes its sample by volume"),
        ("standardise-sodium-hydroxide", SampleChoice(volume_ml=1.0), "takes its sample by mass"),
        ("juice-acidity", SampleChoice(volume_ml=0.0), "above 0"),
        ("juice-acidity", SampleChoice(volume_ml=60.0), "all liquid in the vessel"),
        ("juice-acidity", SampleChoice(initial_volume_ml=float("nan")), "all liquid in the vessel"),
    ],
)
def test_an_amount_that_does_not_fit_is_refused(name: str, choice: SampleChoice, says: str) -> None:
    with pytest.raises(HalfdropError, match=says):
        planned(name, choice)


def test_a_sample_larger_than_the_liquid_in_the_vessel_is_told_as_it_was_typed() -> None:
    with pytest.raises(HalfdropError, match=r"got 1e\+09 mL of sample, allowed: at most 50 mL.*--sample-volume-ml"):
        planned("juice-acidity", SampleChoice(volume_ml=1e9))
    with pytest.raises(HalfdropError, match=r"initial volume: got 20.0 mL.*--initial-volume-ml"):
        planned("juice-acidity", SampleChoice(volume_ml=30.0, initial_volume_ml=20.0))


@pytest.mark.parametrize("sample_id", ["", " ", "x" * 201])
def test_an_id_is_neither_empty_nor_endless(sample_id: str) -> None:
    with pytest.raises(HalfdropError, match=rf"{len(sample_id)} characters, allowed: 1 to 200.*--sample-id"):
        planned("juice-acidity", SampleChoice(sample_id=sample_id))


def test_an_id_of_bytes_that_are_no_text_is_refused() -> None:
    with pytest.raises(HalfdropError, match=r"no text \(not UTF-8\).*--sample-id"):
        planned("juice-acidity", SampleChoice(sample_id="press \udcff"))


@pytest.mark.parametrize("sample_id", ["x" * 200, "Most č. 3 🍏", "=press\x1b[31m"])
def test_any_other_text_is_an_id(sample_id: str) -> None:
    assert planned("juice-acidity", SampleChoice(sample_id=sample_id)).sample.sample_id == sample_id
