"""README's command sequence from an empty lab folder to a report, run as it stands, on manual time."""

from __future__ import annotations

import json
import re
import shlex
from collections.abc import Callable
from pathlib import Path

import pytest

from controller.records.record import list_records, read_record
from controller.records.verification import verify

README = Path(__file__).resolve().parents[2] / "README.md"
Run = Callable[..., tuple[int, str, str]]
pytestmark = pytest.mark.usefixtures("own_place")

# the simulated bench's truth (configs/benches/simulated.yaml)
TRUE_SLOPE_PERCENT, TRUE_TITRANT_MOL_L = 99.0, 0.0997
TRUE_JUICE_G_L = (2 * 0.045 + 3 * 0.001 - 0.020) / 2 * 134.0874


def sequence() -> list[list[str]]:
    (block,) = re.findall(r"^```sh lab\n(.*?)^```", README.read_text(encoding="utf-8"), re.MULTILINE | re.DOTALL)
    return [shlex.split(line) for line in block.strip().splitlines()]


def test_the_documented_sequence_leads_to_a_report_and_the_truth(halfdrop: Run, tmp_path: Path) -> None:
    for words in sequence():
        assert words[0] == "halfdrop"
        status, _, err = halfdrop(*words[1:])
        assert status == 0, f"{' '.join(words)}: {err}"
    lab = tmp_path / "cider-lab"
    made = {path.stem.split("Z-")[1]: read_record(path) for path in list_records(lab / "calibrations")}
    assert set(made) == {"calibrate-probe", "calibrate-burette", "calibrate-titrant"}
    for path in [*list_records(lab / "calibrations"), *list_records(lab / "runs")]:
        assert verify(path).state == "intact"
    found = {name: record.closing["result"]["calibration"] for name, record in made.items() if record.closing}
    line = found["calibrate-probe"]["line"]
    assert abs(line["slope_percent"] - TRUE_SLOPE_PERCENT) < 2.5 * line["slope_percent_standard_uncertainty"]
    lot = found["calibrate-titrant"]["lot"]
    assert abs(lot["concentration_mol_l"] - TRUE_TITRANT_MOL_L) < lot["expanded_uncertainty_mol_l"]
    gain = found["calibrate-burette"]["correction"]
    assert abs(gain["gain"] - 1.0) < 3 * gain["gain_standard_uncertainty"] + 1e-4
    _sample_is_right(halfdrop, lab, made)
    (page,) = (lab / "reports").glob("*.html")
    assert "press-3" in page.read_text(encoding="utf-8")


def _sample_is_right(halfdrop: Run, lab: Path, made: dict[str, object]) -> None:
    samples = [path for path in list_records(lab / "runs") if "juice" in path.stem]
    assert len(samples) == 3
    for number, path in enumerate(samples, start=1):
        record = read_record(path)
        hashes = record.header["hashes"]
        assert {"calibration probe", "calibration burette", "calibration titrant"} <= set(hashes)
        trace = record.header["plan"]["traceability"]
        assert trace["replicate"] == {"number": number, "count": 3}
        assert trace["lot"]["record_sha256"] == hashes["calibration titrant"]
        assert record.closing is not None
        amount = record.closing["result"]["result"]
        assert abs(amount["value"] - TRUE_JUICE_G_L) < amount["expanded_uncertainty"]
        budget = amount["budget"]
        assert sum(row["share"] for row in budget["rows"]) == pytest.approx(1.0)
        assert budget["monte_carlo"]["agrees"]
        # one burette in titrant and sample: the gain is one row of both, and next to nothing is left of it
        gain = next(row for row in budget["rows"] if "burette gain" in row["members"])
        assert len(gain["members"]) == 2
        assert gain["share"] < 0.001
    together = json.loads(halfdrop("runs", "mean", "press-3", "--lab", str(lab), "--json")[1])
    assert together["count"] == 3
    assert abs(together["result"]["value"] - TRUE_JUICE_G_L) < together["result"]["expanded_uncertainty"]
    out = halfdrop("runs", "show", samples[0].stem, "--lab", str(lab))[1]
    assert "uncertainty budget" in out
    assert "pipette error" in out


def test_the_mean_of_replicates_is_given_with_scatter_and_grubbs(halfdrop: Run, tmp_path: Path) -> None:
    lab = tmp_path / "lab"
    halfdrop("init", str(lab))
    status, out, err = halfdrop("run", "juice-acidity", "--lab", str(lab), "--portions", "10,9.5,10.2", "--json")
    assert status == 0, err
    told = json.loads(out)
    summary = told["summary"]
    assert len(told["replicates"]) == summary["count"] == 3
    assert abs(summary["result"]["value"] - TRUE_JUICE_G_L) < summary["result"]["expanded_uncertainty"]
    assert summary["mean"] == pytest.approx(sum(summary["values"]) / 3)
    assert summary["grubbs"]["critical"] == pytest.approx(1.154, abs=0.001)  # Grubbs 1969, n = 3, two-sided 5 %
    assert {row["quantity"] for row in summary["result"]["budget"]["rows"]} >= {"pipette error", "repeatability"}


def test_an_old_calibration_stays_in_force_until_a_new_one_is_accepted(halfdrop: Run, tmp_path: Path) -> None:
    lab = tmp_path / "lab"
    halfdrop("init", str(lab))
    assert halfdrop("calibrate", "probe", "--lab", str(lab))[0] == 0
    answers = tmp_path / "answers.yaml"
    answers.write_text("accept-calibration: no\n")
    status, out, _ = halfdrop("calibrate", "probe", "--lab", str(lab), "--seed", "2", "--answers", str(answers))
    assert status == 1
    assert "not taken into force; in force stays the one of" in out
    rows = json.loads(halfdrop("calibrate", "list", "--lab", str(lab), "--json")[1])["calibrations"]
    assert [row["state"] for row in rows] == ["in force", "not accepted"]
    # an edited record is no calibration
    first = list_records(lab / "calibrations")[0]
    first.write_bytes(first.read_bytes().replace(b'"slope_percent":98', b'"slope_percent":99', 1))
    rows = json.loads(halfdrop("calibrate", "list", "--lab", str(lab), "--json")[1])["calibrations"]
    assert rows[0]["state"] == "record not intact"
    assert halfdrop("runs", "verify", first.stem, "--lab", str(lab))[0] == 1
