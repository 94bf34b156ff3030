"""The probe's record: what runs learned of its lag, what a later run starts from, and a slowing probe named in time."""

from __future__ import annotations

import datetime as dt
import json
import math
from dataclasses import replace
from pathlib import Path
from random import Random
from typing import Any

import pytest

from controller.calibration.probe_record import (
    LearnedTimes,
    file_of,
    keep_learned,
    keep_stored,
    learned_of,
    learned_times,
    sha256_of,
    stored_utc,
)
from controller.calibration.probe_trend import SLOWING, fast_lag, slowing
from controller.journal import Journal
from controller.records.record import read_record
from controller.records.recordfile import new_record
from drivers.clock import ManualClock

PROBE = "cider house probe 7: glass/electrode"
START = dt.datetime(2026, 3, 2, 8, tzinfo=dt.UTC)
LAG = {
    "bulk_s": 1.5, "bulk_standard_uncertainty_s": 0.2, "film_s": 2.0, "film_standard_uncertainty_s": 0.2,
    "sum_s": 3.5, "sum_standard_uncertainty_s": 0.07, "transients": 20, "temperature_c": 25.0, "slowness": 1.0,
    "record_holds": True,
}  # fmt: skip


def learned(day: int, film_s: float = 2.0, bulk_s: float = 1.5, **changed: Any) -> LearnedTimes:
    utc = (START + dt.timedelta(days=day)).isoformat().replace("+00:00", "Z")
    made = LearnedTimes(
        run=f"run-{day:03d}", record_sha256="0" * 64, utc=utc, method="juice-acidity", bulk_s=bulk_s,
        bulk_standard_uncertainty_s=0.15, film_s=film_s, film_standard_uncertainty_s=0.2, sum_s=bulk_s + film_s,
        sum_standard_uncertainty_s=0.07, transients=20,
    )  # fmt: skip
    return replace(made, **changed)


def run_record(runs: Path, *, at_s: float = 0.0, entries: tuple[dict[str, Any], ...] = (), **result: Any) -> Path:
    """A closed record with the parts that the probe's record looks at."""
    clock = ManualClock(start_utc_s=START.timestamp() + at_s)
    runs.mkdir(exist_ok=True)
    sink = new_record(runs, utc_s=clock.utc_s(), label="juice", durable=False)
    journal = Journal(sink, clock)
    plan = {"method_name": "juice-acidity", "titrant": {}, "probe": {"identity": PROBE},
            "traceability": {"warnings": ["known before the run"]}}  # fmt: skip
    journal.begin({"plan": plan, "started_utc": clock_text(clock), "warnings": ["known at its start"]})
    for entry in entries:
        journal.event(**entry)
    whole = {"outcome": "completed", "end_points": [{"volume_ml": 5.0}], "warnings": [], "probe_lag": LAG, **result}
    journal.close("completed", result=whole)
    return sink.path


def clock_text(clock: ManualClock) -> str:
    return dt.datetime.fromtimestamp(clock.utc_s(), dt.UTC).isoformat().replace("+00:00", "Z")


# --- the record ------------------------------------------------------------------------------------------------------


def test_a_run_is_kept_once_and_read_back_as_it_was(tmp_path: Path) -> None:
    record = run_record(tmp_path / "runs")
    kept = keep_learned(tmp_path, tmp_path / "runs", record)
    assert kept is not None
    assert keep_learned(tmp_path, tmp_path / "runs", record) is None
    assert learned_times(tmp_path, PROBE) == [kept]
    assert (kept.bulk_s, kept.film_s, kept.sum_standard_uncertainty_s, kept.transients) == (1.5, 2.0, 0.07, 20)
    assert (kept.run, kept.doubt) == (record.stem, None)
    assert kept.record_sha256 == (read_record(record).closing or {})["last_sha256"]
    assert learned_times(tmp_path, "another probe") == []


def test_a_missing_record_is_made_again_from_the_runs(tmp_path: Path) -> None:
    runs = tmp_path / "runs"
    records = [run_record(runs, at_s=60.0 * number) for number in range(4)]
    for record in records:
        keep_learned(tmp_path, runs, record)
    before = learned_times(tmp_path, PROBE)
    file_of(tmp_path, PROBE).unlink()
    keep_learned(tmp_path, runs, records[-1])
    assert learned_times(tmp_path, PROBE) == before
    assert len(before) == 4


def test_a_torn_line_costs_itself_only(tmp_path: Path) -> None:
    runs = tmp_path / "runs"
    keep_learned(tmp_path, runs, run_record(runs))
    path = file_of(tmp_path, PROBE)
    path.write_bytes(path.read_bytes() + b'{"probe": "cider house pro')
    keep_learned(tmp_path, runs, run_record(runs, at_s=60.0))
    assert len(learned_times(tmp_path, PROBE)) == 2


@pytest.mark.parametrize(
    ("changed", "words"),
    [
        ({"warnings": ["known before the run", "known at its start"]}, None),
        ({"warnings": ["bubble at the probe"]}, "the run had a warning: bubble at the probe"),
        ({"outcome": "stopped"}, "not completed"),
        ({"end_points": []}, "not completed"),
        ({"trusted": False}, "not completed"),
        ({"probe_lag": {**LAG, "transients": 3}}, "3 transients only"),
    ],
)
def test_what_speaks_against_a_run_is_kept_with_its_values(tmp_path: Path, changed: Any, words: str | None) -> None:
    found = learned_of(read_record(run_record(tmp_path / "runs", **changed)))
    assert found is not None
    assert words in found.doubt if words is not None and found.doubt is not None else found.doubt == words


def test_a_run_that_learned_nothing_is_not_kept(tmp_path: Path) -> None:
    assert keep_learned(tmp_path, tmp_path / "runs", run_record(tmp_path / "runs", probe_lag=None)) is None
    assert not file_of(tmp_path, PROBE).exists()


