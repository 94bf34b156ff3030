"""Reading records: every edit found, listings, points, export, records left open."""

from __future__ import annotations

import csv
import hashlib
import io
import json
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from configs.errors import HalfdropError
from controller.journal import Journal
from controller.records.record import (
    NotARecordError,
    list_records,
    points,
    printable,
    read_record,
    summarise,
)
from controller.records.recordfile import MemorySink
from controller.records.unclosed import UnclosedRunError, close_record, refuse_unclosed, unclosed
from controller.records.verification import verify, verify_bytes
from controller.report.export import data_package, neutral, tables, whole
from controller.titration.actions import Dose, Dosed, Reading, Report
from drivers.clock import ManualClock

HEADER = {
    "plan": {
        "method_name": "juice-acidity",
        "method_title": "Titratable acidity",
        "sample": {"sample_id": "=press 3"},
        "pump": {"identity": "Orchard Burette 0001"},
    },
    "started_utc": "2026-01-01T00:00:00.000Z",
    "operator": "Ada",
}
RESULT = {"end_points": [{"volume_ml": 5.0}], "result": {"value": 6.7, "unit": "g/L"}, "doses": 1, "duration_s": 2.0}


def record_bytes(*, closed: bool = True) -> bytes:
    clock, sink = ManualClock(), MemorySink()
    journal = Journal(sink, clock)
    journal.begin(HEADER)
    journal.write(Dose(number=1, volume_ml=0.1, reason="first: Äpfel"))
    clock.wait(1.25)
    journal.write(Dosed(at_s=1.25, number=1, volume_ml=0.1, steps=200))
    journal.write(Reading(at_s=1.25, potential_mv=-17.5, temperature_c=25.0))
    journal.write(
        Report(what="point", volume_ml=0.099, delivered_ml=0.1, potential_mv=-17.5, ph=7.3, settled=True, text="x")
    )
    journal.write(Report(what="point", volume_ml=0.2, delivered_ml=0.2, potential_mv=-20.0, settled=False))
    if closed:
        journal.close("completed", stop_confirmed=None, result=RESULT)
    return sink.data


CLOSED, OPEN = record_bytes(), record_bytes(closed=False)
#: where each line of CLOSED begins
STARTS = [0, *(i + 1 for i, byte in enumerate(CLOSED[:-1]) if byte == 10)]


def line_of(offset: int) -> int:
    return sum(start <= offset for start in STARTS)


def test_a_record_as_written_is_intact() -> None:
    found = verify_bytes(CLOSED)
    assert (found.state, found.first_bad_line, found.lines) == ("intact", None, 7)


@settings(max_examples=300, deadline=None)
@given(st.integers(0, len(CLOSED) - 1), st.integers(1, 255))
def test_every_edit_of_one_byte_is_found_and_its_line_named(offset: int, change: int) -> None:
    edited = bytearray(CLOSED)
    edited[offset] ^= change
    found = verify_bytes(bytes(edited))
    assert found.state != "intact"
    if CLOSED[offset] != 10 and edited[offset] != 10:
        assert found.first_bad_line == line_of(offset)


def test_an_edit_of_any_byte_of_the_closing_line_is_found_there() -> None:
    for offset in range(STARTS[-1], len(CLOSED) - 1):
        edited = bytearray(CLOSED)
        edited[offset] ^= 1
        found = verify_bytes(bytes(edited))
        assert (found.state, found.first_bad_line) == ("edited", 7), offset


@settings(max_examples=200, deadline=None)
@given(st.integers(0, len(CLOSED)), st.binary(min_size=1, max_size=4))
def test_every_insertion_is_found(offset: int, inserted: bytes) -> None:
    assert verify_bytes(CLOSED[:offset] + inserted + CLOSED[offset:]).state != "intact"


@settings(max_examples=200, deadline=None)
@given(st.integers(0, len(CLOSED) - 1), st.integers(1, 200))
def test_everything_taken_out_is_found(offset: int, count: int) -> None:
    assert verify_bytes(CLOSED[:offset] + CLOSED[offset + count :]).state != "intact"


