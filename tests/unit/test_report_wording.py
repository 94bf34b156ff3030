"""Numbers, times, tables and cautions of a report, and evaluations kept beside a record."""

from __future__ import annotations

import json
import math
from pathlib import Path

import pytest

from configs.errors import HalfdropError
from controller.commands.lines import result_lines
from controller.commands.output import chance_text
from controller.records.reevaluation import add_evaluation, added_evaluations
from controller.report.budget import budget_table
from controller.report.calibrations import traceability
from controller.report.cautions import cautions_of
from controller.report.page import render
from controller.report.tables import doses, estimators, half_equivalence, incidents, questions, replicates
from controller.report.wording import facts_of, local_time, number, span, with_uncertainty, words_of

HEADER = {"record": "halfdrop run", "record_version": 1, "header": {"lab_utc_offset": "+01:00", "plan": {}}}


@pytest.mark.parametrize(
    ("utc", "offset", "shown"),
    [
        pytest.param("2026-12-01T23:30:00.271Z", "+01:00", "2026-12-02 00:30:00 +01:00", id="next day"),
        pytest.param("2026-03-01T00:10:00Z", "-03:30", "2026-02-28 20:40:00 -03:30", id="half hours"),
        pytest.param("2026-12-01T23:30:00", None, "2026-12-01 23:30:00 +00:00", id="no offset known"),
        pytest.param("2026-12-01T23:30:00Z", "nonsense", "2026-12-01 23:30:00 +00:00", id="offset is nonsense"),
        pytest.param("last Tuesday", "+01:00", "last Tuesday", id="no time"),
        pytest.param(None, "+01:00", "–", id="nothing"),
    ],
)
def test_times_are_local_with_their_offset(utc: str | None, offset: str | None, shown: str) -> None:
    assert local_time(utc, offset) == shown


@pytest.mark.parametrize(
    ("value", "places", "shown"),
    [
        (-12.345, 2, "−12.35"),
        (-0.00001, 2, "0.00"),
        (1e-7, None, "1e-07"),
        (None, 2, "–"),
        (True, 0, "–"),
        (math.inf, None, "infinite"),
        (7.32281, 4, "7.3228"),
    ],
)
def test_numbers_have_a_decimal_point_and_a_true_minus(value: float | None, places: int | None, shown: str) -> None:
    assert number(value, places) == shown


def test_a_value_has_the_digits_that_its_uncertainty_allows() -> None:
    # GUM 7.2.6: two significant digits of the uncertainty at most, the value to the same place
    assert with_uncertainty(4.89476, 0.00912) == ("4.8948", "0.0091")
    assert with_uncertainty(675.63, 1.04) == ("675.6", "1.0")
    assert with_uncertainty(10.0, 0.0) == ("10", "–")


def test_settings_keys_become_words_with_units() -> None:
    assert words_of("smallest_ml") == ("smallest", "mL")
    assert words_of("lowest_ph") == ("lowest pH", "")
    assert words_of("rate_ml_min") == ("rate", "mL/min")
    assert words_of("calibrated_utc") == ("calibrated", "")
    facts = facts_of({"rate_ml_min": 5.0, "sensor": {"offset_mv": -1.5}, "acid": False, "none": None}, None)
    assert facts == [("rate", "5 mL/min"), ("sensor: offset", "−1.5 mV"), ("acid", "no")]


def test_lengths_of_time() -> None:
    assert span(275.0) == "4 min 35 s"
    assert span(3725.0) == "1 h 2 min 5 s"
    assert span(12.0) == "12 s"


def test_the_budget_shows_contributions_until_there_is_a_table() -> None:
    amount = {
        "unit": "g/L",
        "standard_uncertainty": 0.05,
        "coverage_factor": 2.0,
        "contributions": {"small": 0.03, "large": -0.04},
    }
    table = budget_table(amount)
    assert table is not None
    assert table.rows == (
        ("large", "0.0400", "64.0 %"),
        ("small", "0.0300", "36.0 %"),
        ("combined standard uncertainty", "0.0500", "100 %"),
    )
    assert "k = 2" in table.note
    assert budget_table(None) is None