def test_that_the_probe_was_stored_is_kept_beside(tmp_path: Path) -> None:
    assert stored_utc(tmp_path, PROBE) is None
    keep_stored(tmp_path, PROBE, "2026-03-02T17:00:00Z")
    keep_learned(tmp_path, tmp_path / "runs", run_record(tmp_path / "runs"))
    assert stored_utc(tmp_path, PROBE) == "2026-03-02T17:00:00Z"
    assert len(learned_times(tmp_path, PROBE)) == 1


def test_lines_of_a_later_version_are_passed_over(tmp_path: Path) -> None:
    keep_learned(tmp_path, tmp_path / "runs", run_record(tmp_path / "runs"))
    path = file_of(tmp_path, PROBE)
    path.write_text(path.read_text() + json.dumps({"probe": PROBE, "run": "later", "lag": 3}) + "\n[1]\n")
    assert len(learned_times(tmp_path, PROBE)) == 1


# --- what a later run starts from ------------------------------------------------------------------------------------


def test_fewer_than_three_runs_change_nothing() -> None:
    assert fast_lag([learned(0), learned(1)], method="juice-acidity") is None
    assert fast_lag([learned(0), learned(1), learned(2)], method="another") is None


def test_equal_weights_give_the_plain_weighted_mean() -> None:
    # weighted mean with falling weights 0.5625, 0.75, 1, by hand, in logarithms
    third = learned(2, 2.1, film_standard_uncertainty_s=0.21)
    found = fast_lag([learned(0, 2.0), learned(1, 2.0), third], method="juice-acidity")
    assert found is not None
    assert found.film_s == pytest.approx(2.0 * math.exp(math.log(1.05) / 2.3125), abs=2e-4)
    assert found.bulk_s == 1.5
    assert len(found.entries) == 3
    assert 0.0 < found.film_standard_uncertainty_s < 0.2


def test_runs_in_doubt_and_runs_off_the_others_are_never_taken() -> None:
    sound = [learned(day, 2.0 + 0.01 * (day % 3)) for day in range(5)]
    fault = [learned(5, 5.5, doubt="the run had a warning: bubble"), learned(6, 5.8)]
    found, clean = fast_lag([*sound, *fault], method="juice-acidity"), fast_lag(sound, method="juice-acidity")
    assert found is not None
    assert found == clean
    assert [one.run for one in found.entries] == [one.run for one in sound]


def test_only_runs_since_the_response_was_measured_count() -> None:
    entries = [learned(day, 3.0) for day in range(6)] + [learned(day, 2.0) for day in range(10, 14)]
    found = fast_lag(entries, method="juice-acidity", since_utc=entries[6].utc.replace("08:00", "07:00"))
    assert found is not None
    assert found.film_s == 2.0
    assert len(found.entries) == 4


def test_it_does_not_hang_on_the_order_of_lines_and_its_hash_tells_another_set() -> None:
    entries = [learned(day, 2.0 + 0.01 * day) for day in range(7)]
    found, turned = fast_lag(entries, method="juice-acidity"), fast_lag(entries[::-1], method="juice-acidity")
    assert found is not None
    assert found == turned
    assert sha256_of(found.entries) != sha256_of(found.entries[1:])


# --- a slowing probe -------------------------------------------------------------------------------------------------


def test_a_steady_probe_is_never_named() -> None:
    for seed in range(200):
        random = Random(seed)
        entries = [learned(day, 2.0 * math.exp(random.gauss(0.0, 0.04))) for day in range(40)]
        assert all(slowing(entries[:upto]) is None for upto in range(8, 41, 4)), seed


def test_a_slowing_probe_is_named_before_it_is_a_third_slower() -> None:
    for seed in range(50):
        random = Random(seed)
        entries = [
            learned(day, 2.0 * math.exp(random.gauss(0.0, 0.03) + max(0, day - 10) * 0.012)) for day in range(60)
        ]
        first = next(upto for upto in range(8, 61) if slowing(entries[:upto]) is not None)
        assert entries[first - 1].sum_s < 1.35 * 3.5, seed


def test_the_warning_says_how_much_since_when_and_until_when() -> None:
    entries = [learned(day, 2.0) for day in range(10)] + [learned(10 + day, 2.0 + 0.1 * day) for day in range(14)]
    found = slowing(entries)
    assert found is not None
    assert not found.suddenly
    assert found.ratio > SLOWING
    assert found.text.startswith("the probe is slowing: in the last runs of juice-acidity its fast lag was 4.7 s")
    assert "1.3 times the 3.5 s of 2026-03-02 to 2026-03-06" in found.text
    assert found.followed_until is not None
    assert dt.date(2026, 4, 1) < dt.date.fromisoformat(found.followed_until) < dt.date(2026, 8, 1)


def test_a_probe_that_is_slow_all_at_once_is_named_after_one_run_and_free_once_cleaned() -> None:
    steady = [learned(day, 2.0) for day in range(8)]
    after = slowing([*steady, learned(8, 3.6, doubt="the run had a warning: answers 1.4 times as slowly")])
    assert after is not None
    assert after.suddenly
    assert "in the last run of juice-acidity" in after.text
    slow = [learned(day, 3.6) for day in range(8, 12)]
    assert slowing([*steady, *slow]) is not None
    assert slowing([*steady, *slow, learned(12, 2.05)]) is None


def test_another_vessel_is_no_slower_probe() -> None:
    entries = [learned(day, 2.0) for day in range(8)]
    entries += [learned(day, 2.0, bulk_s=4.0, method="wash-water-alkalinity") for day in range(8, 20)]
    assert slowing(entries) is None