@settings(max_examples=200, deadline=None)
@given(st.integers(0, len(CLOSED) - 1))
def test_a_cut_is_called_torn_or_cut(length: int) -> None:
    found = verify_bytes(CLOSED[:length])
    at_a_line = length == 0 or CLOSED[length - 1] == 10
    assert found.state == ("cut" if at_a_line else "torn")


@pytest.mark.parametrize("number", range(1, 8))
def test_a_line_taken_out_or_doubled_is_found_there(number: int) -> None:
    lines = CLOSED.splitlines(keepends=True)
    without = verify_bytes(b"".join(lines[: number - 1] + lines[number:]))
    doubled = verify_bytes(b"".join(lines[:number] + lines[number - 1 :]))
    if number == 7:
        assert without.state == "cut"
    else:
        assert (without.state, without.first_bad_line) == ("edited", number)
    assert doubled.state == "edited"
    assert doubled.first_bad_line in (number, number + 1)


def test_a_new_number_with_the_hash_after_it_made_right_is_still_found() -> None:
    """Whoever changes a value and the next line's hash has changed that next line too."""
    lines = CLOSED.splitlines()
    lines[2] = lines[2].replace(b"0.1", b"0.2")
    next_line = json.loads(lines[3])
    old = next_line["previous_sha256"].encode()
    lines[3] = lines[3].replace(old, hashlib.sha256(lines[2]).hexdigest().encode())
    found = verify_bytes(b"\n".join(lines) + b"\n")
    assert (found.state, found.first_bad_line) == ("edited", 4)


@pytest.mark.parametrize("at", [2, 4])
def test_lines_missing_from_a_chain_made_anew_are_still_found(at: int) -> None:
    sink = MemorySink()
    journal = Journal(sink, ManualClock())
    journal.begin(HEADER)
    for number in range(2, 4):
        journal.lines += number == at
        journal.write(Reading(at_s=0.0, potential_mv=1.0))
    journal.lines += at == 4
    journal.close("completed")
    found = verify_bytes(sink.data)
    assert (found.state, found.first_bad_line) == ("edited", at)


def test_an_open_record_is_cut_and_read_all_the_same(tmp_path: Path) -> None:
    path = tmp_path / "open.jsonl"
    path.write_bytes(OPEN)
    assert verify(path).state == "cut"
    record = read_record(path)
    assert record.closing is None
    assert len(record.entries) == 5


def test_a_torn_last_line_is_left_out(tmp_path: Path) -> None:
    path = tmp_path / "torn.jsonl"
    path.write_bytes(OPEN[:-20])
    record = read_record(path)
    assert record.torn_bytes > 0
    assert len(record.entries) == 4
    assert verify(path).first_bad_line == 6


@pytest.mark.parametrize(
    ("content", "text"),
    [
        (b"volume_ml,ph\n1,2\n", "not a run record"),
        (b"", "not a run record"),
        (b'{"record":"halfdrop run","record_version":2,"header":{}}\n', "record version 2"),
        (b"\xff\xfe\n", "not a run record"),
        (b"[" * 100_000, "not a run record"),
    ],
)
def test_other_files_are_refused(tmp_path: Path, content: bytes, text: str) -> None:
    path = tmp_path / "other.jsonl"
    path.write_bytes(content)
    with pytest.raises(NotARecordError, match=text):
        read_record(path)
    assert summarise(path)["readable"] is False
    with pytest.raises(NotARecordError, match="cannot be read"):
        read_record(tmp_path / "missing.jsonl")


@pytest.mark.parametrize("padding", [0, 100_000])
def test_summary_comes_from_the_first_and_the_last_line(tmp_path: Path, padding: int) -> None:
    path = tmp_path / "2026-01-01T000000Z-juice.jsonl"
    sink = MemorySink()
    journal = Journal(sink, ManualClock())
    journal.begin(HEADER)
    journal.close("completed", result={**RESULT, "estimators": "x" * padding}, stop_confirmed=None)
    path.write_bytes(sink.data)
    assert summarise(path) == {
        "run": "2026-01-01T000000Z-juice",
        "path": str(path),
        "readable": True,
        "started_utc": "2026-01-01T00:00:00.000Z",
        "method": "juice-acidity",
        "sample_id": "=press 3",
        "operator": "Ada",
        "outcome": "completed",
        "reason": None,
        "stop_confirmed": None,
        "end_points": [{"volume_ml": 5.0}],
        "result": {"value": 6.7, "unit": "g/L"},
        "doses": 1,
        "duration_s": 2.0,
    }


