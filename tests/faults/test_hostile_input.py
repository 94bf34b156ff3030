"""Hostile bytes, text and files: typed errors only, nothing obeyed, nothing unbounded."""

from __future__ import annotations

import json
import random
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from configs.errors import HalfdropError, SettingsError
from configs.faultfile import FaultsSettings
from configs.loading import parse
from configs.settings import BenchSettings, SolutionSettings
from controller.curves.curvefile import CurveOptions, read_curve
from controller.guard import room_ml
from controller.journal import Journal
from controller.records.record import printable
from controller.records.recordfile import MemorySink, new_record
from controller.records.verification import verify_bytes
from controller.runner import run
from controller.running.log import LabLog
from controller.titration.actions import Ask, Decisions, Dose, Prime, Read, Reading, Refill, Wait
from controller.titration.plan import Question
from drivers.clock import ManualClock
from drivers.operator import AnswersOperator


def _record(lines: int = 4) -> bytes:
    sink, clock = MemorySink(), ManualClock()
    journal = Journal(sink, clock)
    journal.begin({"plan": {"method_name": "juice"}, "operator": "Ada"})
    for number in range(lines):
        journal.write(Read())
        journal.write(Reading(at_s=number + 0.5, potential_mv=12.5 - number, temperature_c=25.0, sequence=number))
        clock.wait(1.0)
    journal.close("completed", result={"end_points": [{"volume_ml": 5.0}]})
    return sink.data


RECORD = _record()


@pytest.mark.parametrize("change", [1, 0x20, 0x80], ids=["last bit", "letter case", "high bit"])
def test_verify_finds_every_one_byte_edit(change: int) -> None:
    missed = []
    for place in range(len(RECORD)):
        edited = bytearray(RECORD)
        edited[place] ^= change
        if verify_bytes(bytes(edited)).state == "intact":
            missed.append(place)
    assert missed == []


def test_verify_finds_every_byte_taken_out_or_put_in() -> None:
    for place in range(len(RECORD)):
        assert verify_bytes(RECORD[:place] + RECORD[place + 1 :]).state != "intact", f"cut at {place}"
        for byte in (b" ", b"0", b"\n", RECORD[place : place + 1]):
            assert verify_bytes(RECORD[:place] + byte + RECORD[place:]).state != "intact", f"{byte!r} at {place}"


def test_verify_finds_every_cut_of_the_end_and_every_line_taken_out_moved_or_doubled() -> None:
    for length in range(len(RECORD)):
        assert verify_bytes(RECORD[:length]).state != "intact"
    lines = RECORD.splitlines(keepends=True)
    for number, line in enumerate(lines):
        rest = lines[:number] + lines[number + 1 :]
        assert verify_bytes(b"".join(rest)).state != "intact"
        for place in range(len(lines) + 1):
            assert verify_bytes(b"".join([*lines[:place], line, *lines[place:]])).state != "intact"
            if [*rest[:place], line, *rest[place:]] != lines:
                assert verify_bytes(b"".join([*rest[:place], line, *rest[place:]])).state != "intact"
    assert verify_bytes(RECORD).state == "intact"


def test_readers_survive_hostile_bytes(fuzzer: Any) -> None:
    """A small round of the fuzz script; 100 000 inputs run as `python tests/faults/fuzz.py`."""
    report = fuzzer.fuzz(2500, seed=7)
    assert {name: row["bad"] for name, row in report.items() if row["bad"]} == {}
    assert sum(row["refused"] for row in report.values()) > 500


@pytest.mark.parametrize("model", [BenchSettings, FaultsSettings])
def test_a_bomb_of_references_is_refused_at_once(fuzzer: Any, model: Any) -> None:
    with pytest.raises(SettingsError):
        parse(fuzzer.BOMB, model, where="bomb.yaml")


@pytest.mark.parametrize(
    "scalar", ["9" * 300_000 + "x", "1_0" * 100_000 + "x", "1:1" * 100_000 + "x", "0" * 300_000 + "x"]
)
def test_a_long_scalar_is_judged_in_one_go(scalar: str) -> None:
    """A pattern that can match in several ways would take days here."""
    with pytest.raises(SettingsError):
        parse(b"name: " + scalar.encode(), BenchSettings, where="bench.yaml")


