"""Records as earlier programs wrote them are kept in tests/data/records: they must be read for ever.

Each file is named by its record version and the program that wrote it; none is ever made anew.
"""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from controller.curves.evaluate_record import evaluate_record
from controller.records.encoding import plan_from_json, plan_to_json
from controller.records.migrations import migrated
from controller.records.playback import play
from controller.records.record import points, read_record
from controller.records.verification import verify
from controller.replay import dialogue, plan_of_record, replay
from controller.running.progress import Progress
from controller.titration.plan import PLAN_SCHEMA_VERSION
from drivers.clock import ManualClock

KEPT = sorted((Path(__file__).resolve().parents[1] / "data" / "records").glob("run-record-*.jsonl"))


@pytest.fixture(params=KEPT, ids=lambda path: path.stem)
def kept(request: pytest.FixtureRequest) -> Path:
    path: Path = request.param
    return path


def test_there_are_some():
    assert KEPT


def test_it_is_read_whole(kept: Path):
    assert verify(kept).state == "intact"
    record = read_record(kept)
    plan = plan_of_record(record)
    assert plan.sample.sample_id
    assert len(points(record)) >= 10
    assert sum(1 for _ in dialogue(record)) > 100
    # what the plan has learned to hold since then does not change what it held
    held, now = dict(record.header["plan"]), plan_to_json(plan)
    del held["schema_version"]
    assert all(json.loads(json.dumps(now[key])) == value for key, value in held.items() if not isinstance(value, dict))


def test_it_is_evaluated_to_what_it_was(kept: Path):
    [was] = (read_record(kept).closing or {})["result"]["end_points"]
    [again] = evaluate_record(kept)["end_points"]
    assert abs(again["volume_ml"] - was["volume_ml"]) < 3.0 * was["standard_uncertainty_ml"]


def test_it_is_decided_again_as_far_as_the_decisions_are_the_same(kept: Path):
    found = replay(read_record(kept))
    assert found.decisions > 20  # the questions and the readings at rest have not changed
    if found.difference is not None:
        assert found.difference.fields()


def test_it_is_watched_again(kept: Path):
    shown: list[Progress] = []
    record = read_record(kept)
    play(record, shown.append, clock=ManualClock())
    assert len(shown) == sum("event" not in entry for entry in record.entries)


@pytest.mark.parametrize("key", ["seed", "traceability"])
def test_a_plan_from_before_a_field_was_known_is_read(kept: Path, key: str):
    held = dict(read_record(kept).header["plan"])
    held.pop(key, None)
    assert plan_from_json(held).sample == plan_of_record(read_record(kept)).sample


def test_a_plan_of_an_earlier_version_is_brought_to_the_present_one(kept: Path):
    held = read_record(kept).header["plan"]
    before = json.dumps(held)
    plan = plan_of_record(read_record(kept))
    assert plan.schema_version == PLAN_SCHEMA_VERSION
    assert json.dumps(held) == before  # the record itself is left as it is
    now = migrated(held)
    # by hand, what version 2 brought: no end point at a set pH, no range of buffers, no lag learned from runs
    assert now["end_points"]["at_ph"] is None
    assert now["probe"]["response"]["learned_from"] == []
    assert set(now) == set(plan_to_json(plan)) - {"traceability", "response_check"} | set(held)


def test_the_kept_records_are_of_every_version():
    versions = {read_record(path).header["plan"]["schema_version"] for path in KEPT}
    assert versions == set(range(1, PLAN_SCHEMA_VERSION + 1))


@pytest.mark.parametrize("version", [0, -1, True, "1", None, 1.0])
def test_a_version_that_never_was_is_not_brought_anywhere(version: object):
    plan = {"schema_version": version, "end_points": {}}
    assert migrated(plan) is plan
