"""What a report says of the probe: where its lag comes from, what the run learned, how it was left."""

from __future__ import annotations

from typing import Any

import pytest

from controller.report.instruments import instruments
from controller.report.probe import learned_from, probe_in_this_run

LAG = {
    "bulk_s": 1.48, "film_s": 1.97, "sum_s": 3.45, "sum_standard_uncertainty_s": 0.06, "transients": 24,
    "slowness": 0.98, "record_holds": True,
}  # fmt: skip


def test_what_the_run_learned_and_how_the_probe_was_left() -> None:
    closing = {"result": {"probe_lag": LAG}, "probe_stored": "yes", "probe_stood_s": 90.0}
    ((title, facts),) = probe_in_this_run(closing)
    assert title == "Probe in this run"
    assert dict(facts) == {
        "fast lag as learned": "3.450 s (u = 0.060 s), from 24 transients",
        "of it mixing, film": "1.48 s, 1.97 s",
        "times as slow as its record": "0.98",
        "afterwards": "rinsed and stored, 90 s after the end",
    }


@pytest.mark.parametrize(
    ("stored", "words"),
    [("no", "stood in the titrated solution"), ("not answered", "nobody said"), ("not asked", "the run was stopped")],
)
def test_a_probe_that_was_not_stored_is_said(stored: str, words: str) -> None:
    ((_, facts),) = probe_in_this_run({"result": {}, "probe_stored": stored, "probe_stood_s": None})
    assert words in facts[0][1]


def test_an_old_record_says_nothing() -> None:
    assert probe_in_this_run({"result": {"end_points": []}}) == []
    assert probe_in_this_run({}) == []
    assert learned_from({"bulk_s": 1.5}) == []


def test_the_lag_names_the_runs_it_comes_from_and_the_calibration_its_buffers() -> None:
    response = {"bulk_s": 1.5, "film_s": 2.0, "slow_s": 30.0, "slow_share": 0.01, "dead_time_s": 0.5,
                "learned_from": ["run-a", "run-b", "run-c"], "learned_sha256": "ab12"}  # fmt: skip
    calibration: dict[str, Any] = {
        "slope_fraction": 0.99, "isopotential_ph": 7.0, "isopotential_mv": 3.0,
        "covered": {"lowest_ph": 4.0, "highest_ph": 10.01, "temperature_c": 25.0, "largest_ph_beyond": 0.5},
    }  # fmt: skip
    plan = {"titrant": {"name": "t"}, "probe": {"calibration": calibration, "response": response}}
    told = dict(instruments({"plan": plan}))
    assert ("mixing and film from", "3 runs, run-a to run-c") in told["Response of the probe"]
    assert ("buffers", "pH 4.00 to 10.01, at 25.0 °C") in told["Calibration of the probe"]
    assert not any("covered" in words for words, _ in told["Calibration of the probe"])