@pytest.mark.parametrize(
    "body", [b"volumes_ml: [" + b"no," * 20_000 + b"]", b"".join(b"k%d: 1\n" % n for n in range(9000))]
)
def test_a_file_of_nothing_but_problems_gets_a_short_answer(body: bytes) -> None:
    with pytest.raises(SettingsError) as refusal:
        parse(body, SolutionSettings, where="solution.yaml")
    assert 50 <= len(refusal.value.problems) <= 51
    assert refusal.value.problems[-1] == "solution.yaml: and more; mend these first"


cells = st.one_of(
    st.floats(allow_nan=True, allow_infinity=True).map(str),
    st.sampled_from(["", "1,5", "1.234,5", "=A1", "1e999", "-", "volume_ml", "ph", "E_mV", "\x00", '"', "1 000"]),
    st.text(max_size=6),
)


@given(st.lists(st.lists(cells, min_size=1, max_size=4), max_size=12), st.sampled_from([",", ";", "\t"]), st.booleans())
@settings(max_examples=150, deadline=None)
def test_a_table_of_anything_is_read_or_refused(
    tmp_path_factory: pytest.TempPathFactory, rows: list[list[str]], mark: str, named: bool
) -> None:
    path = tmp_path_factory.mktemp("tables") / "curve.csv"
    lines = ([f"volume_ml{mark}ph"] if named else []) + [mark.join(row) for row in rows]
    path.write_bytes("\n".join(lines).encode("utf-8", "surrogatepass"))
    try:
        curve = read_curve(path, CurveOptions()).curve
    except HalfdropError as refusal:
        told = str(refusal)
    else:
        told = ""
        assert np.all(np.isfinite(curve.volume_ml))
    assert len(told) < 5000


@given(st.text(max_size=80))
def test_no_text_reaches_a_terminal_as_a_command(text: str) -> None:
    shown = printable(text)
    assert len(shown) == len(text)
    assert all(letter.isprintable() for letter in shown)


@given(st.text(alphabet=st.characters(codec="utf-8"), max_size=60))
@settings(max_examples=50, deadline=None)
def test_no_label_becomes_a_path(tmp_path_factory: pytest.TempPathFactory, label: str) -> None:
    runs = tmp_path_factory.mktemp("runs")
    sink = new_record(runs, utc_s=0.0, label=label, durable=False)
    sink.write(b"x\n")
    sink.close()
    [made] = list(runs.rglob("*"))
    assert made.parent == runs
    assert ":" not in made.name


def test_a_log_keeps_one_line_a_message_and_stays_bounded(tmp_path: Path) -> None:
    log = LabLog(tmp_path)
    log.write("first\n\x1b[2J2026-01-01 forged line", utc_s=0.0)
    for _ in range(900):
        log.write("x" * 5000, utc_s=1.0)
    log.close()
    files = sorted(tmp_path.glob("halfdrop.log*"))
    assert 2 <= len(files) <= 6
    assert sum(file.stat().st_size for file in files) < 6_100_000
    assert all("\x1b" not in file.read_text(encoding="utf-8") for file in files)


def test_a_log_that_cannot_be_written_stops_nothing(tmp_path: Path) -> None:
    log = LabLog(tmp_path / "not there")
    log.write("said to nobody", utc_s=0.0)
    log.close()


# --- a hostile core -----------------------------------------------------------------------------------------------

volumes = st.one_of(st.floats(allow_nan=True, allow_infinity=True), st.floats(0.0005, 3.0), st.sampled_from([0.5, 2.0]))
TIP = Ask(key="tip-over-waste", text="", choices=("yes",))
GOGGLES = Ask(key="goggles", text="", choices=("yes", "no"))
#: a number is the volume of the next dose, rightly numbered
asked = st.one_of(
    st.builds(Dose, number=st.integers(-2, 40), volume_ml=volumes, reason=st.just("")),
    st.sampled_from([0.5, 0.55, 0.61, 3.0]),
    st.sampled_from([0.5, 0.55, 0.61, 3.0]),
    st.builds(Prime, volume_ml=volumes),
    st.builds(Prime, volume_ml=st.sampled_from([0.5, 2.0])),
    st.builds(Wait, seconds=st.floats(-5, 4000)),
    st.just(Refill()),
    st.just(Read()),
    st.just(TIP),
    st.just(GOGGLES),
)
beginnings = st.sampled_from([[], [GOGGLES], [GOGGLES, TIP], [TIP, Prime(volume_ml=2.0), GOGGLES]])


