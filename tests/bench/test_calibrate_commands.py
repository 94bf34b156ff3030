"""The calibrate commands on the simulated bench: standards, blanks, carbonate, readings from a file, refusals."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import pytest

from configs.water import z_factor_ul_mg
from controller.cli import main
from controller.records.record import list_records

Run = Callable[..., tuple[int, str, str]]
pytestmark = pytest.mark.usefixtures("own_place")
HCL_MOL_L = 0.1002  # the simulated bench's hydrochloric acid


@pytest.fixture
def lab(tmp_path: Path) -> Path:
    folder = tmp_path / "cider-lab"
    assert main(["init", str(folder)]) == 0
    return folder


@pytest.fixture
def halfdrop(halfdrop: Run, lab: Path) -> Run:
    return lambda *arguments: halfdrop(*arguments, "--lab", str(lab))


@pytest.mark.parametrize(
    ("method", "portions"),
    [
        ("standardise-hydrochloric-acid-tris", "0.0910,0.0905,0.0897"),
        ("standardise-hydrochloric-acid-carbonate", "0.0402,0.0399,0.0411"),
    ],
)
def test_hydrochloric_acid_is_standardised(halfdrop: Run, method: str, portions: str) -> None:
    status, out, err = halfdrop("calibrate", "titrant", method, "--portions", portions, "--json")
    assert status == 0, err
    found = json.loads(out)["calibration"]
    assert found["subject"] == "HCl-2026-09"
    assert abs(found["lot"]["concentration_mol_l"] - HCL_MOL_L) < found["lot"]["expanded_uncertainty_mol_l"]
    causes = {cause["shared_id"] for cause in found["lot"]["causes"]}
    assert any(cause.startswith("burette ") and cause.endswith(" gain") for cause in causes)
    assert any(cause.startswith("standard ") and cause.endswith(" purity") for cause in causes)
    assert found["replicates"]["count"] == 3


def test_two_portions_are_no_pass_and_runs_can_be_taken_again(halfdrop: Run, lab: Path) -> None:
    titrant = ("calibrate", "titrant", "standardise-sodium-hydroxide")
    status, out, _ = halfdrop(*titrant, "--portions", "0.1512,0.1490")
    assert status == 1
    assert "not a pass: 2 replicate(s), 3 are needed" in out
    halfdrop("run", "standardise-sodium-hydroxide", "--sample-mass-g", "0.1533", "--seed", "9")
    runs = [path.stem for path in list_records(lab / "runs")]
    status, out, err = halfdrop(*titrant, "--from", *runs, "--json")
    assert status == 0, err
    told = json.loads(out)["calibration"]
    assert abs(told["lot"]["concentration_mol_l"] - 0.0997) < told["lot"]["expanded_uncertainty_mol_l"]
    # a second standardisation begins the lot's drift chart
    status, out, _ = halfdrop(*titrant, "--from", *runs, "--json")
    assert len(json.loads(out)["calibration"]["drift"]["entries"]) == 2
    status, _, err = halfdrop("calibrate", "titrant", "juice-acidity", "--from", *runs, "--lot-id", "another")
    assert status == 2
    assert "the lot to be standardised is 'another'" in err


def test_a_blank_that_shows_nothing_is_nought_with_its_uncertainty(halfdrop: Run, lab: Path) -> None:
    juice = (lab / "methods" / "juice-acidity.yaml").read_text(encoding="utf-8")
    water = juice.replace("simulated_sample: pressed juice", "simulated_sample: water")
    (lab / "methods" / "juice-blank.yaml").write_text(
        water.replace("name: juice-acidity", "name: juice-blank"), encoding="utf-8"
    )
    halfdrop("run", "juice-blank")
    (run,) = [path.stem for path in list_records(lab / "runs")]
    status, out, err = halfdrop("calibrate", "blank", "juice-blank", "--lot-id", "water-1", "--from", run, "--json")
    assert status == 0, err
    blank = json.loads(out)["calibration"]
    assert (blank["mean_ml"], blank["detectable"]) == (0.0, False)
    assert blank["standard_uncertainty_ml"] == pytest.approx(0.005 / 3**0.5)
    (lab / "methods" / "juice-acidity.yaml").write_text(juice + "\nblank_lot_id: water-1\n", encoding="utf-8")
    status, out, err = halfdrop("run", "juice-acidity", "--json")
    assert status == 0, err
    rows = {row["quantity"]: row for row in json.loads(out)["result"]["budget"]["rows"]}
    assert rows["blank"]["standard_uncertainty"] == pytest.approx(0.005 / 3**0.5)


def test_typed_blanks_and_wrong_ones(halfdrop: Run) -> None:
    blank = ("calibrate", "blank", "juice-acidity", "--lot-id", "w")
    status, out, _ = halfdrop(*blank, "--volumes-ml", "0.012,none,0.009", "--json")
    assert status == 0
    assert json.loads(out)["calibration"]["mean_ml"] == pytest.approx(0.007)
    for wrong, words in (("0.01,abc", "got 'abc'"), ("-0.01", "blank 1 is -0.01 mL")):
        status, _, err = halfdrop(*blank, f"--volumes-ml={wrong}")
        assert status == 2
        assert words in err
    assert halfdrop(*blank)[0] == 2


def test_carbonate_in_the_titrant_is_seen_with_strong_acid(halfdrop: Run, lab: Path) -> None:
    bench = lab / "bench.yaml"
    bench.write_text(bench.read_text(encoding="utf-8").replace("carbonate_mol_l: 0\n", "carbonate_mol_l: 0.001\n"))
    halfdrop("run", "carbonate-check")
    (run,) = [path.stem for path in list_records(lab / "runs")]
    status, out, err = halfdrop(
        "calibrate", "titrant", "standardise-sodium-hydroxide", "--portions", "0.1512,0.1490,0.1533",
        "--carbonate-run", run, "--json",
    )  # fmt: skip
    assert status == 0, err
    result = json.loads(out)
    status, out, _ = halfdrop("runs", "show", Path(result["run"]).stem)
    assert status == 0
    assert "concentration 0.09" in out
    assert "uncertainty budget (contributions in mol/L)" in out
    assert "no end point" not in out
    carbonate = result["calibration"]["carbonate"]
    assert carbonate["detected"]
    assert not carbonate["accepted"]
    # 0.001 mol/L carbonate takes two protons of the 0.1 mol/L that the bottle holds
    assert carbonate["percent"] == pytest.approx(2.0, abs=3.0 * carbonate["standard_uncertainty_percent"])
    assert carbonate["standard_uncertainty_percent"] < 0.1
    assert any("guard tube" in text for text in result["warnings"])


def test_a_standard_past_its_date_is_named_with_the_lot(halfdrop: Run, lab: Path) -> None:
    path = lab / "methods" / "standardise-sodium-hydroxide.yaml"
    text = path.read_text(encoding="utf-8")
    path.write_text(text.replace("standard:\n", 'standard:\n  expires: "2020-01-31"\n'), encoding="utf-8")
    status, out, err = halfdrop(
        "calibrate", "titrant", "standardise-sodium-hydroxide", "--portions", "0.1512,0.1490,0.1533", "--json"
    )
    assert status == 0, err
    assert any("expired on 2020-01-31" in text for text in json.loads(out)["warnings"])


def test_a_burette_is_checked_from_readings_in_a_file(halfdrop: Run, tmp_path: Path) -> None:
    path = tmp_path / "weighings.csv"
    z = z_factor_ul_mg(21.5)
    rows = [f"{v},{1.002 * v / z + 1e-4 * (-1) ** n:.4f}" for v in (1, 5, 10) for n in range(10)]
    path.write_text("\n".join(["set_volume_ml,mass_g", *rows]) + "\n")
    status, out, err = halfdrop(
        "calibrate", "burette", "--weighings", str(path), "--water-temperature-c", "21.5", "--json"
    )
    assert status == 0, err
    found = json.loads(out)["calibration"]
    assert found["correction"]["gain"] == pytest.approx(1.002, abs=3e-5)
    # later runs count what the burette truly delivers
    status, out, err = halfdrop("run", "juice-acidity", "--json")
    assert status == 0, err
    rows = {row["quantity"]: row for row in json.loads(out)["result"]["budget"]["rows"]}
    assert rows["burette gain"]["value"] == pytest.approx(1.002, abs=3e-5)


def test_what_is_past_its_date_refuses_where_the_rules_say_so(halfdrop: Run, lab: Path) -> None:
    bench = lab / "bench.yaml"
    text = bench.read_text(encoding="utf-8").replace("  expired: warn ", "  expired: refuse ")
    bench.write_text(text.replace('expires: "2028-06-30"}', 'expires: "2020-06-30"}', 1), encoding="utf-8")
    status, _, err = halfdrop("calibrate", "probe")
    assert status == 2
    assert "lot B4-118: expired on 2020-06-30" in err
    assert list_records(lab / "calibrations") == []


def test_a_real_bench_without_answers_is_refused(halfdrop: Run, lab: Path) -> None:
    bench = lab / "bench.yaml"
    bench.write_text(bench.read_text(encoding="utf-8").replace("port: simulated", "port: /dev/nothing"))
    status, _, err = halfdrop("calibrate", "probe", "--headless")
    assert status == 2
    assert "nobody is there to answer its questions" in err


def test_history_tells_the_trend(halfdrop: Run) -> None:
    for seed in ("1", "2", "3"):
        assert halfdrop("calibrate", "probe", "--seed", seed)[0] == 0
    told = json.loads(halfdrop("calibrate", "history", "probe", "--json")[1])["history"]
    ((figures),) = told.values()
    assert [figure["quantity"] for figure in figures] == ["slope", "offset at pH 7", "response time"]
    assert all(len(figure["entries"]) == 3 for figure in figures)
