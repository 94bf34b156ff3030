"""The journal: what a line holds, durability, a full disk, file names."""

from __future__ import annotations

import errno
import hashlib
import json
import os
from pathlib import Path
from typing import Any

import pytest

from configs.errors import HalfdropError
from controller.journal import DiskFullError, Journal, RecordError, encode, utc_text
from controller.records.record import read_record
from controller.records.recordfile import RESERVE_BYTES, FileSink, MemorySink, new_record
from controller.records.verification import verify, verify_bytes
from controller.titration.actions import Dose, Read, Reading
from drivers.clock import ManualClock

START_UTC_S = 1_767_225_600.0  # 2026-01-01T00:00:00Z


def journal(sink: Any, clock: ManualClock) -> Journal:
    made = Journal(sink, clock, name="record")
    made.begin({"plan": {}})
    return made


def test_every_line_holds_number_utc_run_time_and_the_hash_of_the_line_before() -> None:
    clock, sink = ManualClock(start_s=50.0, start_utc_s=START_UTC_S), MemorySink()
    record = journal(sink, clock)
    clock.wait(1.5)
    record.write(Reading(at_s=1.5, potential_mv=-12.5, sequence=4))
    record.close("completed")
    lines = sink.data.splitlines()
    header, reading, closing = (json.loads(line) for line in lines)
    assert (header["record"], header["record_version"], header["previous_sha256"]) == ("halfdrop run", 1, "")
    assert reading == {
        "line": 2,
        "utc": "2026-01-01T00:00:01.500Z",
        "run_s": 1.5,
        "observation": "reading",
        "at_s": 1.5,
        "potential_mv": -12.5,
        "sequence": 4,
        "previous_sha256": hashlib.sha256(lines[0]).hexdigest(),
    }
    assert closing["closing"]["outcome"] == "completed"
    assert closing["closing"]["lines"] == 2
    assert closing["closing"]["last_sha256"] == hashlib.sha256(lines[1]).hexdigest()


def test_one_write_a_line(fake_bench: Any) -> None:
    record = fake_bench.journal
    record.begin({})
    record.write(Read())
    record.event("guard", what="full")
    assert [call for call in fake_bench.log if call.startswith("line")] == ["line 1", "line 2", "line 3"]
    assert all(line.endswith(b"\n") and line.count(b"\n") == 1 for line in fake_bench.sink.lines)


def test_barrier_syncs_once_and_only_when_needed(fake_bench: Any) -> None:
    record = fake_bench.journal
    record.begin({})
    assert fake_bench.log == ["line 1", "sync 1"]
    record.barrier()
    assert fake_bench.log == ["line 1", "sync 1"]
    record.write(Read())
    record.barrier()
    assert fake_bench.log[2:] == ["line 2", "sync 2"]


def test_lines_are_on_the_medium_within_five_seconds(fake_bench: Any) -> None:
    record = fake_bench.journal
    record.begin({})
    for _ in range(30):
        fake_bench.clock.wait(0.5)
        record.write(Read())
    last_sync_s, first_unsynced_s, now_s = None, None, 0.0
    for call in fake_bench.log[2:]:
        if call.startswith("line"):
            now_s += 0.5
            first_unsynced_s = now_s if first_unsynced_s is None else first_unsynced_s
            assert now_s - first_unsynced_s <= 5.0
        else:
            last_sync_s, first_unsynced_s = now_s, None
    assert last_sync_s is not None


def test_before_silence_syncs_only_for_a_long_one(fake_bench: Any) -> None:
    record = fake_bench.journal
    record.begin({})
    record.write(Read())
    record.before_silence(4.0)
    assert "sync 2" not in fake_bench.log
    record.before_silence(5.0)
    assert "sync 2" in fake_bench.log


def test_closing_twice_writes_once(fake_bench: Any) -> None:
    record = fake_bench.journal
    record.begin({})
    record.close("completed")
    record.close("failed")
    assert len(fake_bench.sink.lines) == 2


def test_a_full_disk_holds_the_line_back_until_the_end(fake_bench: Any) -> None:
    record = fake_bench.journal
    record.begin({})
    fake_bench.sink.error = OSError(errno.ENOSPC, "No space left on device")
    with pytest.raises(DiskFullError, match=r"runs/fake\.jsonl: the disk is full"):
        record.write(Dose(number=1, volume_ml=0.1, reason="x"))
    with pytest.raises(DiskFullError):
        record.write(Read())  # nothing passes the line that is held back
    record.close("failed", reason="disk full")
    kinds = [json.loads(line).get("action", "-") for line in fake_bench.sink.lines]
    assert kinds == ["-", "dose", "-"]


def test_other_disk_errors_are_told_apart(fake_bench: Any) -> None:
    record = fake_bench.journal
    record.begin({})
    fake_bench.sink.error = OSError(errno.EIO, "Input/output error")
    with pytest.raises(RecordError, match="Input/output error") as caught:
        record.write(Read())
    assert not isinstance(caught.value, DiskFullError)
    assert caught.value.exit_status == 3


