"""halfdrop resume at the command line: a simulated bench brought back, refusals with their reasons, a served bench."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import pytest

from controller.cli import main
from controller.labfolder import init_lab
from controller.records.record import read_record
from controller.records.verification import verify
from controller.replay import replay
from controller.titration.actions import Decisions, Dose
from controller.titration.core import titrate
from controller.titration.plan import RunPlan


@pytest.fixture(scope="module")
def lab(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("resume") / "lab"
    init_lab(folder)
    return folder


@pytest.fixture(scope="module")
def whole(lab: Path) -> bytes:
    """The record of a whole run, taken out of the lab folder."""
    assert main(["run", "juice-acidity", "--lab", str(lab), "--headless", "--json"]) == 0
    [path] = lab.glob("runs/*.jsonl")
    data = path.read_bytes()
    path.unlink()
    return data


def broken(lab: Path, data: bytes) -> Path:
    path = lab / "runs" / "2026-05-04T080000Z-broken.jsonl"
    path.write_bytes(data)
    return path


def told(path: Path) -> list[dict[str, object]]:
    """The dialogue as the record holds it, less what belongs to its lines."""
    own = {"line", "utc", "run_s", "previous_sha256"}
    return [
        {key: value for key, value in entry.items() if key not in own}
        for entry in read_record(path).entries
        if "by" not in entry and "event" not in entry
    ]


@pytest.mark.parametrize("share", [0.06, 0.3, 0.77, 0.95])
def test_a_run_on_a_simulated_bench_goes_on(lab: Path, whole: bytes, share: float, capsys: pytest.CaptureFixture[str]):
    data = whole[: int(share * len(whole))]
    path = broken(lab, data)
    assert main(["resume", path.stem, "--lab", str(lab), "--headless", "--json"]) == 0
    result = json.loads(capsys.readouterr().out)
    uninterrupted = json.loads(whole.splitlines()[-1])["closing"]["result"]["end_points"][0]
    [end_point] = result["end_points"]
    uncertainty_ml = end_point["standard_uncertainty_ml"]
    assert abs(end_point["volume_ml"] - uninterrupted["volume_ml"]) < 3.0 * 2.0**0.5 * uncertainty_ml
    assert uncertainty_ml <= 1.5 * uninterrupted["standard_uncertainty_ml"]
    assert verify(path).state == "intact"
    assert path.read_bytes().startswith(data)
    assert replay(read_record(path)).identical
    before = broken(lab, data)
    kept = told(before)
    path.unlink()
    assert kept == [item for item, _ in zip(_of(whole, lab), kept, strict=False)]


def _of(whole: bytes, lab: Path) -> list[dict[str, object]]:
    path = lab / "whole.jsonl"
    path.write_bytes(whole)
    return told(path)


def test_evaluate_only_ends_it(lab: Path, whole: bytes, capsys: pytest.CaptureFixture[str]):
    path = broken(lab, whole[: int(0.9 * len(whole))])
    assert main(["resume", path.stem, "--lab", str(lab), "--headless", "--evaluate-only", "--json"]) in (1, 3, 0)
    result = json.loads(capsys.readouterr().out)
    assert result["outcome"] == "stopped"
    assert "ended by the operator after it broke off" in result["reason"]
    assert verify(path).state == "intact"
    path.unlink()


def test_a_touched_beaker_ends_the_run(lab: Path, whole: bytes, tmp_path: Path, capsys: pytest.CaptureFixture[str]):
    path = broken(lab, whole[: int(0.5 * len(whole))])
    answers = tmp_path / "answers.yaml"
    answers.write_text("beaker-touched: yes\n")
    main(["resume", path.stem, "--lab", str(lab), "--headless", "--answers", str(answers), "--json"])
    result = json.loads(capsys.readouterr().out)
    assert result["outcome"] == "stopped"
    assert "Answered 'yes'" in result["reason"]
    doses = [entry["number"] for entry in read_record(path).of("dose")]
    assert len(doses) == len(set(doses))
    path.unlink()


def _edited(whole: bytes) -> bytes:
    return whole[: len(whole) // 2].replace(b'"potential_mv":', b'"potential_mv": ', 1)


@pytest.mark.parametrize(
    ("make", "says"),
    [
        pytest.param(lambda whole: whole, "it is closed: the run has its end", id="closed"),
        pytest.param(_edited, "it was edited", id="edited"),
        pytest.param(lambda whole: b"volume_ml,ph\n0,3.2\n", "not a run record", id="foreign"),
        pytest.param(
            lambda whole: whole[:100_000].replace(b'"record_version":1', b'"record_version":9'),
            "record version 9; this program reads up to 1",
            id="newer record",
        ),
        pytest.param(lambda whole: whole[:300], "breaks off in its first line: nothing was begun", id="torn header"),
        pytest.param(lambda whole: b"", "nothing was begun", id="empty"),
    ],
)
def test_what_cannot_be_resumed_is_refused_and_left_alone(
    make, says: str, lab: Path, whole: bytes, capsys: pytest.CaptureFixture[str]
):
    data = make(whole)
    path = broken(lab, data)
    assert main(["resume", path.stem, "--lab", str(lab), "--headless"]) == 2
    assert says in capsys.readouterr().err
    assert path.read_bytes() == data
    path.unlink()


def test_a_newer_plan_is_refused(lab: Path, whole: bytes, capsys: pytest.CaptureFixture[str]):
    first, _, _ = whole.partition(b"\n")
    newer = first.replace(b'"plan":{"schema_version":2', b'"plan":{"schema_version":7')
    assert newer != first
    path = broken(lab, newer + b"\n")
    assert main(["resume", path.stem, "--lab", str(lab), "--headless"]) == 2
    assert "schema_version is 7" in capsys.readouterr().err
    path.unlink()


def test_another_decision_is_refused_with_the_first_difference(
    lab: Path, whole: bytes, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
):
    def wordier(plan: RunPlan) -> Decisions:
        decisions = titrate(plan)
        action = next(decisions)
        while True:
            action = decisions.send((yield replace(action, reason="!") if isinstance(action, Dose) else action))

    path = broken(lab, whole[: int(0.5 * len(whole))])
    monkeypatch.setattr("controller.replay.titrate", wordier)
    assert main(["resume", path.stem, "--lab", str(lab), "--headless"]) == 2
    assert "this program decides otherwise at line" in capsys.readouterr().err
    path.unlink()
