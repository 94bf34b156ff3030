"""What a run will be like: bands, curve, warnings, refusals, and the command on methods and solution files."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import pytest

from configs.errors import HalfdropError
from configs.settings import shipped_bench, shipped_method
from controller.cli import main
from controller.commands.predict import is_solution_file, prediction_lines
from controller.foresight.expectation import expected_world, vessel_of_plan
from controller.foresight.expected_trouble import PlacedRefill, jump_mv, jump_warning, plan_problems
from controller.foresight.prediction import coverage_of, predict_run
from controller.planning.runplan import SampleChoice, expected_account, make_plan
from controller.titration.plan import RunPlan
from simulators.equivalence import equivalence_volumes_ml
from simulators.solution import titration_curve

RUNS = 4


def plan_of(method: str = "juice-acidity", **choice: float) -> RunPlan:
    bench = shipped_bench()
    account = expected_account(bench)
    return make_plan(
        shipped_method(method), bench, SampleChoice(**choice), pump=account, probe_identity=account.identity
    )


def with_expected(plan: RunPlan, volume_ml: float | None) -> RunPlan:
    return replace(plan, chemistry=replace(plan.chemistry, expected_equivalence_volume_ml=volume_ml))


def test_39_runs_make_a_95_percent_range():
    # order statistics: a new value lies within the range of n with probability (n - 1)/(n + 1)
    assert coverage_of(39) == pytest.approx(0.95)


def test_prediction_brackets_what_is_expected():
    plan = plan_of()
    # 10 mL at 0.04 mol/L, two protons, 0.0997 mol/L: 8.024 mL by hand
    expected_ml = 10 * 0.04 * 2 / 0.0997
    predicted = predict_run(plan, runs=RUNS, amount_relative_sd=0.0)
    [volume] = predicted.volume_ml
    # the titrant's 0.1 % and the pump's 0.1 % are left
    assert volume.median == pytest.approx(expected_ml, rel=0.004)
    assert predicted.found == 1.0
    assert 10 < predicted.doses.lowest <= predicted.doses.median <= predicted.doses.highest < 60
    assert predicted.titrant_ml.lowest > volume.lowest
    assert predicted.problems == ()


def test_a_prediction_says_what_the_sample_is_taken_to_hold():
    # the drawn worlds hold the analyte alone; the simulated juice's citric acid doubles the uncertainty that runs state
    [told] = [line for line in prediction_lines(predict_run(plan_of(), runs=2)) if "taken to hold" in line]
    assert "no acid or base but malic acid" in told
    assert "uncertainty" in told
    standard = plan_of("standardise-sodium-hydroxide", mass_g=0.15)  # weighed in: it is what it says
    assert predict_run(standard, runs=2).assumption is None
    assert predict_run(plan_of("juice-acidity-to-ph"), runs=2).assumption is None  # interpolated, whatever is in it


def test_prediction_is_a_function_of_plan_and_seed():
    plan = plan_of()
    assert predict_run(plan, runs=2) == predict_run(plan, runs=2)
    assert predict_run(plan, runs=2) != predict_run(plan, runs=2, first_seed=9)


def test_a_well_known_amount_narrows_the_range():
    plan = plan_of()
    narrow = predict_run(plan, runs=RUNS, amount_relative_sd=0.001).volume_ml[0]
    wide = predict_run(plan, runs=RUNS, amount_relative_sd=0.1).volume_ml[0]
    assert narrow.highest - narrow.lowest < 0.1 * (wide.highest - wide.lowest)


@pytest.mark.parametrize("method", ["juice-acidity", "standardise-sodium-hydroxide", "wash-water-alkalinity"])
def test_the_expected_world_has_its_equivalence_where_the_plan_says(method: str):
    plan = plan_of(method)
    expected_ml = plan.chemistry.expected_equivalence_volume_ml
    assert expected_ml is not None
    vessel = vessel_of_plan(plan, equivalence_ml=expected_ml)
    found = equivalence_volumes_ml(vessel.sample, vessel.titrant, plan.sample.initial_volume_ml, vessel.medium)
    assert found[plan.end_points.expected - 1 if method != "juice-acidity" else 1] == pytest.approx(expected_ml)
    world = expected_world(plan, 3, amount_relative_sd=0.0)
    assert world.equivalence_ml == pytest.approx(expected_ml, rel=0.01)


def test_the_curve_is_the_solvers_and_has_a_range():
    plan = plan_of()
    predicted = predict_run(plan, runs=RUNS)
    vessel = vessel_of_plan(plan, equivalence_ml=plan.chemistry.expected_equivalence_volume_ml or 0.0)
    volumes = [point.volume_ml for point in predicted.curve]
    ph = titration_curve(vessel.sample, vessel.titrant, plan.sample.initial_volume_ml, volumes, vessel.medium)
    assert [point.ph.median for point in predicted.curve] == pytest.approx(list(ph), abs=1e-4)
    assert volumes == sorted(volumes)
    assert volumes[0] == 0.0
    assert all(point.ph.lowest <= point.ph.median <= point.ph.highest for point in predicted.curve)


def test_an_end_point_beyond_the_titrant_limit_is_named():
    plan = with_expected(plan_of(), 20.0)
    [problem] = plan_problems(plan)
    assert "beyond the titrant limit of 18 mL" in problem


def test_a_full_vessel_is_named():
    plan = plan_of(initial_volume_ml=80.0)
    assert any("vessel" in problem for problem in plan_problems(plan))


def test_too_dilute_and_too_weak_are_told_apart():
    plan = plan_of("standardise-sodium-hydroxide")
    expected_ml = plan.chemistry.expected_equivalence_volume_ml
    assert expected_ml is not None
    assert jump_warning(plan, expected_ml) is None
    thin = replace(plan, titrant=replace(plan.titrant, concentration_mol_l=2e-4))
    assert "too dilute" in str(jump_warning(thin, expected_ml))
    analyte = plan.chemistry.analyte
    assert analyte is not None
    weak = replace(analyte, pka=(10.5,), charge=0, counter_ion_charge=0, name="some phenol")
    plan = replace(plan, chemistry=replace(plan.chemistry, analyte=weak))
    assert "too weak" in str(jump_warning(plan, expected_ml))


def test_the_jump_is_that_of_the_curve():
    plan = plan_of("standardise-sodium-hydroxide")
    strong = jump_mv(plan, expected_ml=7.0, stronger=10.0)
    assert strong > jump_mv(plan, expected_ml=7.0) > jump_mv(plan, expected_ml=7.0, stronger=0.1) > 0


@pytest.mark.parametrize(("volume_ml", "bad"), [(7.0, False), (7.7, True), (8.0, True), (8.3, True), (9.0, False)])
def test_a_refill_in_the_fine_dosing_is_bad(volume_ml: float, bad: bool):
    assert PlacedRefill(volume_ml=volume_ml, equivalence_ml=8.0).bad is bad


def test_a_refill_near_the_end_point_is_warned_of():
    plan = plan_of()
    plan = replace(plan, pump=replace(plan.pump, contents_ml=8.0))
    predicted = predict_run(plan, runs=RUNS, amount_relative_sd=0.005)
    assert predicted.refills.lowest >= 0
    assert any("filled close to the end point" in warning for warning in predicted.warnings)


def test_a_method_that_expects_nothing_cannot_be_predicted():
    with pytest.raises(HalfdropError, match=r"analyte: the method does not say what is expected"):
        predict_run(with_expected(plan_of(), None), runs=2)


SOLUTION = """\
activity: none
pkw: 14.0
sample:
  volume_ml: 50
  substances:
    - {pka: [4.756], charge: 0, concentration_mol_l: 0.01}
