"""Wrong settings, one by one: file, line, column, key, what was got and what is allowed."""

from __future__ import annotations

import pytest

from configs.errors import SettingsError
from configs.fields import Settings
from configs.loading import parse
from configs.method import MethodSettings

METHOD = """\
name: juice
title: Acidity of pressed juice
sample: {taken_by: volume, initial_volume_ml: 50}
titrant:
  substance: sodium hydroxide
  concentration_mol_l: 0.1
"""


def problems(text: str, model: type[Settings] = MethodSettings) -> list[str]:
    with pytest.raises(SettingsError) as caught:
        parse(text.encode(), model, where="m.yaml")
    return caught.value.problems


def test_the_text_that_the_cases_start_from_is_right() -> None:
    assert parse(METHOD.encode(), MethodSettings, where="m.yaml").name == "juice"


@pytest.mark.parametrize(
    ("added", "problem"),
    [
        pytest.param(
            "dosing: {largest_ml: 300}",
            "m.yaml:7:22: dosing.largest_ml: got 300, allowed: 0.001 to 10 mL",
            id="out of range, with the unit",
        ),
        pytest.param(
            "limits: {run_time_s: 1}",
            "m.yaml:7:22: limits.run_time_s: got 1, allowed: 10 to 86400 s",
            id="below the range",
        ),
        pytest.param(
            "limits: {titrant_ml: 0}",
            "m.yaml:7:22: limits.titrant_ml: got 0, allowed: above 0 up to 1000 mL",
            id="range that is open below",
        ),
        pytest.param(
            "temperature_c: 61", "m.yaml:7:16: temperature_c: got 61, allowed: 0 to 60 °C", id="temperature unit"
        ),
        pytest.param(
            "dosing: {slope_step_mv: true}",
            "m.yaml:7:25: dosing.slope_step_mv: got true, allowed: 1 to 100 mV",
            id="true is no number",
        ),
        pytest.param(
            'dosing: {slope_step_mv: "8"}',
            'm.yaml:7:25: dosing.slope_step_mv: got "8", allowed: 1 to 100 mV',
            id="text is no number",
        ),
        pytest.param(
            "dosing: {slope_step_mv: '8,5'}",
            'm.yaml:7:25: dosing.slope_step_mv: got "8,5", allowed: 1 to 100 mV (with a decimal point: 8.5)',
            id="decimal comma",
        ),
        pytest.param(
            "dosing: {slope_step_mv: }",
            "m.yaml:7:25: dosing.slope_step_mv: got nothing, allowed: 1 to 100 mV",
            id="no value",
        ),
        pytest.param(
            "end_points: {expected: 1.0}",
            "m.yaml:7:24: end_points.expected: got 1.0, allowed: whole number 1 to 6, without a decimal point",
            id="no whole number",
        ),
        pytest.param(
            "end_points: {expected: true}",
            "m.yaml:7:24: end_points.expected: got true, allowed: whole number 1 to 6",
            id="true is no whole number",
        ),
        pytest.param(
            "end_points: {stop_at_last: 1}",
            "m.yaml:7:28: end_points.stop_at_last: got 1, allowed: true or false",
            id="1 is not true",
        ),
        pytest.param(
            "schema_version: 2", "m.yaml:7:17: schema_version: got 2, allowed: 1", id="another version of the form"
        ),
        pytest.param(
            "schema_version: true", "m.yaml:7:17: schema_version: got true, allowed: 1", id="true is no version"
        ),
        pytest.param(
            "dosing: {policy: model_guided}",
            'm.yaml:7:18: dosing.policy: got "model_guided", allowed: model-guided | slope-adaptive | equal-volumes '
            "(did you mean model-guided?)",
            id="word that is not one of the choices",
        ),
        pytest.param(
            "dosing: {smalest_ml: 0.01}",
            "m.yaml:7:10: dosing.smalest_ml: got an unknown key (did you mean smallest_ml?), allowed: policy, "
            "smallest_ml, largest_ml, largest_past_equivalence_ml, model_step_mv, slope_step_mv, growth_limit, "
            "equal_volume_ml, first_dose_ml",
            id="mistyped key",
        ),
        pytest.param(
            "analyte: {substance: malik acid}",
            'm.yaml:7:22: analyte.substance: got "malik acid" (did you mean malic acid?), '
            "allowed: a name of the catalogue of substances",
            id="mistyped substance",
        ),
        pytest.param(
            "analyte: {substance: 12}",
            "m.yaml:7:22: analyte.substance: got 12, allowed: a name of the catalogue of substances",
            id="number for a substance",
        ),
        pytest.param(
            "simulated_sample: 2026",
            'm.yaml:7:19: simulated_sample: got 2026, allowed: text of 1 to 200 characters (in quotes: "2026")',
            id="number for a text",
        ),
        pytest.param(
            "settling: lag-corrected",
            'm.yaml:7:11: settling: got "lag-corrected", allowed: the keys rule, shortest_s, longest_s, '
            "stability_limit_mv_min, stability_readings, fixed_wait_s",
            id="word for a group",
        ),
        pytest.param(
            "settling: {rule: NO}",
            "m.yaml:7:18: settling.rule: got NO (a yes-or-no word to YAML), allowed: "
            "lag-corrected | extrapolated | stability-limit | fixed-wait",
            id="yes-or-no word, told once",
        ),
        pytest.param(
            "temperature_c: no",
            "m.yaml:7:16: temperature_c: got no (a yes-or-no word to YAML), allowed: 0 to 60 °C",
            id="yes-or-no word where a number belongs",
        ),
        pytest.param(
            "limits: {run_time_s: 12:30}",
            "m.yaml:7:22: limits.run_time_s: got 12:30 (a number to base 60 to YAML), allowed: 10 to 86400 s",
            id="time of day",
        ),
        pytest.param(
            "limits: {titrant_ml: .inf}",
            "m.yaml:7:22: limits.titrant_ml: got .inf (no finite number), allowed: above 0 up to 1000 mL",
            id="infinity",
        ),
        pytest.param(
            "title: again",
            "m.yaml:7:1: title: got the key a second time, allowed: once (it first stands in line 2)",
            id="key twice",
        ),
        pytest.param(
            "questions: [{key: Is it, text: a}]",
            'm.yaml:7:19: questions[1].key: got "Is it", allowed: small letters, digits and hyphens, at most 64',
            id="name that is not plain",
        ),
        pytest.param(
            "questions: [{key: a, text: b, choices: []}]",
            "m.yaml:7:40: questions[1].choices: got a list of 0, allowed: a list of 1 to 10 entries",
            id="list that is too short",
        ),
        pytest.param("questions: 3", "m.yaml:7:12: questions: got 3, allowed: a list of 0 to 20 entries", id="no list"),
        pytest.param(
            '"\\e[31mred": 1',
            "m.yaml:7:1: ?[31mred: got an unknown key, allowed: schema_version, name,",
            id="escape codes do not reach the terminal",
        ),
    ],
)
def test_wrong_setting_is_told_with_place_and_allowed(added: str, problem: str) -> None:
    found = problems(METHOD + added + "\n")
    assert len(found) == 1
    assert found[0].startswith(problem) if problem.endswith(",") else found[0] == problem


@pytest.mark.parametrize(
    ("changed", "into", "problem"),
    [
        pytest.param(
            "title: Acidity of pressed juice\n",
            "",
            "m.yaml:1:1: title: got nothing, allowed: text of 1 to 200 characters",
            id="missing at the top: the file's first place",
        ),
        pytest.param(
            "  concentration_mol_l: 0.1\n",
            "",
            "m.yaml:4:1: titrant.concentration_mol_l: got nothing, allowed: 0.0001 to 5 mol/L",
            id="missing in a group: the group's place",
        ),
    ],
)
def test_missing_setting_is_told_where_it_belongs(changed: str, into: str, problem: str) -> None:
    assert problems(METHOD.replace(changed, into)) == [problem]