def test_points_and_tables(tmp_path: Path) -> None:
    path = tmp_path / "a.jsonl"
    path.write_bytes(CLOSED)
    record = read_record(path)
    assert [point["volume_ml"] for point in points(record)] == [0.099, 0.2]
    files = tables(record)
    rows = list(csv.reader(io.StringIO(files["points.csv"])))
    names = ["at_s", "volume_ml", "delivered_ml", "potential_mv", "ph", "settled"]
    assert rows[0] == [*names, "volume_sd_ml", "potential_sd_mv"]
    assert rows[1] == ["1.25", "0.099", "0.1", "-17.5", "7.3", "true", "", ""]
    assert rows[2] == ["1.25", "0.2", "0.2", "-20.0", "", "false", "", ""]
    readings = list(csv.DictReader(io.StringIO(files["readings.csv"])))
    assert readings == [
        {"at_s": "1.25", "delivered_ml": "0.1", "potential_mv": "-17.5", "temperature_c": "25.0", "status": "ok"}
    ]
    package = data_package(record, files)
    assert json.loads(json.dumps(package))["resources"][0]["schema"]["fields"][1]["name"] == "volume_ml"
    for resource in package["resources"]:
        text = files[resource["path"]].encode()
        assert resource["bytes"] == len(text)
        assert resource["hash"] == f"sha256:{hashlib.sha256(text).hexdigest()}"
        assert [f["name"] for f in resource["schema"]["fields"]] == text.decode().splitlines()[0].split(",")
    assert whole(record)["closing"]["outcome"] == "completed"


@pytest.mark.parametrize(
    ("text", "cell"),
    [
        ("=1+1", "'=1+1"),
        ("+1", "'+1"),
        ("-1", "'-1"),
        ("@a", "'@a"),
        ("\tx", "'\ufffdx"),
        ("press 3", "press 3"),
        ("", ""),
        ("a\x1b[2Jb", "a\ufffd[2Jb"),
    ],
)
def test_text_never_becomes_a_formula(text: str, cell: str) -> None:
    assert neutral(text) == cell


def test_a_status_that_looks_like_a_formula_is_neutralised(tmp_path: Path) -> None:
    sink = MemorySink()
    journal = Journal(sink, ManualClock())
    journal.begin(HEADER)
    journal.write(Reading(at_s=0.0, potential_mv=1.0, status="=cmd()"))
    path = tmp_path / "a.jsonl"
    path.write_bytes(sink.data)
    assert "'=cmd()" in tables(read_record(path))["readings.csv"]


def test_terminal_text_has_no_control_characters() -> None:
    assert printable("press\x1b[2J 3é") == "press\N{REPLACEMENT CHARACTER}[2J 3é"


# --- records left open ---------------------------------------------------------------------------------------------


def left_open(folder: Path, name: str, data: bytes) -> Path:
    path = folder / name
    path.write_bytes(data)
    return path


@pytest.mark.parametrize("torn", [0, 1, 20])
def test_a_record_left_open_is_closed_and_then_intact(tmp_path: Path, torn: int) -> None:
    data = OPEN[: len(OPEN) - torn]
    path = left_open(tmp_path, "a.jsonl", data)
    closing = close_record(path, clock=ManualClock(), operator_name="Ada", reason="power cut")
    assert path.read_bytes().startswith(data)  # nothing rewritten
    assert verify(path).state == "intact"
    assert closing["torn_bytes_before"] == (0 if torn == 0 else len(data.rsplit(b"\n", 1)[1]))
    assert summarise(path)["outcome"] == "abandoned"
    record = read_record(path)
    assert record.closing is not None
    assert record.closing["reason"] == "power cut"
    assert len(record.entries) == (4 if torn == 20 else 5)


