"""The index of the archive: follows the records, searches, and is only ever a convenience."""

from __future__ import annotations

import json
import os
import sqlite3
from pathlib import Path

import pytest

from controller.records.archive_index import FILE, ArchiveIndex


def _record(runs: Path, number: int, *, sample: str = "press", outcome: str | None = "completed") -> Path:
    path = runs / f"2026-11-{number:02d}T080000Z-juice-acidity.jsonl"
    header = {
        "plan": {"method_name": "juice-acidity", "sample": {"sample_id": sample}},
        "operator": "Ada", "started_utc": f"2026-11-{number:02d}T08:00:00.000Z",
    }  # fmt: skip
    lines = [json.dumps({"line": 1, "record": "halfdrop run", "record_version": 1, "header": header})]
    if outcome is not None:
        result = {
            "end_points": [{"volume_ml": 7.0 + number / 100}], "doses": 20 + number, "duration_s": 200.5,
            "result": {"value": 5.2, "unit": "g/L", "expanded_uncertainty": 0.02, "coverage_factor": 2},
        }  # fmt: skip
        reason = None if outcome == "completed" else "100 % over the_limit"
        lines.append(json.dumps({"closing": {"outcome": outcome, "reason": reason, "result": result}}))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


@pytest.fixture
def runs(tmp_path: Path) -> Path:
    _record(tmp_path, 1, sample="press 1")
    _record(tmp_path, 2, sample="Süßmost [bold]", outcome="stopped")
    _record(tmp_path, 3, sample="press 3", outcome=None)
    return tmp_path


def test_runs_are_listed_newest_first_with_what_they_gave(runs: Path) -> None:
    index = ArchiveIndex(runs)
    assert index.refresh() == 3
    assert [(one.sample_id, one.outcome) for one in index.find()] == [
        ("press 3", "open"), ("Süßmost [bold]", "stopped"), ("press 1", "completed"),
    ]  # fmt: skip
    last = index.find()[-1]
    assert (last.end_points_ml, last.doses, last.operator) == ((7.01,), 21, "Ada")
    assert last.amount == "5.200 +/- 0.020 g/L (k = 2)"


@pytest.mark.parametrize(
    ("words", "found"),
    [
        ("press", [3, 1]),
        ("PRESS 3", [3]),
        ("süßmost", [2]),
        ("100 %", [2]),
        ("_limit", [2]),
        ("pres_", []),
        ("ada juice", [3, 2, 1]),
        ("open", [3]),
        ("nothing such", []),
        ("", [3, 2, 1]),
    ],
)
def test_every_word_must_occur_and_stands_for_itself(runs: Path, words: str, found: list[int]) -> None:
    index = ArchiveIndex(runs)
    index.refresh()
    assert [int(one.run[8:10]) for one in index.find(words)] == found
    assert index.count(words) == len(found)


def test_outcomes_are_filtered_and_long_lists_come_in_parts(runs: Path) -> None:
    index = ArchiveIndex(runs)
    index.refresh()
    assert [one.outcome for one in index.find(outcome="stopped")] == ["stopped"]
    assert [int(one.run[8:10]) for one in index.find(most=2, after=1)] == [2, 1]


def test_only_what_changed_is_read_again(runs: Path) -> None:
    ArchiveIndex(runs).refresh()
    assert ArchiveIndex(runs).refresh() == 0
    changed = _record(runs, 3, sample="press 3", outcome="completed")
    os.utime(changed, ns=(1, 1))
    (runs / "2026-11-01T080000Z-juice-acidity.jsonl").unlink()
    _record(runs, 4)
    index = ArchiveIndex(runs)
    assert index.refresh() == 2
    assert [(int(one.run[8:10]), one.outcome) for one in index.find()] == [
        (4, "completed"), (3, "completed"), (2, "stopped"),
    ]  # fmt: skip


def test_a_file_that_is_no_record_is_listed_as_unreadable(runs: Path) -> None:
    (runs / "2026-12-01T000000Z-x.jsonl").write_text("not a record\n", encoding="utf-8")
    index = ArchiveIndex(runs)
    index.refresh()
    assert index.find()[0].outcome == "unreadable"
    assert index.find("unreadable")[0].run == "2026-12-01T000000Z-x"


def _damaged(file: Path) -> None:
    file.write_bytes(b"this is no database" * 100)


def _of_another_version(file: Path) -> None:
    with sqlite3.connect(file) as index:
        index.execute("PRAGMA user_version = 99")
    index.close()


def _of_other_columns(file: Path) -> None:
    with sqlite3.connect(file) as index:
        index.execute("CREATE TABLE runs (run TEXT)")
    index.close()


@pytest.mark.parametrize("spoil", [_damaged, _of_another_version, _of_other_columns])
def test_an_index_that_cannot_be_used_is_built_anew(runs: Path, spoil: object) -> None:
    spoil(runs / FILE)  # type: ignore[operator]
    index = ArchiveIndex(runs)
    assert index.refresh() == 3
    assert index.count() == 3


def test_where_nothing_can_be_written_the_index_lives_in_memory(runs: Path, tmp_path: Path) -> None:
    index = ArchiveIndex(runs, file=tmp_path / "missing" / "folder" / "index")
    assert index.refresh() == 3
    assert index.count("press") == 2


def test_a_folder_that_is_not_there_is_an_empty_archive(tmp_path: Path) -> None:
    index = ArchiveIndex(tmp_path / "none")
    assert index.refresh() == 0
    assert index.find() == []