def _asks_for(wanted: list[Any]) -> Decisions:
    """A core that asks for all of this, whatever it is answered, and calls itself satisfied."""
    number = 0
    for action in wanted:
        if isinstance(action, float):
            number += 1
            yield Dose(number=number, volume_ml=action, reason="")
        else:
            number = max(number, action.number if isinstance(action, Dose) else 0)
            yield action
    return {"outcome": "completed", "reason": None, "end_points": [], "warnings": []}


@settings(max_examples=80, deadline=None)
@given(beginnings, st.lists(asked, min_size=8, max_size=80), st.sampled_from([1.0, 2.0, 7.0, 40.0]))
def test_no_core_can_pass_a_limit_of_vessel_waste_syringe_time_or_numbers(
    campaign: Any, beginning: list[Any], wanted: list[Any], room_left_ml: float
) -> None:
    """Whatever is asked goes through runner, drivers, wire and device; the world is then measured."""
    bench = campaign.build("acetic", 3, campaign.settings_of([], 3), contents_ml=4.0)
    initial_ml = room_ml(bench.plan) - room_left_ml
    plan = replace(
        bench.plan,
        sample=replace(bench.plan.sample, initial_volume_ml=initial_ml),
        vessel=replace(bench.plan.vessel, largest_dose_ml=0.6, waste_ml=3.0, longest_run_s=900.0),
        pump=replace(bench.plan.pump, reservoir_ml=6.0),
        dosing=replace(bench.plan.dosing, largest_ml=0.5),
        limits=replace(bench.plan.limits, run_time_s=900.0, titrant_ml=0.5),
        questions=(Question(key="goggles", text="", choices=("yes", "no"), must_be="yes"),),
        chemistry=replace(bench.plan.chemistry, expected_equivalence_volume_ml=None),
    )
    operator = AnswersOperator({"tip-over-waste": "yes", "goggles": "yes", "rinse-and-store": "yes"})
    sink = MemorySink()
    run(
        plan, _asks_for(beginning + wanted), replace(bench.devices, operator=operator), Journal(sink, bench.clock),
        clock=bench.clock, stop=bench.stop,
    )  # fmt: skip
    entries = [json.loads(line) for line in sink.data.splitlines()]
    doses = [entry for entry in entries if entry.get("observation") == "dosed"]
    primed_steps = sum(
        round(entry["volume_ml"] / plan.pump.step_ml) for entry in entries if entry.get("observation") == "primed"
    )
    world, now_s = bench.world, bench.clock.now_s()
    through_tip = world.mechanism.tip_steps_total(now_s)
    assert sum(entry["steps"] for entry in doses) + primed_steps == through_tip
    assert initial_ml + world.true_delivered_ml(now_s) < room_ml(plan)
    assert primed_steps * plan.pump.step_ml <= 3.0 + 1e-6
    assert through_tip * plan.pump.step_ml <= 4.0 + 6.0 + 1e-6, "more than syringe and reservoir held"
    assert all(entry["volume_ml"] <= 0.6 + 1e-6 for entry in doses)
    assert len({entry["number"] for entry in doses}) == len(doses), "a number was used twice"
    assert all(entry["at_s"] <= 900.0 + 1e-6 for entry in doses)
    if doses:
        answered = [entry for entry in entries if entry.get("observation") == "answered" and entry["key"] == "goggles"]
        assert entries.index(answered[0]) < entries.index(doses[0]), "dosed before the question was answered"
    bench.ports.close()


def test_a_note_with_markup_stays_text_in_the_record() -> None:
    sink = MemorySink()
    journal = Journal(sink, ManualClock())
    journal.begin({"operator": "<script>alert(1)</script>\x1b[31m"})
    journal.event("note", text="=cmd|' /C calc'!A0\n[bold]x[/bold]")
    journal.close("completed")
    lines = sink.data.splitlines()
    assert len(lines) == 3
    assert json.loads(lines[1])["text"] == "=cmd|' /C calc'!A0\n[bold]x[/bold]"
    assert b"\x1b" not in sink.data


def test_garbage_as_a_fault_file_is_told_apart_from_a_program_error(fuzzer: Any) -> None:
    dice, told = random.Random(5), []
    for _ in range(300):
        try:
            parse(fuzzer.spoil(fuzzer.FAULTS, dice), FaultsSettings, where="faults.yaml")
        except HalfdropError as error:
            told.append(str(error))
    assert len(told) > 100
    assert not [text for text in told if "\x1b" in text]
