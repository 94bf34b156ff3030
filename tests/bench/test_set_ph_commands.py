"""Methods to a set pH at the command line: run, evaluate, replay, predict, blanks, report, and what is refused."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import pytest

from controller.cli import main
from controller.records.record import list_records

Run = Callable[..., tuple[int, str, str]]
pytestmark = pytest.mark.usefixtures("own_place")


@pytest.fixture
def lab(tmp_path: Path) -> Path:
    folder = tmp_path / "cider-lab"
    assert main(["init", str(folder)]) == 0
    return folder


@pytest.fixture
def halfdrop(halfdrop: Run, lab: Path) -> Run:
    return lambda *arguments: halfdrop(*arguments, "--lab", str(lab))


def change(lab: Path, what: str, old: str, new: str) -> None:
    path = lab / what
    text = path.read_text(encoding="utf-8")
    assert old in text
    path.write_text(text.replace(old, new), encoding="utf-8")


def test_juice_to_ph_from_run_to_report(halfdrop: Run, lab: Path) -> None:
    status, out, err = halfdrop("run", "juice-acidity-to-ph", "--sample-id", "press 4", "--json")
    assert status == 0, err
    result = json.loads(out)
    (point,) = result["end_points"]
    assert (point["ph"], point["estimator"]) == (8.1, "interpolation at pH 8.10")
    amount = result["result"]
    assert (amount["end_point"], amount["unit"], amount["substance"]) == ("pH 8.10", "g/L", "malic acid")
    # charge balance of the simulated juice (45 mmol/L malic, 1 mmol/L citric acid, 20 mmol/L potassium) at pH 8.1:
    # 73 mmol/L of protons, less 0.05 % that malate and citrate still hold, is 4.893 g/L as malic acid
    assert amount["value"] == pytest.approx(4.893, abs=0.006)
    (row,) = [one for one in amount["budget"]["rows"] if one["quantity"] == "end point pH"]
    assert row["shared_id"].startswith("pH scale of probe")
    assert row["standard_uncertainty"] == pytest.approx(point["ph_standard_uncertainty"])

    run = list_records(lab / "runs")[0].stem
    status, out, _ = halfdrop("evaluate", run, "--json")
    assert status == 0
    (again,) = json.loads(out)["end_points"]
    assert again["volume_ml"] == pytest.approx(point["volume_ml"], abs=1e-6)
    assert json.loads(out)["result"]["end_point"] == "pH 8.10"
    status, out, _ = halfdrop("replay", run)
    assert (status, "identical" in out) == (0, True)
    status, out, _ = halfdrop("runs", "show", run)
    assert "g/L as malic acid, to pH 8.10" in out
    status, out, _ = halfdrop("runs", "report", run, "--to", "-")
    assert status == 0
    assert "as malic acid, to pH 8.10" in out
    assert "interpolation at pH 8.10" in out
    assert "equivalence point" not in out.split("<h2>Results")[1].split("<h2>")[0]


def test_the_other_acidity_says_that_it_is_another(halfdrop: Run) -> None:
    status, out, _ = halfdrop("run", "juice-acidity")
    assert status == 0
    assert "amount to the equivalence point: " in out
    assert "to pH 8" not in out


def test_alkalinity_asks_for_what_acid_sets_free(halfdrop: Run, lab: Path) -> None:
    (lab / "answers.yaml").write_text(
        "protection: 'yes'\nstirring-and-tip: 'yes'\ntoxic-gas: 'yes'\n", encoding="utf-8"
    )
    status, out, _ = halfdrop(
        "run", "wash-water-alkalinity-to-ph", "--headless", "--answers", str(lab / "answers.yaml"), "--json"
    )
    result = json.loads(out)
    assert (status, result["outcome"], result["doses"]) == (3, "stopped", 0)
    assert "hypochlorite" in result["reason"]
    both = []
    for method in ("wash-water-alkalinity-to-ph", "wash-water-alkalinity-to-ph-mmol"):
        status, out, err = halfdrop("run", method, "--json")
        assert status == 0, err
        both.append(json.loads(out)["result"])
    assert both[0]["unit"] == "mg/L CaCO3"
    # 6.0 mmol/L carbonate and 1.5 mmol/L hydrogen carbonate: 13.5 mmol/L of alkalinity, at pH 4.5 less 0.07 mmol/L
    assert both[1]["value"] == pytest.approx(13.43, abs=0.05)
    assert both[0]["value"] == pytest.approx(both[1]["value"] * 100.087 / 2.0, rel=1e-6)


def test_what_will_happen_is_predicted(halfdrop: Run) -> None:
    status, out, err = halfdrop("predict", "juice-acidity-to-ph", "--runs", "4", "--json")
    assert status == 0, err
    told = json.loads(out)
    assert told["found_share"] == 1.0
    assert 6.0 < told["end_points"][0]["volume_ml"]["median"] < 11.0
    assert 15 < told["doses"]["median"] < 45
    assert not any("changes by only" in text for text in told["warnings"])


def test_a_sample_beyond_its_ph_gets_no_dose_and_no_number(halfdrop: Run, lab: Path) -> None:
    change(lab, "bench.yaml", "{charge: 1, concentration_mol_l: 0.020}", "{charge: 1, concentration_mol_l: 0.120}")
    status, out, _ = halfdrop("run", "juice-acidity-to-ph", "--json")
    result = json.loads(out)
    assert (status, result["outcome"], result["doses"], result["end_points"]) == (1, "completed", 0, [])
    assert any("already, above the end point pH 8.10" in text for text in result["warnings"])


@pytest.mark.parametrize("rate_ml_min", [0.02, 0.05])
def test_a_leak_that_carries_it_past_the_ph_gives_no_sure_number(halfdrop: Run, lab: Path, rate_ml_min: float) -> None:
    fault = f"faults:\n  - {{what: leaking-valve, at_dose: 5, rate_ml_min: {rate_ml_min}}}\n"
    (lab / "leak.yaml").write_text(fault, encoding="utf-8")
    _, out, _ = halfdrop("run", "juice-acidity-to-ph", "--faults", str(lab / "leak.yaml"), "--json")
    result = json.loads(out)
    sure = [one for one in result["end_points"] if one["standard_uncertainty_ml"] < 0.05]
    assert not sure
    assert result["reason"] or result["warnings"]


def test_blanks_go_to_the_ph_of_the_sample(halfdrop: Run, lab: Path) -> None:
    """Water with 0.2 mmol/L of strong acid: 0.1 mL of titrant to neutral, and what water takes from there to pH 8.1."""
    change(
        lab, "bench.yaml", "- {charge: -1, concentration_mol_l: 1.0e-6}", "- {charge: -1, concentration_mol_l: 2.01e-4}"
    )
    status, out, err = halfdrop(
        "calibrate",
        "blank",
        "juice-acidity-to-ph",
        "--lot-id",
        "w7",
        "--replicates",
        "3",
        "--expires",
        "2030-01-31",
        "--json",
    )
    assert status == 0, err
    blank = json.loads(out)["calibration"]
    hydroxide = 10 ** (8.1 - 13.995) - 10**-8.1
    expected_ml = 50.0 * (2.0e-4 + hydroxide) / 0.0997
    assert (blank["count"], blank["end_point_ph"], blank["detectable"]) == (3, 8.1, True)
    assert blank["mean_ml"] == pytest.approx(expected_ml, abs=3.0 * blank["standard_uncertainty_ml"] + 2e-4)
    assert 0.0003 < blank["standard_uncertainty_ml"] < 0.002
    assert len(list_records(lab / "runs")) == 3

    plain = json.loads(halfdrop("run", "juice-acidity-to-ph", "--json")[1])
    change(lab, "methods/juice-acidity-to-ph.yaml", "simulated_sample:", "blank_lot_id: w7\nsimulated_sample:")
    status, out, err = halfdrop("run", "juice-acidity-to-ph", "--json")
    assert status == 0, err
    less = json.loads(out)
    assert less["end_points"][0]["volume_ml"] == plain["end_points"][0]["volume_ml"]
    share = 1.0 - blank["mean_ml"] / plain["end_points"][0]["volume_ml"]
    assert less["result"]["value"] == pytest.approx(plain["result"]["value"] * share, rel=1e-6)
    assert "blank" in less["result"]["contributions"]

    # the same blank for a titration to another pH: warned about, or refused where the rules say so
    change(lab, "methods/juice-acidity-to-ph.yaml", "at_ph: 8.1", "at_ph: 7.5")
    warned = json.loads(halfdrop("run", "juice-acidity-to-ph", "--json")[1])
    header = json.loads(list_records(lab / "runs")[-1].read_text(encoding="utf-8").splitlines()[0])["header"]
    assert any("taken at pH 8.10, the sample goes to pH 7.50" in t for t in header["plan"]["traceability"]["warnings"])
    assert warned["outcome"] == "completed"
    change(lab, "bench.yaml", "expired: warn", "expired: refuse")
    status, _, err = halfdrop("run", "juice-acidity-to-ph")
    assert status == 2
    assert "blank w7: it was taken at pH 8.10, the sample goes to pH 7.50" in err


def test_a_blank_of_a_titration_to_equivalence_is_taken_at_the_ph_of_the_sample(halfdrop: Run, lab: Path) -> None:
    change(
        lab, "bench.yaml", "- {charge: -1, concentration_mol_l: 1.0e-6}", "- {charge: -1, concentration_mol_l: 2.01e-4}"
    )
    status, out, err = halfdrop("calibrate", "blank", "juice-acidity", "--lot-id", "w8", "--replicates", "2", "--json")
    assert status == 0, err
    blank = json.loads(out)["calibration"]
    assert 7.8 < blank["end_point_ph"] < 8.8
    change(lab, "methods/juice-acidity.yaml", "simulated_sample:", "blank_lot_id: w8\nsimulated_sample:")
    status, out, err = halfdrop("run", "juice-acidity", "--json")
    assert status == 0, err
    result = json.loads(out)
    ph = result["end_points"][0]["ph"]
    (row,) = [one for one in result["result"]["budget"]["rows"] if one["quantity"] == "blank"]
    expected_ml = 50.0 * (2.0e-4 + 10 ** (ph - 13.995) - 10**-ph) / 0.0997  # at this sample's own end point pH
    assert row["value"] == pytest.approx(expected_ml, abs=0.002)
    assert not any("blank" in text for text in result["warnings"])


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("--replicates", "2", "--at-ph", "7"), "the samples of juice-acidity-to-ph end at pH 8.1"),
        (("--replicates", "0"), "got 0, allowed: 1 to 20"),
        (("--replicates", "1", "--expires", "soon"), "got 'soon', allowed: a day"),
        ((), "either replicates, runs or volumes are needed"),
        (("--replicates", "1", "--volumes-ml", "0.1"), "either replicates, runs or volumes are needed"),
    ],
)
def test_what_makes_no_blank_is_refused(halfdrop: Run, arguments: tuple[str, ...], words: str) -> None:
    status, _, err = halfdrop("calibrate", "blank", "juice-acidity-to-ph", "--lot-id", "w", *arguments)
    assert status == 2
    assert words in err


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("kind: end-point-ph", "kind: equivalence", "for a titration to a pH set kind: end-point-ph"),
        ("  at_ph: 8.1", "  expected: 1", "the pH that ends the titration, as kind is end-point-ph"),
        ("signal: ph", "signal: potential", "allowed: ph, as the end point is a pH"),
        ("highest_ph: 12", "highest_ph: 8", "above end_points.at_ph, 8.1"),
        ("  at_ph: 8.1", "  at_ph: 8.1\n  expected: 2", "1 where at_ph is set"),
        ("  at_ph: 8.1", "  at_ph: 14", "1.5 to 12.5"),
    ],
)
def test_settings_that_do_not_fit_a_set_ph_are_refused(
    halfdrop: Run, lab: Path, old: str, new: str, words: str
) -> None:
    change(lab, "methods/juice-acidity-to-ph.yaml", old, new)
    status, _, err = halfdrop("run", "juice-acidity-to-ph")
    assert status == 2
    assert words in err
