"""The probe over days in a lab folder: its lag learned and kept, standing unstored told, predict."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from controller.calibration.probe_record import learned_times, sha256_of
from controller.cli import main
from controller.records.record import list_records, read_record

Run = Callable[..., tuple[int, str, str]]
pytestmark = pytest.mark.usefixtures("own_place")
TRUE_FAST_LAG_S = 3.5  # of the simulated bench: 1.5 s mixing, 2.0 s film


@pytest.fixture
def lab(tmp_path: Path) -> Path:
    folder = tmp_path / "cider-lab"
    assert main(["init", str(folder)]) == 0
    return folder


@pytest.fixture
def halfdrop(halfdrop: Run, lab: Path) -> Run:
    return lambda *arguments: halfdrop(*arguments, "--lab", str(lab))


def header_of(path: Path) -> dict[str, Any]:
    return read_record(path).header


def test_what_runs_learn_is_kept_and_the_fourth_run_starts_from_it(halfdrop: Run, lab: Path) -> None:
    for seed in (1, 2, 3, 4):
        assert halfdrop("run", "juice-acidity", "--seed", str(seed))[0] == 0
    records = list_records(lab / "runs")
    plans = [header_of(path)["plan"]["probe"] for path in records]
    entries = learned_times(lab / "calibrations", plans[0]["identity"])
    assert [one.run for one in entries] == [path.stem for path in records]
    assert all(one.doubt is None for one in entries)
    for one in entries:
        assert abs(one.sum_s - TRUE_FAST_LAG_S) < 3.0 * one.sum_standard_uncertainty_s
    assert [plan["response"]["learned_from"] for plan in plans[:3]] == [[], [], []]
    response = plans[3]["response"]
    assert response["learned_from"] == [path.stem for path in records[:3]]
    assert response["learned_sha256"] == sha256_of(entries[:3])
    assert header_of(records[3])["hashes"]["probe lag learned in runs"] == response["learned_sha256"]
    assert min(one.film_s for one in entries[:3]) <= response["film_s"] <= max(one.film_s for one in entries[:3])
    assert (response["slow_s"], response["slow_share"]) == (30.0, 0.01)  # never learned in a run
    shown = halfdrop("bench", "show")[1]
    assert "fast lag learned in 4 runs" in shown
    told = json.loads(halfdrop("calibrate", "history", "response", "--json")[1])["history"]
    (figures,) = told.values()
    assert figures[0]["quantity"] == "fast lag in runs of juice-acidity"
    assert len(figures[0]["entries"]) == 4
    # the record of the probe is made again from the runs
    for path in (lab / "calibrations" / "probes").glob("*.jsonl"):
        path.unlink()
    halfdrop("run", "juice-acidity", "--seed", "5")
    assert learned_times(lab / "calibrations", plans[0]["identity"])[:4] == entries


def test_a_slowing_probe_is_named_before_the_run_and_on_the_bench(halfdrop: Run, lab: Path) -> None:
    halfdrop("run", "juice-acidity", "--seed", "1")
    (path,) = (lab / "calibrations" / "probes").glob("*.jsonl")
    line = json.loads(path.read_text())
    quick = [
        {**line, "run": f"earlier-{day}", "utc": f"2026-03-{day:02d}T08:00:00Z", "sum_s": 2.5, "film_s": 1.2}
        for day in range(1, 9)
    ]
    path.write_text("".join(json.dumps(one) + "\n" for one in [*quick, line]))
    _, out, _ = halfdrop("run", "juice-acidity", "--seed", "2", "--json")
    words = "the probe is slowing: in the last run of juice-acidity its fast lag was 3.5 s, 1.4 times the 2.5 s"
    assert any(text.startswith(words) for text in json.loads(out)["warnings"])
    again = "the probe is slowing: in the last runs of juice-acidity its fast lag was 3."
    assert again in halfdrop("bench", "show")[1]
    status, ready, _ = halfdrop("bench", "ready")
    assert status == 0
    assert again in ready


def test_a_probe_that_nobody_stored_is_told(halfdrop: Run, lab: Path, tmp_path: Path) -> None:
    answers = tmp_path / "answers.yaml"
    answers.write_text('rinse-and-store: "no"\n', encoding="utf-8")
    _, out, _ = halfdrop("run", "juice-acidity", "--seed", "1", "--answers", str(answers), "--json")
    assert any("was not rinsed and stored" in text for text in json.loads(out)["notes"])
    (record,) = list_records(lab / "runs")
    closing = read_record(record).closing or {}
    assert (closing["probe_stored"], closing["probe_stood_s"]) == ("no", 0.0)
    assert f"has stood in the titrated solution of {record.stem}, pH 9." in halfdrop("bench", "show")[1]
    assert "probe stored: the probe has stood" in halfdrop("bench", "ready")[1]
    answers.write_text('probe-stored: "yes"\n', encoding="utf-8")
    halfdrop("bench", "shut-down", "--answers", str(answers))
    assert "has stood" not in halfdrop("bench", "show")[1]
    answers.write_text('rinse-and-store: "yes"\n', encoding="utf-8")
    _, out, _ = halfdrop("run", "juice-acidity", "--seed", "2", "--answers", str(answers), "--json")
    assert not any("stored" in text for text in json.loads(out)["notes"])


def test_predict_takes_the_calibration_in_force_and_says_so(halfdrop: Run, lab: Path) -> None:
    predict = ("predict", "juice-acidity", "--runs", "2", "--json")
    says = json.loads(halfdrop(*predict)[1])["taken_from"]
    assert says[0] == (
        "probe calibration: none made here is in force; that of the bench file, slope 99.1 %, +3.4 mV at pH 7"
    )
    assert halfdrop("calibrate", "probe", "--seed", "4")[0] == 0
    says = json.loads(halfdrop(*predict)[1])["taken_from"]
    assert says[0].startswith("probe calibration: in force, made ")
    assert "that of the bench file" not in says[0]


def test_an_answer_that_nobody_asks_for_is_said(halfdrop: Run, tmp_path: Path) -> None:
    answers = tmp_path / "answers.yaml"
    answers.write_text('bufer-2: "B7-204"\nrinse-and-store: "yes"\n', encoding="utf-8")
    status, _, err = halfdrop("calibrate", "probe", "--answers", str(answers))
    assert status == 0
    assert "nobody asks 'bufer-2' (did you mean buffer-2" in err
    assert "'rinse-and-store'" not in err


def test_a_standardisation_offers_the_response_check(halfdrop: Run, lab: Path, tmp_path: Path) -> None:
    standard = ("calibrate", "titrant", "standardise-sodium-hydroxide", "--portions", "0.1512")
    _, _, err = halfdrop(*standard)
    assert "The probe's slow layer has never been measured here" in err
    assert "with --response-check" in err
    answers = tmp_path / "answers.yaml"
    answers.write_text('response-check: "yes"\n', encoding="utf-8")
    halfdrop(*standard, "--seed", "6", "--answers", str(answers))
    (plan,) = [
        plan for path in list_records(lab / "calibrations") if (plan := header_of(path)["plan"])["kind"] == "response"
    ]
    assert plan["kind"] == "response"
    assert "response check of " in halfdrop("bench", "show")[1]
