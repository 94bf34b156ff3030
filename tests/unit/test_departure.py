"""A running curve against what its plan expects: nothing is said of a usual run, every departure is named once."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from configs.settings import shipped_bench, shipped_method
from controller.cli import main
from controller.foresight.departure import DepartureWatch
from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan
from controller.labfolder import init_lab
from controller.planning.runplan import SampleChoice, expected_account, make_plan
from controller.records.record import read_record
from controller.replay import replay
from controller.study import StudyWorld, drive, nominal_run
from controller.titration.actions import Report
from controller.titration.plan import RunPlan
from simulators.nominal import nominal_bench

CASES = ("acetic", "malic", "citric", "phosphoric", "dilute-acid")


def point(volume_ml: float, ph: float) -> Report:
    return Report(what="point", volume_ml=volume_ml, delivered_ml=volume_ml, potential_mv=0.0, ph=ph, settled=True)


def forecast(volume_ml: float) -> Report:
    return Report(what="forecast", volume_ml=volume_ml, standard_uncertainty_ml=0.01, end_point=1)


def plan_of(method: str = "juice-acidity") -> RunPlan:
    bench = shipped_bench()
    account = expected_account(bench)
    return make_plan(shipped_method(method), bench, SampleChoice(), pump=account, probe_identity=account.identity)


def watch_of(plan: RunPlan) -> DepartureWatch:
    watch = DepartureWatch.of(plan)
    assert watch is not None
    return watch


@pytest.mark.parametrize("case", CASES)
def test_a_usual_run_departs_from_nothing(case):
    nominal = nominal_bench(case, 4)
    plan = nominal_plan(nominal, MODEL_GUIDED)
    watch = watch_of(plan)
    reports = drive(plan, StudyWorld(nominal.bench).answer).reports
    assert [text for report in reports if (text := watch.saw(report)) is not None] == []
    assert nominal_run(case, 4, MODEL_GUIDED).found > 0


@pytest.mark.parametrize(
    ("reports", "says"),
    [
        pytest.param([point(0.0, 6.4)], "begins at pH 6.40", id="another sample"),
        pytest.param([point(0.0, 2.9), point(0.5, 2.4)], "moved the other way", id="another titrant"),
        pytest.param([point(0.0, 2.9), point(3.0, 2.91)], "have moved pH by only", id="no titrant"),
        pytest.param([point(0.0, 2.9), point(0.5, 15.2)], "outside anything that water can have", id="probe"),
        pytest.param([point(0.0, 2.9), forecast(2.0)], "another amount of sample", id="too little"),
        pytest.param([point(0.0, 2.9), forecast(16.0)], "another amount of sample", id="too much"),
        pytest.param([point(0.0, 3.2), forecast(8.0), point(4.0, 7.2)], "another substance", id="another substance"),
    ],
)
def test_a_departure_is_named_once(reports: list[Report], says: str):
    watch = watch_of(plan_of())
    told = [text for report in [*reports, reports[-1]] if (text := watch.saw(report)) is not None]
    assert len(told) == 1
    assert says in told[0]


def test_an_acid_titrant_must_lower_the_ph():
    watch = watch_of(plan_of("wash-water-alkalinity"))
    assert watch.saw(point(0.0, 10.6)) is None
    assert "pH should fall" in str(watch.saw(point(0.5, 11.2)))


def test_a_plan_that_expects_nothing_has_no_watch():
    plan = plan_of()
    assert DepartureWatch.of(replace(plan, chemistry=replace(plan.chemistry, analyte=None))) is None
    assert DepartureWatch.of(replace(plan, probe=replace(plan.probe, calibration=None))) is None


def test_a_run_of_another_sample_says_so_and_records_it(tmp_path: Path, capsys: pytest.CaptureFixture[str]):
    lab = tmp_path / "lab"
    init_lab(lab)
    method = lab / "methods" / "juice-acidity.yaml"
    method.write_text(
        method.read_text().replace("expected_concentration_mol_l: 0.04", "expected_concentration_mol_l: 0.015")
    )
    main(["run", "juice-acidity", "--lab", str(lab), "--headless", "--json"])
    assert "warning: the end point is predicted at" in capsys.readouterr().err
    [path] = (lab / "runs").glob("*.jsonl")
    record = read_record(path)
    [entry] = record.of("departure")
    assert "another amount of sample" in entry["what"]
    assert replay(record).identical


@pytest.mark.parametrize("after", [False, True], ids=["before it was told", "after it was told"])
def test_a_resumed_run_tells_a_departure_once(after: bool, tmp_path: Path, capsys: pytest.CaptureFixture[str]):
    lab = tmp_path / "lab"
    init_lab(lab)
    method = lab / "methods" / "juice-acidity.yaml"
    method.write_text(
        method.read_text().replace("expected_concentration_mol_l: 0.04", "expected_concentration_mol_l: 0.015")
    )
    main(["run", "juice-acidity", "--lab", str(lab), "--headless", "--json"])
    [path] = (lab / "runs").glob("*.jsonl")
    lines = path.read_bytes().splitlines(keepends=True)
    [told] = [number for number, line in enumerate(lines) if b'"event":"departure"' in line]
    path.write_bytes(b"".join(lines[: told + 30 if after else told - 30]))
    capsys.readouterr()
    assert main(["resume", path.stem, "--lab", str(lab), "--headless", "--json"]) in (0, 1)
    assert ("warning: the end point is predicted at" in capsys.readouterr().err) is not after
    [entry] = read_record(path).of("departure")
    assert "another amount of sample" in entry["what"]
    assert replay(read_record(path)).identical