def test_a_sync_that_fails_is_an_error(fake_bench: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    def fails() -> None:
        raise OSError(errno.EIO, "Input/output error")

    fake_bench.journal.begin({})
    fake_bench.journal.write(Read())
    monkeypatch.setattr(fake_bench.sink, "sync", fails)
    with pytest.raises(RecordError):
        fake_bench.journal.barrier()


def test_the_reserve_is_made_at_the_start_and_gone_at_the_end(tmp_path: Path) -> None:
    sink = new_record(tmp_path, utc_s=START_UTC_S, label="Juice acidity")
    reserve = sink.path.with_suffix(".reserve")
    assert reserve.stat().st_size == RESERVE_BYTES
    record = journal(sink, ManualClock())
    record.close("completed")
    assert not reserve.exists()
    assert verify(sink.path).state == "intact"


def test_a_line_cut_off_by_the_disk_is_taken_back_and_fits_after_the_reserve(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A quota is played: writes beyond it are short, then fail, as on a full disk; the reserve gives room."""
    sink = new_record(tmp_path, utc_s=START_UTC_S, label="juice")
    record = journal(sink, ManualClock())
    begun = sink.path.stat().st_size
    room, real = [begun + 50], os.write

    def limited(descriptor: int, data: bytes) -> int:
        if not sink.path.with_suffix(".reserve").exists():
            return real(descriptor, data)
        left = room[0] - sink.path.stat().st_size
        if left <= 0:
            raise OSError(errno.ENOSPC, "No space left on device")
        return real(descriptor, data[:left])

    monkeypatch.setattr(os, "write", limited)
    with pytest.raises(DiskFullError):
        record.write(Dose(number=1, volume_ml=0.1, reason="a reason longer than what is left"))
    assert sink.path.stat().st_size == begun
    record.close("failed", reason="disk full")
    assert verify(sink.path).state == "intact"
    assert [entry["action"] for entry in read_record(sink.path).entries] == ["dose"]


def test_a_discarded_record_leaves_no_trace(tmp_path: Path) -> None:
    Journal(new_record(tmp_path, utc_s=START_UTC_S, label="juice"), ManualClock()).discard()
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("label", "name"),
    [
        ("juice-acidity", "2026-01-01T000000Z-juice-acidity.jsonl"),
        ("../../etc/passwd", "2026-01-01T000000Z-etc-passwd.jsonl"),
        ("C:\\Säure: 100 %", "2026-01-01T000000Z-c-s-ure-100.jsonl"),
        ("...", "2026-01-01T000000Z-run.jsonl"),
        ("x" * 300, f"2026-01-01T000000Z-{'x' * 40}.jsonl"),
    ],
)
def test_file_names_hold_nothing_that_a_file_system_takes_amiss(tmp_path: Path, label: str, name: str) -> None:
    sink = new_record(tmp_path, utc_s=START_UTC_S, label=label, durable=False)
    assert sink.path == tmp_path / name
    sink.close()


def test_records_of_one_second_are_counted(tmp_path: Path) -> None:
    sinks = [new_record(tmp_path, utc_s=START_UTC_S, label="juice", durable=False) for _ in range(3)]
    assert [sink.path.stem[-7:] for sink in sinks] == ["Z-juice", "juice-2", "juice-3"]
    for sink in sinks:
        sink.close()


def test_a_folder_that_is_missing_is_said(tmp_path: Path) -> None:
    with pytest.raises(HalfdropError, match="no record can be made there"):
        new_record(tmp_path / "missing", utc_s=START_UTC_S, label="juice")


def test_file_sink_refuses_an_existing_file(tmp_path: Path) -> None:
    (tmp_path / "a.jsonl").write_text("mine")
    with pytest.raises(FileExistsError):
        FileSink(tmp_path / "a.jsonl")
    assert (tmp_path / "a.jsonl").read_text() == "mine"


@pytest.mark.parametrize(
    ("value", "text"),
    [
        ({"a": 0.1 + 0.2}, '{"a":0.30000000000000004}'),
        ({"a": float("nan"), "b": [float("inf"), 1]}, '{"a":null,"b":[null,1]}'),
        ({"a": "Äpfel\n"}, '{"a":"Äpfel\\n"}'),
    ],
)
def test_encoding_is_exact_and_has_no_words_json_lacks(value: dict[str, Any], text: str) -> None:
    assert encode(value) == text


def test_numbers_of_numpy_are_written_as_numbers() -> None:
    import numpy as np

    assert encode({"a": np.float64(0.5), "b": np.int64(3), "c": np.arange(2)}) == '{"a":0.5,"b":3,"c":[0,1]}'


def test_utc_is_written_in_iso_8601() -> None:
    assert utc_text(START_UTC_S + 0.25) == "2026-01-01T00:00:00.250Z"


def test_half_a_character_ends_no_run_and_is_read_back() -> None:
    sink = MemorySink()
    journal = Journal(sink, ManualClock())
    journal.begin({"plan": {}, "operator": "Ada \udcff"})
    journal.event("note", text="press \ud83c 3")
    journal.close("completed", stop_confirmed=None, reason="\udc00")
    assert verify_bytes(sink.data).state == "intact"
    assert json.loads(sink.lines[0])["header"]["operator"] == "Ada \udcff"
    assert json.loads(sink.lines[1])["text"] == "press \ud83c 3"
