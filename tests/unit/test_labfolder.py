"""The lab folder: made, found, left alone."""

from __future__ import annotations

from pathlib import Path

import pytest

from configs.shipped import shipped_bytes, shipped_names
from controller.labfolder import FOLDERS, LabError, find_lab, init_lab, upgrade_lab


def test_init_makes_everything_with_the_shipped_bench_and_methods(tmp_path: Path) -> None:
    lab = tmp_path / "new" / "lab"
    made = init_lab(lab)
    assert (lab / "lab.yaml").read_text().splitlines()[-1] == "schema_version: 1"
    assert all((lab / name).is_dir() for name in FOLDERS)
    assert (lab / "bench.yaml").read_bytes() == shipped_bytes("benches", "simulated")
    assert {path.stem for path in (lab / "methods").iterdir()} == set(shipped_names("methods"))
    assert lab / "lab.yaml" in made


def test_init_again_adds_what_is_missing_and_changes_nothing(tmp_path: Path) -> None:
    init_lab(tmp_path)
    (tmp_path / "bench.yaml").write_text("mine: true\n")
    (tmp_path / "methods" / "juice-acidity.yaml").unlink()
    assert [path.name for path in init_lab(tmp_path)] == ["juice-acidity.yaml"]
    assert (tmp_path / "bench.yaml").read_text() == "mine: true\n"
    assert init_lab(tmp_path) == []


def test_init_refuses_a_folder_with_other_things(tmp_path: Path) -> None:
    (tmp_path / "thesis.doc").write_text("mine")
    with pytest.raises(LabError, match=r"it holds other things and no lab\.yaml"):
        init_lab(tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["thesis.doc"]
    with pytest.raises(LabError, match="it is a file"):
        init_lab(tmp_path / "thesis.doc")


def test_the_option_goes_before_the_environment_before_the_parents(tmp_path: Path) -> None:
    labs = {name: tmp_path / name for name in ("option", "environment", "parent")}
    for lab in labs.values():
        init_lab(lab)
    known, inside = {"HALFDROP_LAB": str(labs["environment"])}, labs["parent"] / "methods"
    found = find_lab(str(labs["option"]), environment=known, start=inside)
    assert (found.path.name, found.found_by) == ("option", "--lab")
    found = find_lab(None, environment=known, start=inside)
    assert (found.path.name, found.found_by) == ("environment", "HALFDROP_LAB")
    found = find_lab(None, environment={}, start=inside)
    assert found.path.name == "parent"
    assert "the nearest parent with lab.yaml" in found.says()
    assert found.runs == found.path / "runs"


def test_no_lab_folder_is_said_with_the_remedy(tmp_path: Path) -> None:
    with pytest.raises(LabError, match=r"no lab folder here or above.*halfdrop init DIR"):
        find_lab(None, environment={}, start=tmp_path)
    with pytest.raises(LabError, match=r"no lab\.yaml in it"):
        find_lab(str(tmp_path), environment={})


@pytest.mark.parametrize("text", ["", "name: x\n", "schema_version: one\n", "schema_version:\n  1: 2\n"])
def test_a_lab_file_without_a_version_is_refused(tmp_path: Path, text: str) -> None:
    (tmp_path / "lab.yaml").write_text(text)
    with pytest.raises(LabError, match="no line 'schema_version: NUMBER'"):
        find_lab(str(tmp_path), environment={})


@pytest.mark.parametrize("text", ["\ufeffschema_version: 1\n", "# a\nname: b\nschema_version : 1  # first\n"])
def test_a_lab_file_may_hold_more(tmp_path: Path, text: str) -> None:
    (tmp_path / "lab.yaml").write_text(text, encoding="utf-8")
    assert find_lab(str(tmp_path), environment={}).schema_version == 1


def test_a_newer_folder_is_read_only(tmp_path: Path) -> None:
    (tmp_path / "lab.yaml").write_text("schema_version: 2\n")
    lab = find_lab(str(tmp_path), environment={})
    assert lab.read_only
    assert "read only" in lab.says()
    for write in (lab.writable, lambda: init_lab(tmp_path), lambda: upgrade_lab(tmp_path)):
        with pytest.raises(LabError, match="schema_version 2; this program writes 1"):
            write()


def test_upgrade_of_the_first_version_changes_nothing(tmp_path: Path) -> None:
    init_lab(tmp_path)
    before = {path: path.read_bytes() for path in tmp_path.rglob("*") if path.is_file()}
    assert upgrade_lab(tmp_path) == []
    assert {path: path.read_bytes() for path in tmp_path.rglob("*") if path.is_file()} == before
    with pytest.raises(LabError):
        upgrade_lab(tmp_path / "runs")
