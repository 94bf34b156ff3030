"""RunPlan to JSON and back."""

from __future__ import annotations

import json
from collections.abc import Callable
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from configs.errors import SettingsError
from controller.records.encoding import PlanVersionError, plan_from_json, plan_to_json
from controller.titration.plan import RunPlan

MakePlan = Callable[..., RunPlan]


def test_a_plan_comes_back_as_it_was(plan: RunPlan) -> None:
    assert plan_from_json(json.loads(json.dumps(plan_to_json(plan)))) == plan


@given(st.floats(allow_nan=False, allow_infinity=False), st.text(), st.integers() | st.none())
def test_every_number_and_text_comes_back_exactly(make_plan: MakePlan, number: float, text: str, seed: Any) -> None:
    plan = make_plan(limits={"titrant_ml": number}, sample={"sample_id": text}, seed=seed)
    assert plan_from_json(json.loads(json.dumps(plan_to_json(plan)))) == plan


def test_parts_that_may_be_absent_come_back_as_none(make_plan: MakePlan) -> None:
    plan = make_plan(report_as=None, questions=(), probe={"calibration": None, "response": None})
    assert plan_from_json(plan_to_json(plan)) == plan


def changed(plan: RunPlan, path: str, value: Any) -> dict[str, Any]:
    data: Any = json.loads(json.dumps(plan_to_json(plan)))
    inner, *keys = data, *path.split(".")
    for key in keys[:-1]:
        inner = inner[int(key) if key.isdigit() else key]
    inner[keys[-1]] = value
    return data


@pytest.mark.parametrize(
    ("path", "value", "text"),
    [
        ("sample.initial_volume_ml", "50", "header: sample.initial_volume_ml: got '50', allowed:"),
        ("sample.initial_volume_ml", True, "header: sample.initial_volume_ml: got True"),
        ("pump.start_count", 1.5, "header: pump.start_count: got 1.5"),
        ("dosing.policy", "cautious", "dosing.policy: got 'cautious', allowed: Input should be 'model-guided'"),
        ("sample.volumme_ml", 1.0, "header: sample.volumme_ml: unknown key; did you mean volume_ml?"),
        ("questions.0.answer", "yes", "header: questions.0.answer: unknown key"),
        ("chemistry.analyte.colour", "red", "header: chemistry.analyte.colour: unknown key"),
        ("colour", "red", "header: colour: unknown key"),
        ("titrant", None, "header: titrant: got None"),
        ("limits.titrant_ml", float("inf"), "finite numbers"),
        ("limits.titrant_ml", float("nan"), "finite numbers"),
    ],
)
def test_what_is_wrong_is_named(plan: RunPlan, path: str, value: Any, text: str) -> None:
    with pytest.raises(SettingsError) as caught:
        plan_from_json(changed(plan, path, value), where="header")
    assert text in str(caught.value)


def test_all_problems_come_at_once(plan: RunPlan) -> None:
    data = changed(plan, "sample.initial_volume_ml", "50")
    del data["titrant"]["name"]
    data["colour"] = "red"
    with pytest.raises(SettingsError) as caught:
        plan_from_json(data)
    assert sorted(caught.value.problems)[0] == "plan: colour: unknown key"
    assert len(caught.value.problems) == 3
    assert "plan: titrant.name: missing" in caught.value.problems


def test_a_newer_plan_is_refused_clearly(plan: RunPlan) -> None:
    with pytest.raises(PlanVersionError, match="schema_version is 3; this program knows up to 2"):
        plan_from_json(changed(plan, "schema_version", 3))


@pytest.mark.parametrize("data", [None, [], "plan", 3])
def test_what_is_no_object_is_refused(data: Any) -> None:
    with pytest.raises(SettingsError, match="allowed: a JSON object"):
        plan_from_json(data)
