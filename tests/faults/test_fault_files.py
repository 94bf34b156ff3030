"""The fault language: what it takes, what it refuses, and a run under it from the command line."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from configs.errors import SettingsError
from configs.faultfile import FAULT_NAMES, NEEDS, FaultsSettings, load_faults
from configs.loading import parse
from controller.cli import main


def _faults(text: str) -> FaultsSettings:
    return parse(text.encode(), FaultsSettings, where="faults.yaml")


@pytest.mark.parametrize("what", FAULT_NAMES)
def test_every_fault_takes_what_it_needs(what: Any) -> None:
    needs = NEEDS[what]
    device = ", device: probe" if needs.device else ""
    given = "".join(f", {name}: 2" for name in needs.must)
    [fault] = _faults(f"faults:\n  - {{what: {what}, at_s: 5{device}{given}}}").faults
    assert (fault.what, fault.at_s) == (what, 5.0)


@pytest.mark.parametrize(
    ("fault", "told"),
    [
        ("what: silence, at_s: 3, for_s: 2", "with device: pump or probe"),
        ("what: silence, device: pump, at_s: 3", "silence without for_s"),
        ("what: drift, at_s: 3, by_mv_min: 1, device: probe", "without device"),
        ("what: drift, by_mv_min: 1", "drift with no moment"),
        ("what: drift, by_mv_min: 1, at_s: 3, at_dose: 2", "at_s and at_dose"),
        ("what: drift, by_mv_min: 1, chance: 0.5", "with chance"),
        ("what: pump-restart, at_s: 3, by_mv: 2", "by_mv"),
        ("what: bubbel-at-probe, at_s: 3, by_mv: 2", "did you mean bubble-at-probe?"),
        ("what: lost-reply, device: pump, chance: 1.5", "chance"),
    ],
)
def test_what_does_not_fit_is_told(fault: str, told: str) -> None:
    with pytest.raises(SettingsError, match=r"faults\.yaml:2") as refused:
        _faults(f"faults:\n  - {{{fault}}}")
    assert told in str(refused.value)


def test_a_run_under_a_fault_file(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    lab, file = tmp_path / "lab", tmp_path / "faults.yaml"
    file.write_text("faults:\n  - {what: silence, device: pump, at_dose: 3, for_s: 12}\n", encoding="utf-8")
    assert len(load_faults(file).faults) == 1
    assert main(["init", str(lab)]) == 0
    capsys.readouterr()
    arguments = ["run", "juice-acidity", "--lab", str(lab), "--headless", "--json", "--faults", str(file)]
    assert main(arguments) == 0
    result = json.loads(capsys.readouterr().out)
    assert result["outcome"] == "completed"
    [record] = (lab / "runs").glob("*.jsonl")
    assert '"event":"dose-in-doubt","number":3' in record.read_text(encoding="utf-8")


def test_a_bench_file_may_hold_faults(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    lab = tmp_path / "lab"
    assert main(["init", str(lab)]) == 0
    bench = lab / "bench.yaml"
    text = bench.read_text(encoding="utf-8")
    assert text.count("\nsimulation:\n") == 1
    faults = "\nsimulation:\n  faults:\n    faults:\n      - {what: pump-restart, at_dose: 5}\n"
    bench.write_text(text.replace("\nsimulation:\n", faults), encoding="utf-8")
    capsys.readouterr()
    status = main(["run", "juice-acidity", "--lab", str(lab), "--headless", "--json"])
    result = json.loads(capsys.readouterr().out)
    assert status == 3
    assert result["outcome"] == "failed"
    assert result["end_points"] == []
    assert "started anew" in result["reason"]
