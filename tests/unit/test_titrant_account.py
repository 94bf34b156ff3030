"""Titrant left in a reservoir whose pump does not know: counted once, kept whole, said again by the records."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from controller.journal import Journal
from controller.records.recordfile import FileSink
from controller.running.titrant_account import FILE_NAME, TitrantAccount, account_of, keep
from controller.titration.actions import Action, Dose, Dosed, Failed, Observation, Primed
from drivers.clock import ManualClock

PUMP = "Orchard Burette 1"
Write = Callable[..., Path]


@pytest.fixture
def write(tmp_path: Path) -> Write:
    (tmp_path / "runs").mkdir()

    def record(
        name: str, *items: Action | Observation, pump: str = PUMP, started: str = "2026-03-01T08:00:00Z"
    ) -> Path:
        path = tmp_path / "runs" / f"{name}.jsonl"
        journal = Journal(FileSink(path, durable=False), ManualClock())
        journal.begin({"plan": {"pump": {"identity": pump}}, "started_utc": started})
        for item in items:
            journal.write(item)
        journal.close("completed")
        return path

    return record


def _account(lab: Path, changed_utc: str | None = "2026-02-01", filled_ml: float = 250.0) -> TitrantAccount:
    return account_of(lab, lab / "runs", pump=PUMP, filled_ml=filled_ml, changed_utc=changed_utc)


def _dose(number: int, asked_ml: float, got_ml: float | None) -> list[Action | Observation]:
    asked = Dose(number=number, volume_ml=asked_ml, reason="")
    return [asked] if got_ml is None else [asked, Dosed(at_s=1.0, number=number, volume_ml=got_ml)]


def test_everything_through_the_tip_counts_and_a_dose_in_doubt_counts_whole(tmp_path: Path, write: Write) -> None:
    doubt = Failed(device="pump", what="silent", number=3, lowest_ml=0.0, highest_ml=0.4)
    write("a", Primed(at_s=0.0, volume_ml=1.0), *_dose(1, 0.5, 0.5), *_dose(2, 0.5, 0.25))
    write("b", Dose(number=3, volume_ml=0.5, reason=""), doubt, *_dose(4, 0.125, None))
    account = _account(tmp_path)
    assert account.used_ml == pytest.approx(1.0 + 0.5 + 0.25 + 0.4 + 0.125)
    # the syringe of 10 mL is full again: all of it came from the reservoir
    assert account.reservoir_left_ml(syringe_ml=10.0, contents_ml=10.0) == pytest.approx(250.0 - 2.275)
    assert account.reservoir_left_ml(syringe_ml=10.0, contents_ml=7.725) == pytest.approx(250.0)


def test_another_pump_and_records_of_before_the_change_do_not_count(tmp_path: Path, write: Write) -> None:
    write("other", *_dose(1, 5.0, 5.0), pump="Orchard Burette 2")
    write("old", *_dose(1, 5.0, 5.0), started="2026-01-15T08:00:00Z")
    write("new", *_dose(1, 2.0, 2.0))
    assert _account(tmp_path).used_ml == 2.0


def test_the_kept_account_and_the_records_say_the_same(tmp_path: Path, write: Write) -> None:
    write("a", *_dose(1, 2.0, 2.0))
    first = _account(tmp_path)
    keep(tmp_path, first)
    assert _account(tmp_path) == first  # nothing is counted twice
    write("b", *_dose(2, 1.0, 1.0))
    second = _account(tmp_path)
    assert second.used_ml == 3.0
    keep(tmp_path, second)
    for damage in ("", "{", '[{"pump": 1}]', "[[]]"):
        (tmp_path / FILE_NAME).write_text(damage, encoding="utf-8")
        assert _account(tmp_path) == second
    (tmp_path / FILE_NAME).unlink()
    assert _account(tmp_path) == second


def test_a_new_bottle_begins_a_new_account(tmp_path: Path, write: Write) -> None:
    write("a", *_dose(1, 2.0, 2.0))
    keep(tmp_path, _account(tmp_path))
    assert _account(tmp_path, changed_utc="2026-04-01").used_ml == 0.0
    assert _account(tmp_path, filled_ml=500.0).reservoir_left_ml(syringe_ml=10.0, contents_ml=10.0) == 498.0


def test_an_account_is_written_whole_beside_those_of_other_pumps(tmp_path: Path, write: Write) -> None:
    write("a", *_dose(1, 2.0, 2.0))
    keep(tmp_path, TitrantAccount(pump="Orchard Burette 2", filled_ml=100.0, changed_utc=""))
    keep(tmp_path, _account(tmp_path))
    assert [path.name for path in tmp_path.glob(f"*{FILE_NAME}*")] == [FILE_NAME]
    assert '"Orchard Burette 2"' in (tmp_path / FILE_NAME).read_text(encoding="utf-8")


def test_what_is_left_is_never_below_nothing(tmp_path: Path) -> None:
    used_up = TitrantAccount(pump=PUMP, filled_ml=5.0, changed_utc="", used_ml=50.0)
    assert used_up.reservoir_left_ml(syringe_ml=10.0, contents_ml=10.0) == 0.0