def test_the_whole_budget_is_shown_with_its_monte_carlo() -> None:
    row = {
        "quantity": "burette gain", "value": 1.0, "unit": "1", "standard_uncertainty": 0.001, "distribution": "normal",
        "degrees_of_freedom": None, "sensitivity": 4.893, "contribution": -0.004893, "share": 0.36,
        "shared_id": "burette 7 gain",
    }  # fmt: skip
    check = {
        "value": 4.89,
        "standard_uncertainty": 0.0081,
        "interval": [4.87, 4.91],
        "trials": 1000,
        "agrees": False,
        "given_interval": [4.8723, 4.9077],
        "width_ratio": 1.13,
        "fewest_degrees_of_freedom": 3.0,
        "coverage_probability": 0.95,
    }
    whole = {"rows": [row], "monte_carlo": check, "coverage_probability": 0.95, "degrees_of_freedom": 12.0}
    table = budget_table({"unit": "g/L", "standard_uncertainty": 0.0081, "coverage_factor": 2.18, "budget": whole})
    assert table is not None
    assert table.rows[0] == ("burette gain", "1.0000", "0.0010", "1", "normal", "∞", "4.89", "0.00489", "36.0 %")
    assert "95 % interval 4.87000 to 4.91000; 13 % wider than the given one (4.87230 to 4.90770)." in table.note
    assert "only 3 degrees of freedom" in table.note
    assert "make more replicates" in table.note
    assert "burette gain (burette 7 gain)" in table.note
    assert "12 effective degrees of freedom" in table.note


def test_a_biased_half_equivalence_ph_is_called_no_pka() -> None:
    half = {"volume_ml": 2.5, "ph": 3.14, "pka": 3.0, "pka_standard_uncertainty": 0.01, "plain_bias": 0.14}
    (row,) = half_equivalence({"half_equivalence": [half]}).rows
    assert row == (
        "2.500",
        "3.14",
        "0.140",
        "3.000",
        "0.010",
        "the plain pH half-way is no pKa here: its bias exceeds 0.02",
    )
    (row,) = half_equivalence({"half_equivalence": [{**half, "plain_bias": 0.01}]}).rows
    assert row[-1] == ""


def test_estimators_keep_their_uncertainty_only_for_the_same_end_point() -> None:
    result = {"end_points": [{"volume_ml": 7.3}], "estimators": {"inverse model": [7.301]}}
    detail = {"estimator": "inverse model", "volume_ml": 7.301, "standard_uncertainty_ml": 0.002}
    same = {"end_points": [{"volume_ml": 7.3}], "estimates": [[detail]]}
    other = {"end_points": [{"volume_ml": 7.4}], "estimates": [[detail]]}
    assert estimators(result, same).rows == (("1", "inverse model", "7.3010", "0.0020", "1.0", ""),)
    assert estimators(result, other).rows == (("1", "inverse model", "7.3010", "–", "1.0", ""),)


def test_replicates_report_an_outlier_and_drop_nothing() -> None:
    # Grubbs' critical values, two-sided 5 %, n = 6: 1.887 (ISO 5725-2 table, from memory)
    values = [10.01, 10.02, 10.00, 9.99, 10.01, 10.30]
    amounts = [{"value": v, "standard_uncertainty": 0.01, "unit": "g/L"} for v in values]
    found = replicates([(f"run {i}", amount) for i, amount in enumerate(amounts)])
    assert found is not None
    table, said = found
    assert len(table.rows) == 6
    assert "1.887" in said[1]
    assert "an outlier at 5 %; it is reported, not dropped" in said[1]
    assert "Mean of 6" in said[0]
    assert replicates([("one", amounts[0])]) is None
    gone = replicates([("one", amounts[0]), ("two", None)])
    assert gone is not None
    assert gone[1] == ["No mean: fewer than two runs have an amount."]