titrant:
  strong_ions:
    - {charge: 1, concentration_mol_l: 0.1}
volumes_ml: [0, 5]
"""


def test_the_command_prints_a_solutions_curve(tmp_path: Path, capsys: pytest.CaptureFixture[str]):
    path = tmp_path / "acetic.yaml"
    path.write_text(SOLUTION)
    assert main(["predict", str(path)]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert lines[0] == "volume_ml,ph"
    # 0.01 mol/L acid of pKa 4.756 alone: h = (-Ka + sqrt(Ka^2 + 4 Ka c))/2, pH 3.387
    assert float(lines[1].split(",")[1]) == pytest.approx(3.387, abs=0.001)
    assert len(lines[2].split(",")[1].replace(".", "")) >= 10


def test_the_command_takes_volumes_from_a_file_and_prints_json(tmp_path: Path, capsys: pytest.CaptureFixture[str]):
    path, volumes = tmp_path / "acetic.yaml", tmp_path / "volumes.txt"
    path.write_text(SOLUTION)
    volumes.write_text("1\n2\n")
    assert main(["predict", str(path), "--volumes", str(volumes), "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["volume_ml"] == [1.0, 2.0]


def test_the_command_predicts_a_method(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
):
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("HALFDROP_LAB", raising=False)
    assert main(["predict", "juice-acidity", "--runs", "3", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["runs"] == 3
    assert {"doses", "duration_s", "titrant_ml", "refills", "curve", "end_points", "warnings"} <= set(document)
    assert main(["predict", "juice-acidity", "--runs", "3"]) == 0
    out = capsys.readouterr().out
    assert "doses: " in out
    assert "min" in out


def test_a_run_that_would_be_refused_has_exit_status_1(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
):
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("HALFDROP_LAB", raising=False)
    assert main(["predict", "juice-acidity", "--runs", "2", "--initial-volume-ml", "80"]) == 1
    assert "the run would be refused" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        (["juice-acidity", "--volumes", "x.txt"], "--volumes belongs to a solution file"),
        (["juice-acidity", "--runs", "1"], "--runs: got 1, allowed: 2 to 1000"),
        (["juice-acidty"], "did you mean"),
        (["none.yaml"], "no such file"),
    ],
)
def test_wrong_use_is_answered(
    arguments: list[str],
    says: str,
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
):
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("HALFDROP_LAB", raising=False)
    assert main(["predict", *arguments]) == 2
    assert says in capsys.readouterr().err


def test_a_sample_option_beside_a_solution_file_is_refused(tmp_path: Path, capsys: pytest.CaptureFixture[str]):
    path = tmp_path / "acetic.yaml"
    path.write_text(SOLUTION)
    assert main(["predict", str(path), "--sample-volume-ml", "5"]) == 2
    assert "belongs to a method" in capsys.readouterr().err


def test_files_are_told_apart_by_what_is_in_them(tmp_path: Path):
    solution, method = tmp_path / "a.yaml", tmp_path / "b.yaml"
    solution.write_text(SOLUTION)
    method.write_text("name: x\nkind: equivalence\nsample: {volume_ml: 3}\n")
    assert is_solution_file(str(solution))
    assert not is_solution_file(str(method))
    assert not is_solution_file("juice-acidity")
