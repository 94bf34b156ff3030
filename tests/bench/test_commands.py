"""Whole commands in this process, on the simulated bench: what they print, what they return, what they leave behind."""

from __future__ import annotations

import io
import json
from collections.abc import Callable
from pathlib import Path

import pytest

from controller.records.record import list_records, read_record
from controller.records.verification import verify

Run = Callable[..., tuple[int, str, str]]
pytestmark = pytest.mark.usefixtures("own_place")


@pytest.fixture
def lab(tmp_path: Path, halfdrop: Run) -> Path:
    folder = tmp_path / "cider-lab"
    assert halfdrop("init", str(folder))[0] == 0
    return folder


# the simulated juice by stoichiometry: 10 mL of 0.045 mol/L malic and 0.001 mol/L citric acid less 0.020 mol/L
# potassium, with sodium hydroxide that is truly 0.0997 mol/L (configs/benches/simulated.yaml)
TRUE_JUICE_ML = 10.0 * (2 * 0.045 + 3 * 0.001 - 0.020) / 0.0997


def test_a_run_finds_what_is_in_the_beaker_and_closes_its_record(halfdrop: Run, lab: Path) -> None:
    status, out, err = halfdrop("run", "juice-acidity", "--lab", str(lab), "--sample-id", "press 3", "--json")
    assert status == 0, err
    result = json.loads(out)
    (point,) = result["end_points"]
    assert abs(point["volume_ml"] - TRUE_JUICE_ML) < 4 * point["standard_uncertainty_ml"]
    amount = result["result"]
    true_g_l = (2 * 0.045 + 3 * 0.001 - 0.020) / 2 * 134.0874
    assert amount["unit"] == "g/L"
    assert abs(amount["value"] - true_g_l) < amount["expanded_uncertainty"]
    assert amount["expanded_uncertainty"] == pytest.approx(amount["coverage_factor"] * amount["standard_uncertainty"])
    record = Path(result["run"])
    assert verify(record).state == "intact"
    steps = sum(entry["steps"] for entry in read_record(record).of("dosed"))
    assert steps * 0.0005 == pytest.approx(result["titrant_ml"])
    assert "dose 3" in err


def test_one_seed_gives_the_same_run_twice_and_another_seed_another(halfdrop: Run, lab: Path) -> None:
    for seed in ("3", "3", "4"):
        assert halfdrop("run", "juice-acidity", "--lab", str(lab), "--seed", seed)[0] == 0
    runs = [
        [{k: v for k, v in entry.items() if k in ("action", "observation", "potential_mv", "volume_ml", "reason")}
         for entry in read_record(path).entries]
        for path in list_records(lab / "runs")
    ]  # fmt: skip
    assert runs[0] == runs[1]
    assert runs[0] != runs[2]


def test_standardisation_gives_the_true_concentration(halfdrop: Run, lab: Path) -> None:
    status, out, err = halfdrop(
        "run", "standardise-sodium-hydroxide", "--lab", str(lab), "--sample-mass-g", "0.1512", "--json"
    )
    assert status == 0, err
    amount = json.loads(out)["result"]
    assert abs(amount["value"] - 0.0997) < amount["expanded_uncertainty"]
    assert amount["unit"] == "mol/L"


def test_alkalinity_falls_through_two_end_points(halfdrop: Run, lab: Path) -> None:
    status, out, err = halfdrop("run", "wash-water-alkalinity", "--lab", str(lab), "--json")
    assert status == 0, err
    result = json.loads(out)
    # 50 mL of 0.0060 mol/L carbonate and 0.0015 mol/L hydrogen carbonate with 0.1002 mol/L acid
    assert [point["volume_ml"] for point in result["end_points"]] == pytest.approx(
        [50 * 0.0060 / 0.1002, 50 * (2 * 0.0060 + 0.0015) / 0.1002], abs=0.008
    )


