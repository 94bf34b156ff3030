"""The time left: near the truth from the first points on, without jumps, never beyond the method's run time."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from itertools import pairwise
from pathlib import Path

import pytest

from controller.records.playback import play
from controller.records.record import Record, read_record
from controller.running.progress import Pace, Progress
from controller.titration.actions import Dose, Dosed, Report
from controller.titration.plan import RunPlan
from drivers.clock import ManualClock

MakePlan = Callable[..., RunPlan]
KEPT = Path(__file__).parents[1] / "data" / "records" / "run-record-1-program-0.1.0.jsonl"


@pytest.fixture(scope="module")
def record() -> Record:
    return read_record(KEPT)


@pytest.fixture(scope="module")
def heard(record: Record) -> list[Progress]:
    """A recorded run as its watcher heard it, from the first estimate on."""
    told: list[Progress] = []
    play(record, told.append, clock=ManualClock())
    return [one for one in told if one.time_left_s is not None]


def test_the_end_shown_never_jumps(heard: list[Progress]) -> None:
    ends_s = [one.at_s + (one.time_left_s or 0.0) for one in heard]
    assert max(abs(later / earlier - 1.0) for earlier, later in pairwise(ends_s)) < 0.2


def test_the_time_left_does_not_rise_towards_the_end(heard: list[Progress]) -> None:
    half_s = heard[-1].at_s / 2.0
    left_s = [one.time_left_s or 0.0 for one in heard if one.at_s > half_s]
    lowest_s = left_s[0]
    for one_s in left_s:
        assert one_s <= 1.06 * lowest_s + 1.0
        lowest_s = min(lowest_s, one_s)


def test_the_end_shown_is_near_the_truth_from_the_first_points_on(heard: list[Progress]) -> None:
    true_s = heard[-1].at_s
    assert heard[0].at_s < 0.2 * true_s
    for one in heard:
        assert one.at_s + (one.time_left_s or 0.0) == pytest.approx(true_s, rel=0.15)


def _points(plan: RunPlan, *, upto_ml: float, settle_s: float, dose_ml: float = 0.5) -> Iterator[tuple[Pace, float]]:
    """A run of equal doses and settling times, 12 s of pump time a mL."""
    pace, at_s, delivered_ml, number = Pace(plan), 0.0, 0.0, 0
    while delivered_ml < upto_ml:
        number += 1
        pace.saw(Dose(number=number, volume_ml=dose_ml, reason=""), at_s, delivered_ml)
        at_s, delivered_ml = at_s + 12.0 * dose_ml, delivered_ml + dose_ml
        pace.saw(Dosed(at_s=at_s, number=number, volume_ml=dose_ml), at_s, delivered_ml)
        at_s += settle_s
        pace.saw(Report(what="point", volume_ml=delivered_ml), at_s, delivered_ml)
        left_s = pace.time_left_s(at_s, delivered_ml)
        if left_s is not None:
            yield pace, left_s


def test_longer_settling_and_a_farther_end_point_take_longer(make_plan: MakePlan) -> None:
    def first_left_s(settle_s: float, expected_ml: float) -> float:
        plan = make_plan(chemistry={"expected_equivalence_volume_ml": expected_ml})
        return next(_points(plan, upto_ml=2.0, settle_s=settle_s))[1]

    assert first_left_s(20.0, 5.0) > 1.5 * first_left_s(10.0, 5.0)
    assert first_left_s(10.0, 10.0) > first_left_s(10.0, 5.0) + 5.0 * 12.0


def test_a_second_expected_end_point_takes_its_time(make_plan: MakePlan) -> None:
    one, two = make_plan(), make_plan(end_points={"expected": 2})
    left_s = {}
    for name, plan in (("one", one), ("two", two)):
        pace = Pace(plan)
        for number, at_s in enumerate((10.0, 20.0)):
            pace.saw(Report(what="forecast", volume_ml=2.5 if plan is two else 5.0, end_point=1), at_s, 0.5 * number)
            pace.saw(Report(what="point", volume_ml=0.5 * number), at_s, 0.5 * number)
        left_s[name] = pace.time_left_s(20.0, 0.5) or 0.0
    assert left_s["two"] > left_s["one"] + 50.0


def test_the_method_s_run_time_bounds_it(make_plan: MakePlan) -> None:
    plan = make_plan(limits={"run_time_s": 60.0})
    told = list(_points(plan, upto_ml=1.5, settle_s=10.0))
    assert max(left_s for _, left_s in told) <= 60.0
    pace = told[-1][0]
    assert pace.time_left_s(59.0, 1.5) == pytest.approx(1.0)
    assert pace.time_left_s(61.0, 1.5) == 0.0


def test_a_point_that_takes_longer_holds_the_time_left(make_plan: MakePlan) -> None:
    """Far points settle in 10 s, near ones are guessed to take 1.8 times as long."""
    *_, (pace, left_s) = _points(make_plan(), upto_ml=2.0, settle_s=10.0)
    at_s = 4 * 16.0
    assert pace.time_left_s(at_s + 10.0, 2.0) == pytest.approx(left_s - 10.0)
    assert pace.time_left_s(at_s + 100.0, 2.0) == pace.time_left_s(at_s + 1000.0, 2.0) == pytest.approx(left_s - 18.0)


def test_a_run_that_goes_on_behind_its_end_point_always_has_something_left(make_plan: MakePlan) -> None:
    told = [left_s for _, left_s in _points(make_plan(), upto_ml=11.5, settle_s=10.0)]
    assert min(told) == told[-1] >= 5.0  # half a point


def test_without_an_expected_volume_nothing_is_told_before_a_forecast(make_plan: MakePlan) -> None:
    plan = make_plan(chemistry={"expected_equivalence_volume_ml": None})
    assert list(_points(plan, upto_ml=2.0, settle_s=10.0)) == []