def test_questions_doses_and_incidents_come_from_the_entries() -> None:
    entries = [
        {"action": "ask", "key": "tip", "text": "Tip immersed?", "run_s": 0.0},
        {"observation": "answered", "key": "tip", "answer": "yes", "run_s": 65.0},
        {"action": "ask", "key": "rinse", "text": "Rinsed?", "run_s": 70.0},
        {"action": "dose", "number": 1, "volume_ml": 0.2, "reason": "first", "run_s": 71.0},
        {"observation": "dosed", "number": 1, "volume_ml": 0.1995, "run_s": 75.0},
        {"action": "dose", "number": 2, "volume_ml": 0.2, "reason": "second", "run_s": 80.0},
        {
            "observation": "failed",
            "device": "pump",
            "what": "no reply",
            "lowest_ml": 0.0,
            "highest_ml": 0.2,
            "run_s": 81.0,
        },
        {"event": "pump-stop", "why": "device failure", "confirmed": False, "run_s": 82.0},
    ]
    assert questions(entries).rows == (("Tip immersed?", "yes", "1:05"), ("Rinsed?", "not answered", "1:10"))
    assert doses(entries).rows == (("1", "1:15", "0.1995", "0.1995", "first"),)
    failed, stopped = incidents(entries).rows
    assert failed == ("1:21", "device failed", "pump; no reply; lowest: 0 mL; highest: 0.2 mL")
    assert stopped == ("1:22", "pump stopped", "device failure; confirmed: no")


def test_cautions_follow_the_titrant() -> None:
    base = cautions_of({"titrant": {"acid": False}})
    acid = cautions_of({"titrant": {"acid": True}, "chemistry": {"analyte": {"name": "sodium carbonate"}}})
    assert base[0].startswith("Safety data sheets")
    assert any("hypochlorite" in text for text in acid)
    assert not any("hypochlorite" in text for text in base)
    assert any("foams" in text for text in acid)


def test_a_page_needs_every_part() -> None:
    with pytest.raises(Exception, match="undefined"):
        render({"title": "only a title"})


def record_file(folder: Path, name: str = "2026-run") -> Path:
    path = folder / f"{name}.jsonl"
    path.write_text(json.dumps(HEADER) + "\n", encoding="utf-8")
    return path


def test_evaluations_are_numbered_and_never_overwritten(tmp_path: Path) -> None:
    record = record_file(tmp_path)
    record_file(tmp_path, "2026-run.evaluation-7")  # a record with a name of the kind is no evaluation
    result = {"end_points": [], "value": math.nan}
    paths = [add_evaluation(record, result, evaluated_utc="2026-12-01T10:00:00Z", reason=None) for _ in range(3)]
    paths[1].unlink()
    paths.append(add_evaluation(record, result, evaluated_utc="2026-12-01T11:00:00Z", reason="again"))
    assert [path.name for path in paths] == [f"2026-run.evaluation-{i}.json" for i in (1, 2, 3, 4)]
    found = added_evaluations(record)
    assert [one.number for one in found] == [1, 3, 4]
    assert found[-1].content["reason"] == "again"
    assert found[-1].content["result"]["value"] is None
    assert found[-1].content["record_state"] == "edited"  # the little record here has no chain of hashes
    assert {one.state for one in found} == {"intact"}


@pytest.mark.parametrize("offset", range(0, 700, 23))
def test_an_edit_of_an_evaluation_is_found(tmp_path: Path, offset: int) -> None:
    record = record_file(tmp_path)
    path = add_evaluation(
        record, {"end_points": [{"volume_ml": 7.3}]}, evaluated_utc="2026-12-01T10:00:00Z", reason="why not" * 20
    )
    data = bytearray(path.read_bytes())
    data[offset % len(data)] ^= 1
    path.write_bytes(data)
    (found,) = added_evaluations(record)
    assert found.state == "edited"