@settings(max_examples=200, deadline=None)
@given(st.data())
def test_a_record_closed_after_a_torn_line_hides_no_edit(tmp_path_factory: pytest.TempPathFactory, data: Any) -> None:
    path = left_open(tmp_path_factory.mktemp("torn"), "a.jsonl", OPEN[:-20])
    close_record(path, clock=ManualClock(), operator_name=None, reason="power cut")
    edited = bytearray(path.read_bytes())
    edited[data.draw(st.integers(0, len(edited) - 1))] ^= data.draw(st.integers(1, 255))
    assert verify_bytes(bytes(edited)).state != "intact"


def test_closing_refuses_closed_and_edited_records(tmp_path: Path) -> None:
    closed = left_open(tmp_path, "a.jsonl", CLOSED)
    with pytest.raises(HalfdropError, match="closed already"):
        close_record(closed, clock=ManualClock(), operator_name=None, reason="x")
    edited = left_open(tmp_path, "b.jsonl", OPEN.replace(b"-17.5", b"-18.5"))
    with pytest.raises(HalfdropError, match="edited"):
        close_record(edited, clock=ManualClock(), operator_name=None, reason="x")
    assert edited.read_bytes() == OPEN.replace(b"-17.5", b"-18.5")


def test_a_pump_with_an_open_run_starts_nothing(tmp_path: Path) -> None:
    left_open(tmp_path, "2026-a.jsonl", CLOSED)
    path = left_open(tmp_path, "2026-b.jsonl", OPEN)
    left_open(tmp_path, "notes.jsonl", b"not a record\n")
    assert [p.name for p in list_records(tmp_path)] == ["2026-a.jsonl", "2026-b.jsonl", "notes.jsonl"]
    assert unclosed(tmp_path) == [path]
    assert unclosed(tmp_path, "Another 9") == []
    with pytest.raises(UnclosedRunError, match="halfdrop runs close 2026-b"):
        refuse_unclosed(tmp_path, "Orchard Burette 0001")
    close_record(path, clock=ManualClock(), operator_name=None, reason="seen to")
    refuse_unclosed(tmp_path, "Orchard Burette 0001")


HEADER_LENGTH = len(OPEN.splitlines(keepends=True)[0])


def test_a_run_left_open_counts_though_its_header_is_damaged(tmp_path: Path) -> None:
    """Whose pump it was nobody can read any more: it counts for every one, and is not closed over the damage."""
    path = left_open(tmp_path, "2026-b.jsonl", b"{" + b"?" * (HEADER_LENGTH - 2) + OPEN[HEADER_LENGTH - 1 :])
    assert unclosed(tmp_path) == unclosed(tmp_path, "Another 9") == [path]
    with pytest.raises(UnclosedRunError, match=r"2026-b \(its header is damaged\).*move the file out of runs"):
        refuse_unclosed(tmp_path, "Another 9")
    before = path.read_bytes()
    with pytest.raises(HalfdropError, match=r"its header is damaged.*backup"):
        close_record(path, clock=ManualClock(), operator_name=None, reason="x")
    assert path.read_bytes() == before


def test_a_torn_last_line_behind_a_damaged_header_is_an_open_run_too(tmp_path: Path) -> None:
    path = left_open(tmp_path, "2026-b.jsonl", b"?" * (HEADER_LENGTH - 1) + OPEN[HEADER_LENGTH - 1 : -5])
    assert unclosed(tmp_path) == [path]


def test_a_closed_run_with_a_damaged_header_is_no_open_one(tmp_path: Path) -> None:
    left_open(tmp_path, "2026-a.jsonl", b"?" + CLOSED[1:])
    assert unclosed(tmp_path) == []


@pytest.mark.parametrize("length", [0, 1, HEADER_LENGTH // 2, HEADER_LENGTH - 2])
def test_a_record_torn_in_its_header_is_none_because_nothing_had_moved(tmp_path: Path, length: int) -> None:
    """The header is on the medium before anything leaves the program."""
    left_open(tmp_path, "2026-b.jsonl", OPEN[:length])
    assert unclosed(tmp_path) == []
    refuse_unclosed(tmp_path, "Orchard Burette 0001")
