"""Records decided again: identical byte for byte whatever policy and trouble, or the first difference with reasons."""

from __future__ import annotations

import io
import json
import random
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest

from configs.version import __version__
from controller.cli import main
from controller.commands.lines import Lines
from controller.foresight.study_plan import (
    BASELINE,
    EQUAL_VOLUMES,
    FIXED_WAIT,
    LAX_BASELINE,
    MODEL_GUIDED,
    WITHOUT_RECORD,
    Strategy,
    nominal_plan,
)
from controller.journal import Journal, encode
from controller.records.header import header_of
from controller.records.playback import play
from controller.records.record import Record, read_record
from controller.records.recordfile import FileSink
from controller.replay import ReplayError, dialogue, rebuild, replay
from controller.study import StudyWorld, drive
from controller.titration.actions import (
    Action,
    Back,
    Command,
    Dose,
    Failed,
    Finish,
    Observation,
    Read,
    Report,
    Resumed,
    Wait,
    to_entry,
)
from drivers.clock import ManualClock
from simulators.nominal import NominalCase, nominal_bench

STRATEGIES = (MODEL_GUIDED, WITHOUT_RECORD, BASELINE, LAX_BASELINE, FIXED_WAIT, EQUAL_VOLUMES)


def trouble(seed: int, world: StudyWorld) -> Callable[[Action], Observation | None]:
    """The world's answers, now and then with something else in their place."""
    draws = random.Random(seed)

    def answer(action: Action) -> Observation | None:
        at_s = world.now_s
        if isinstance(action, Report | Finish) or draws.random() > 0.02:
            return world.answer(action)
        if isinstance(action, Dose):
            done = world.answer(replace(action, volume_ml=action.volume_ml))
            assert done is not None
            return Failed(
                device="pump", what="silent", at_s=world.now_s, number=action.number,
                lowest_ml=action.volume_ml, highest_ml=action.volume_ml, steps=1,
            )  # fmt: skip
        kinds: list[Observation] = [
            Resumed(at_s=at_s, gap_s=3.25),
            Back(device="probe", at_s=at_s),
            Command(name="note", at_s=at_s, text="Übung, a sample with foam"),
            Command(name="dose", at_s=at_s, volume_ml=0.01),
        ]
        if isinstance(action, Read | Wait):
            kinds.append(Failed(device="probe", what="no reply within 1 s", at_s=at_s))
        return draws.choice(kinds)

    return answer


def recorded(
    path: Path, *, case: NominalCase = "acetic", seed: int = 1, strategy: Strategy = MODEL_GUIDED, faults: bool = False
) -> Record:
    nominal = nominal_bench(case, seed)
    plan = nominal_plan(nominal, strategy)
    clock = ManualClock()
    journal = Journal(FileSink(path, durable=False), clock)
    journal.begin(header_of(plan, devices={}, operator_name=None, hashes=None, clock=clock))
    world = StudyWorld(nominal.bench)
    inner = trouble(seed, world) if faults else world.answer

    def answer(action: Action) -> Observation | None:
        journal.write(action)
        found = inner(action)
        clock.wait(world.now_s - clock.now_s())
        if found is not None:
            journal.write(found)
        return found

    result = drive(plan, answer).result
    journal.write(Finish(result=result))
    journal.close(result["outcome"], result=result)
    return read_record(path)


@pytest.fixture(scope="module")
def one(tmp_path_factory: pytest.TempPathFactory) -> Record:
    return recorded(tmp_path_factory.mktemp("one") / "run.jsonl")


@pytest.mark.parametrize("strategy", STRATEGIES, ids=lambda strategy: strategy.name)
@pytest.mark.parametrize("faults", [False, True], ids=["calm", "faults"])
def test_every_policy_replays_to_identical_decisions(strategy: Strategy, faults: bool, tmp_path: Path):
    record = recorded(tmp_path / "run.jsonl", seed=5, strategy=strategy, faults=faults)
    again: list[str] = []
    found = replay(record, on_exchange=lambda action, _: again.append(encode(to_entry(action))))
    assert found.identical
    assert found.finished
    assert found.difference is None
    assert again == [encode(exchange.entry) for exchange in dialogue(record)]
    assert found.decisions == len(again) > 100
    if faults:
        assert any(record.of("failed")) or any(record.of("resumed"))


@pytest.mark.parametrize("case", ["malic", "phosphoric", "strong-acid", "very-weak-acid"])
def test_every_kind_of_curve_replays(case: NominalCase, tmp_path: Path):
    assert replay(recorded(tmp_path / "run.jsonl", case=case)).identical