def test_an_evaluation_tells_that_its_record_has_changed(tmp_path: Path) -> None:
    record = record_file(tmp_path)
    add_evaluation(record, {"end_points": []}, evaluated_utc="2026-12-01T10:00:00Z", reason=None)
    with record.open("a", encoding="utf-8") as file:
        file.write("{}\n")
    (found,) = added_evaluations(record)
    assert found.state == "other record"


def test_an_evaluation_that_cannot_be_written_says_so(tmp_path: Path) -> None:
    with pytest.raises(HalfdropError, match="cannot be read"):
        add_evaluation(tmp_path / "none.jsonl", {}, evaluated_utc="2026-12-01T10:00:00Z", reason=None)


def test_a_probability_is_never_told_as_certain() -> None:
    assert chance_text(1.0) == "> 99.9 %"
    assert chance_text(0.0) == "< 0.1 %"
    assert chance_text(0.4936) == "49.4 %"


def test_lines_for_people_show_the_plain_ph_beside_the_pka() -> None:
    result = {"outcome": "completed", "reason": None, "end_points": [], "warnings": []}
    half = {"volume_ml": 2.5, "ph": 3.135, "pka": 3.0, "plain_bias": 0.135}
    (line,) = [one for one in result_lines({**result, "half_equivalence": [half]}) if "pKa" in one]
    assert line.endswith("(plain pH there 3.13, +0.14 from it: too far to stand for the pKa)")
    (line,) = [
        one for one in result_lines({**result, "half_equivalence": [{**half, "plain_bias": 0.01}]}) if "pKa" in one
    ]
    assert line.endswith("+0.01 from it)")


def test_a_pka_that_is_not_brought_to_infinite_dilution_says_so() -> None:
    half = {"volume_ml": 2.5, "ph": 5.21, "pka": 5.2156, "conditional_pka": 5.2156, "plain_bias": -0.002}
    (row,) = half_equivalence({"half_equivalence": [{**half, "pka_standard_uncertainty": 0.007}]}).rows
    assert row[-1].startswith("at this ionic strength; activities not corrected")
    (row,) = half_equivalence({"half_equivalence": [{**half, "pka": 5.41}]}).rows
    assert "ionic strength" not in row[-1]


def test_a_weighing_is_named_only_where_something_was_weighed() -> None:
    trace = {"weighing": {"balance_id": "balance 1", "air_density_kg_m3": 1.2}}
    titles = [title for title, _ in traceability({"traceability": trace, "sample": {"mass_g": None}}, "+00:00")]
    assert titles == []
    titles = [title for title, _ in traceability({"traceability": trace, "sample": {"mass_g": 0.15}}, "+00:00")]
    assert titles == ["Weighing taken into account"]


def test_the_course_of_a_blank_is_told_in_words() -> None:
    course = [{"ph": 4.5, "volume_ml": 0.0154149}, {"ph": 4.6, "volume_ml": 0.0124315}]
    [(_, facts)] = traceability({"traceability": {"blank": {"lot_id": "b1", "course": course}}}, "+00:00")
    assert dict(facts)["its course"] == "0.0154 mL to pH 4.5, 0.0124 mL to pH 4.6"


def test_one_cause_of_several_quantities_has_no_unit_of_its_own() -> None:
    row = {
        "quantity": "gain of one burette in titrant and sample", "value": None, "unit": "mol/L",
        "standard_uncertainty": None, "distribution": "normal", "degrees_of_freedom": None, "sensitivity": None,
        "contribution": 1e-6, "share": 0.0, "shared_id": "burette", "members": ["a", "b"],
    }  # fmt: skip
    rows = [row, {**row, "quantity": "end point", "sensitivity": 1.0, "unit": "mL", "standard_uncertainty": 0.001}]
    whole = {"rows": rows, "coverage_probability": 0.95, "degrees_of_freedom": None}
    table = budget_table({"unit": "g/L", "standard_uncertainty": 0.01, "coverage_factor": 1.96, "budget": whole})
    assert table is not None
    assert [line[3] for line in table.rows[:2]] == ["–", "mL"]