def test_records_are_listed_shown_verified_and_exported(halfdrop: Run, lab: Path, tmp_path: Path) -> None:
    halfdrop("run", "juice-acidity", "--lab", str(lab), "--sample-id", "=press\x1b[31m")
    listed = json.loads(halfdrop("runs", "list", "--json", "--lab", str(lab))[1])["runs"]
    name = listed[0]["run"]
    assert listed[0]["outcome"] == "completed"
    out = halfdrop("runs", "show", name, "--lab", str(lab))[1]
    assert "as malic acid" in out
    assert "\x1b" not in out
    assert halfdrop("runs", "verify", name, "--lab", str(lab))[0] == 0
    assert halfdrop("runs", "export", name, "--to", str(tmp_path / "out"), "--lab", str(lab))[0] == 0
    package = json.loads((tmp_path / "out" / "datapackage.json").read_text())
    assert {one["path"] for one in package["resources"]} >= {"points.csv", "readings.csv"}
    again = json.loads(halfdrop("evaluate", name, "--json", "--lab", str(lab))[1])
    assert again["end_points"][0]["volume_ml"] == pytest.approx(TRUE_JUICE_ML, abs=0.006)
    path = lab / "runs" / f"{name}.jsonl"
    path.write_bytes(path.read_bytes().replace(b'"volume_ml":0.3', b'"volume_ml":0.4', 1))
    status, out, _ = halfdrop("runs", "verify", name, "--lab", str(lab))
    assert status == 1
    assert "edited" in out
    for command in (("runs", "show", name), ("runs", "export", name), ("evaluate", name)):
        status, out, err = halfdrop(*command, "--lab", str(lab))
        assert status == 1
        assert "NOT TO BE TRUSTED" in out + err
    assert json.loads(halfdrop("evaluate", name, "--json", "--lab", str(lab))[1])["record_state"] == "edited"


def test_a_flat_curve_ends_at_its_limit_and_gives_no_number(halfdrop: Run, lab: Path) -> None:
    bench = (lab / "bench.yaml").read_text()
    (lab / "bench.yaml").write_text(bench.replace("concentration_mol_l: 0.045}", "concentration_mol_l: 0.9}"))
    status, out, _ = halfdrop("run", "juice-acidity", "--lab", str(lab), "--json")
    result = json.loads(out)
    assert status in (1, 3)
    assert result["end_points"] == []
    assert result["result"] is None
    assert result["titrant_ml"] <= 18.0


@pytest.mark.parametrize(
    ("change", "status", "says"),
    [
        (("titrant_ml: 18", "titrant_ml: 40"), 2, "exceeds the vessel"),
        (("malic acid\n  expected", "malik acid\n  expected"), 2, "did you mean malic acid"),
        (("policy: model-guided", "policy: model-guide"), 2, "model-guided"),
        (("expected_concentration_mol_l: 0.04", "expected_concentration_mol_l: 4e-2"), 0, ""),
    ],
)
def test_wrong_settings_move_nothing(halfdrop: Run, lab: Path, change: tuple[str, str], status: int, says: str) -> None:
    path = lab / "methods" / "juice-acidity.yaml"
    path.write_text(path.read_text(encoding="utf-8").replace(*change), encoding="utf-8")
    found, _, err = halfdrop("run", "juice-acidity", "--lab", str(lab))
    assert found == status
    assert says in err
    if status:
        assert "juice-acidity.yaml" in err or "juice-acidity" in err
        assert list_records(lab / "runs") == []


def test_an_absent_pump_is_named_with_exit_status_3_and_leaves_no_record(halfdrop: Run, lab: Path) -> None:
    text = (lab / "bench.yaml").read_text().replace("port: simulated", "port: /dev/no-such-port")
    (lab / "bench.yaml").write_text(text)
    (lab / "answers.yaml").write_text("protection: yes\nstirring-and-tip: yes\ndegassed: yes\n")
    status, _, err = halfdrop(
        "run", "juice-acidity", "--lab", str(lab), "--headless", "--answers", str(lab / "answers.yaml")
    )
    assert status == 3
    assert "no-such-port" in err
    assert list_records(lab / "runs") == []


def test_a_real_bench_without_answers_is_refused(halfdrop: Run, lab: Path) -> None:
    text = (lab / "bench.yaml").read_text().replace("port: simulated", "port: /dev/no-such-port")
    (lab / "bench.yaml").write_text(text)
    status, _, err = halfdrop("run", "juice-acidity", "--lab", str(lab), "--headless")
    assert status == 2
    assert "--answers" in err


def test_a_wrong_safety_answer_starts_nothing(halfdrop: Run, lab: Path) -> None:
    (lab / "answers.yaml").write_text("toxic-gas: yes\n")
    status, out, _ = halfdrop(
        "run", "wash-water-alkalinity", "--lab", str(lab), "--answers", str(lab / "answers.yaml"), "--json"
    )
    result = json.loads(out)
    assert status == 3
    assert result["outcome"] == "stopped"
    assert result["titrant_ml"] == 0
    assert result["doses"] == 0


def test_too_much_sample_for_the_titrant_limit_is_refused_before_anything_moves(halfdrop: Run, lab: Path) -> None:
    status, _, err = halfdrop("run", "standardise-sodium-hydroxide", "--lab", str(lab), "--sample-mass-g", "0.5")
    assert status == 2
    assert "expected at 24.48 mL, beyond the titrant limit of 15 mL; take at most 0.55 of the sample" in err
    assert list_records(lab / "runs") == []