def test_another_observation_leads_to_the_first_difference(one: Record):
    changed = Record(one.path, one.header, [dict(entry) for entry in one.entries], one.closing)
    [*readings] = changed.of("reading")
    readings[60]["potential_mv"] += 25.0
    found = replay(changed)
    assert not found.identical
    assert found.difference is not None
    assert found.difference.line > readings[60]["line"]
    assert found.difference.fields()
    assert 0 < found.decisions < len(list(dialogue(one)))


def test_reasons_name_what_changed(one: Record):
    header = {**one.header, "versions": {**one.header["versions"], "numpy": "0.1", "program": "0.0.1"}}
    found = replay(Record(one.path, header, one.entries, one.closing))
    assert any(reason.startswith("numpy: 0.1 then") for reason in found.reasons)
    assert any(reason.startswith("program: 0.0.1 then") for reason in found.reasons)
    assert replay(one).reasons == ("the plan was made by program version study, this is " + __version__,)


def test_another_plan_is_named_by_its_settings(one: Record):
    plan = nominal_plan(nominal_bench("acetic", 1), MODEL_GUIDED)
    first_ml = plan.dosing.first_dose_ml
    found = replay(one, replace(plan, dosing=replace(plan.dosing, first_dose_ml=first_ml + 0.05)))
    assert not found.identical
    assert found.difference is not None
    assert "volume_ml" in list(found.difference.fields())
    assert f"settings: dosing.first_dose_ml: {first_ml!r} then, {first_ml + 0.05!r} now" in found.reasons


@pytest.mark.parametrize("cut", [3, 50, 51, 52, 53, 300])
def test_a_record_cut_anywhere_rebuilds_the_core_as_it_was(one: Record, cut: int):
    built = rebuild(Record(one.path, one.header, one.entries[:cut], None))
    assert built.difference is None
    assert built.pending is not None
    following = one.entries[cut]
    if "action" in following:
        assert not built.recorded
        own = {"line", "utc", "run_s", "previous_sha256"}
        assert encode(to_entry(built.pending)) == encode({k: v for k, v in following.items() if k not in own})
    else:
        assert built.recorded
    built.decisions.close()


def test_an_observation_that_answers_nothing_is_refused(one: Record):
    entries = [entry for entry in one.entries if entry.get("action") != "read"]
    with pytest.raises(ReplayError, match="answers no action"):
        replay(Record(one.path, one.header, entries, None))


def test_entries_of_others_are_left_out(one: Record):
    extra = [
        {"line": 0, "event": "pump-stop", "why": "test"},
        {"line": 0, "action": "ask", "key": "x", "text": "x", "choices": ["a"], "by": "runner"},
    ]
    assert replay(Record(one.path, one.header, [*extra, *one.entries], one.closing)).identical


def test_it_plays_at_any_pace(one: Record):
    clock, sink = ManualClock(start_s=7.0), io.StringIO()
    shown = play(one, Lines(sink), clock=clock)
    assert shown == len(one.entries)
    assert clock.now_s() - 7.0 == pytest.approx(one.entries[-1]["run_s"], abs=1e-6)
    assert "end point 1 at" in sink.getvalue()
    assert sink.getvalue().count("dose ") >= 10


def test_the_command_says_identical_or_where_they_part(one: Record, tmp_path: Path, capsys: pytest.CaptureFixture[str]):
    assert main(["replay", str(one.path)]) == 0
    assert "identical: all" in capsys.readouterr().out
    lines = one.path.read_bytes().split(b"\n")
    place = next(index for index, line in enumerate(lines) if index > 200 and b'"observation":"reading"' in line)
    entry = json.loads(lines[place])
    lines[place] = lines[place].replace(
        f'"potential_mv":{entry["potential_mv"]}'.encode(), f'"potential_mv":{entry["potential_mv"] + 40}'.encode()
    )
    edited = tmp_path / "edited.jsonl"
    edited.write_bytes(b"\n".join(lines))
    main(["replay", str(edited), "--json"])
    told = capsys.readouterr()
    assert "was edited" in told.err
    assert json.loads(told.out)["decisions"] < json.loads(json.dumps(sum(1 for _ in dialogue(one))))


def test_a_torn_record_is_replayed_as_far_as_it_goes(one: Record, tmp_path: Path, capsys: pytest.CaptureFixture[str]):
    torn = tmp_path / "torn.jsonl"
    torn.write_bytes(one.path.read_bytes()[:20_000])
    assert main(["replay", str(torn)]) == 0
    told = capsys.readouterr()
    assert "as far as it goes" in told.out
    assert "breaks off" in told.err


@pytest.mark.parametrize("scale", ["0", "-1", "quick"])
def test_a_wrong_pace_is_refused(one: Record, scale: str, capsys: pytest.CaptureFixture[str]):
    assert main(["replay", str(one.path), "--time-scale", scale]) == 2
    assert "--time-scale" in capsys.readouterr().err
