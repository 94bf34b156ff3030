"""What commands say of small mistakes: what was given, what is allowed, what to do."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

Run = Callable[..., tuple[int, str, str]]
pytestmark = pytest.mark.usefixtures("own_place")
KEPT = Path(__file__).parents[1] / "data" / "records" / "run-record-1-program-0.1.0.jsonl"
NAME = "2026-01-02T080000Z-juice-acidity"


@pytest.fixture
def lab(tmp_path: Path, halfdrop: Run) -> Path:
    """A lab folder with one record."""
    folder = tmp_path / "cider-lab"
    assert halfdrop("init", str(folder))[0] == 0
    shutil.copy(KEPT, folder / "runs" / f"{NAME}.jsonl")
    return folder


def test_a_folder_in_place_of_a_method_is_told_as_one_and_not_suggested(halfdrop: Run, lab: Path) -> None:
    (lab / "methods" / "dir.yaml").mkdir()
    status, _, err = halfdrop("run", "dir", "--lab", str(lab))
    assert status == 2
    assert "got a directory, allowed: a YAML file" in err
    status, _, err = halfdrop("run", "dirt", "--lab", str(lab))
    assert status == 2
    assert "no method 'dirt'" in err
    assert "did you mean" not in err


def test_settings_are_no_table(halfdrop: Run, lab: Path) -> None:
    status, _, err = halfdrop("evaluate", str(lab / "bench.yaml"))
    assert status == 2
    assert "bench.yaml: a file of settings, no table of volume and pH or potential. Name a record or a CSV" in err


def test_verify_judges_every_file_whatever_one_is(halfdrop: Run, lab: Path) -> None:
    (lab / "runs" / "2026-01-01T080000Z-gone.jsonl").symlink_to(lab / "nowhere")
    broken = lab / "runs" / "2026-01-01T090000Z-loop.jsonl"
    broken.mkdir()
    status, out, err = halfdrop("runs", "verify", "--lab", str(lab), NAME, str(broken.with_suffix("")), "--json")
    assert status == 2, out  # a name that is none is wrong use
    edited = lab / "runs" / "2026-01-03T080000Z-edited.jsonl"
    edited.write_bytes(KEPT.read_bytes().replace(b"malic", b"talic"))
    status, out, err = halfdrop("runs", "verify", "--lab", str(lab))
    assert status == 1, err
    assert f"{NAME}: intact" in out
    assert "2026-01-03T080000Z-edited: edited" in out


def test_a_file_that_cannot_be_read_is_a_finding_beside_the_others(
    halfdrop: Run, lab: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    second = "2026-01-03T080000Z-juice-acidity"
    shutil.copy(KEPT, lab / "runs" / f"{second}.jsonl")
    read_bytes = Path.read_bytes

    def refused(path: Path) -> bytes:
        if path.stem == NAME:
            raise PermissionError(13, "Permission denied")
        return read_bytes(path)

    monkeypatch.setattr(Path, "read_bytes", refused)
    status, out, _ = halfdrop("runs", "verify", "--lab", str(lab), "--json")
    assert status == 1
    states = {one["run"]: (one["state"], one["what"]) for one in json.loads(out)["runs"]}
    assert states[NAME] == ("unreadable", "it cannot be read (Permission denied)")
    assert states[second][0] == "intact"


def test_the_lab_folder_is_said_once(halfdrop: Run, lab: Path) -> None:
    path = lab / "runs" / f"{NAME}.jsonl"
    path.write_bytes(b"".join(KEPT.read_bytes().splitlines(keepends=True)[:-1]))
    status, _, err = halfdrop("runs", "close", NAME, "--lab", str(lab))
    assert status == 0
    assert err.count("lab folder ") == 1
    status, _, err = halfdrop("runs", "verify", NAME, NAME, "--lab", str(lab))
    assert err.count("lab folder ") == 1


def test_a_long_id_does_not_stretch_the_table(halfdrop: Run, lab: Path) -> None:
    path = lab / "runs" / f"{NAME}.jsonl"
    first, rest = KEPT.read_bytes().split(b"\n", 1)
    header = json.loads(first)
    header["header"]["plan"]["sample"]["sample_id"] = "press " + "3" * 190
    path.write_bytes(json.dumps(header).encode() + b"\n" + rest)
    _, out, _ = halfdrop("runs", "list", "--lab", str(lab))
    assert "press " + "3" * 31 + "..." in out
    assert max(len(line) for line in out.splitlines()) < 200
    _, out, _ = halfdrop("runs", "list", "--lab", str(lab), "--json")
    assert json.loads(out)["runs"][0]["sample_id"] == "press " + "3" * 190


def test_a_lab_folder_inside_another_is_told(halfdrop: Run, lab: Path, tmp_path: Path) -> None:
    status, out, _ = halfdrop("init", str(lab / "inner"))
    assert status == 0
    assert f"inside another lab folder, {lab}" in out
    status, out, _ = halfdrop("init", str(tmp_path / "beside"))
    assert "inside another" not in out


def test_ids_that_are_none_move_nothing(halfdrop: Run, lab: Path) -> None:
    for sample_id in ("", "\udcff", "x" * 500):
        status, _, err = halfdrop("run", "juice-acidity", "--lab", str(lab), "--sample-id", sample_id, "--headless")
        assert status == 2
        assert "the sample's id" in err
    assert len(list((lab / "runs").glob("*.jsonl"))) == 1


@pytest.mark.parametrize("name", ["\udcff", "x" * 201])
def test_a_name_that_no_record_can_hold_moves_nothing(halfdrop: Run, lab: Path, name: str) -> None:
    status, _, err = halfdrop("run", "juice-acidity", "--lab", str(lab), "--operator", name, "--headless")
    assert status == 2
    assert "--operator: the operator's name h" in err
    assert len(list((lab / "runs").glob("*.jsonl"))) == 1