@pytest.mark.parametrize("text", ["1,7\n2,7\n3,7\n4,7\n5,7\n6,7\n", "1,3\n2,4\n3,5\n4,6\n5,7\n6,8\n7,9\n"])
def test_a_table_without_a_jump_says_so(halfdrop: Run, tmp_path: Path, text: str) -> None:
    (tmp_path / "flat.csv").write_text("volume_ml,ph\n" + text)
    status, out, err = halfdrop("evaluate", "flat.csv")
    assert status == 1
    assert "no end point" in out
    assert "Traceback" not in err


def test_a_terminal_without_unicode_shows_the_bench(halfdrop: Run, lab: Path) -> None:
    import subprocess
    import sys

    done = subprocess.run(
        [sys.executable, "-m", "controller.cli", "bench", "show", "--lab", str(lab)],
        cwd=Path(__file__).parents[2],
        env={"PYTHONIOENCODING": "ascii", "PATH": ""},
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert "\\xb0C" in done.stdout


def test_decide_speaks_the_core_over_json_lines(halfdrop: Run, lab: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("sys.stdin", io.StringIO('{"observation": "answered", "key": "protection", "answer": "no"}\n'))
    status, out, _ = halfdrop("decide", "juice-acidity", "--lab", str(lab))
    assert status == 0
    asked, finished = (json.loads(out.splitlines()[index]) for index in (0, -1))
    assert (asked["action"], asked["key"]) == ("ask", "protection")
    assert finished["action"] == "finish"
    assert finished["result"]["outcome"] == "stopped"


def test_a_record_left_open_holds_the_bench_until_it_is_closed(halfdrop: Run, lab: Path) -> None:
    assert halfdrop("run", "juice-acidity", "--lab", str(lab))[0] == 0
    (path,) = list_records(lab / "runs")
    lines = path.read_bytes().splitlines(keepends=True)
    path.write_bytes(b"".join(lines[:300]) + lines[300][:25])
    status, _, err = halfdrop("run", "juice-acidity", "--lab", str(lab))
    assert status == 2
    assert "left open" in err
    assert halfdrop("runs", "close", path.stem, "--lab", str(lab))[0] == 0
    assert halfdrop("run", "juice-acidity", "--lab", str(lab))[0] == 0


def test_bench_show_and_schema(halfdrop: Run, lab: Path) -> None:
    status, out, _ = halfdrop("bench", "show", "--lab", str(lab))
    assert status == 0
    assert "takes less than 85 mL" in out
    for kind in ("method", "bench", "solution"):
        document = json.loads(halfdrop("schema", kind)[1])
        assert document["type"] == "object"


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        (("rn",), "did you mean 'run'"),
        (("runs", "lst"), "did you mean 'list'"),
        (("run", "x", "--sampel-id", "3"), "did you mean '--sample-id'"),
        (("run", "juice-acidty"), "did you mean juice-acidity"),
        (("runs", "show", "nothing"), "no record 'nothing'"),
        (("run", "juice-acidity", "--sample-mass-g", "3"), "by volume"),
        (("run", "juice-acidity", "--sample-volume-ml", "-3"), "above 0"),
        (("run", "juice-acidity", "--sample-volume-ml", "nan"), "above 0"),
        (("run", "juice-acidity", "--time-scale", "quick"), "--time-scale"),
        (("evaluate", "no-such-file.csv"), "no-such-file.csv"),
        (("decide",), "neither METHOD nor --plan"),
    ],
)
def test_wrong_use_is_answered_with_the_remedy(
    halfdrop: Run, lab: Path, monkeypatch: pytest.MonkeyPatch, arguments: tuple[str, ...], says: str
) -> None:
    monkeypatch.chdir(lab)
    status, _, err = halfdrop(*arguments)
    assert status == 2
    assert says in err
    assert list_records(lab / "runs") == []


def test_the_mean_of_a_sample_names_the_runs_of_other_methods_that_it_leaves_out(halfdrop: Run, lab: Path) -> None:
    for method in ("juice-acidity", "juice-acidity-to-ph"):  # two quantities: acidity to equivalence, and to pH 8.1
        assert halfdrop("run", method, "--lab", str(lab), "--sample-id", "press-3", "--json")[0] == 0
    first, second = list_records(lab / "runs")
    status, out, err = halfdrop("runs", "mean", "press-3", "--lab", str(lab))
    assert status == 0
    assert "sample press-3: 1 run, no scatter" in out
    assert "to pH 8.10" in out
    assert "juice-acidity-to-ph" in err
    assert first.stem in err.split("left out")[1]
    assert second.stem not in err
