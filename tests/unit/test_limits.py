"""The limits that end a run, each just kept and just passed, and what a dose is cut to."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest

from controller.guard import Guard
from controller.titration.actions import Dose
from controller.titration.endpoint import FoundEndPoint
from controller.titration.exchange import EndOfRunError, Exchange
from controller.titration.limits import check_limits, largest_dose_ml, room_ml
from controller.titration.plan import RunPlan
from controller.titration.points import Point

MakePlan = Callable[..., RunPlan]
FOUND = FoundEndPoint(
    number=1, volume_ml=5.0, standard_uncertainty_ml=0.001, estimator="inverse model", ph=8.1, potential_mv=None
)


def _point(**changes: Any) -> Point:
    values: dict[str, Any] = {
        "number": 3, "volume_ml": 1.0, "volume_sd_ml": 0.0, "delivered_ml": 1.0, "potential_mv": 100.0,
        "potential_sd_mv": 0.1, "ph": 5.0, "at_s": 10.0, "settled": True,
    }  # fmt: skip
    return Point(**(values | changes))


def _ended_by(
    plan: RunPlan, point: Point | None = None, *, found: tuple[FoundEndPoint, ...] = (), elapsed_s: float = 10.0,
    delivered_ml: float = 1.0,
) -> EndOfRunError | None:  # fmt: skip
    world = Exchange(plan)
    world.started_s, world.now_s, world.delivered_ml = 100.0, 100.0 + elapsed_s, delivered_ml
    try:
        check_limits(plan, world, point or _point(), found)
    except EndOfRunError as end:
        return end
    return None


@pytest.mark.parametrize(
    ("limit", "point", "text"),
    [
        pytest.param({"lowest_ph": 4.0}, {"ph": 3.99}, "pH 3.99 below the limit of 4", id="low pH"),
        pytest.param({"highest_ph": 9.0}, {"ph": 9.01}, "pH 9.01 above the limit of 9", id="high pH"),
        pytest.param({"lowest_mv": -50.0}, {"potential_mv": -50.1}, "mV -50.10 below the limit of -50", id="low mV"),
        pytest.param({"highest_mv": 250.0}, {"potential_mv": 250.1}, "mV 250.10 above the limit of 250", id="high mV"),
    ],
)
def test_a_signal_beyond_its_limit_ends_the_run(
    make_plan: MakePlan, limit: dict[str, float], point: dict[str, float], text: str
) -> None:
    [(name, value)] = limit.items()
    plan = make_plan(limits=limit)
    at_limit = _point(**{"ph" if name.endswith("ph") else "potential_mv": value})
    assert _ended_by(plan, at_limit) is None
    assert _ended_by(make_plan(), _point(**point)) is None
    assert _ended_by(plan, _point(number=0, **point)) is None  # before the first dose a sample may be anywhere
    ended = _ended_by(plan, _point(**point))
    assert ended is not None
    assert text in str(ended)
    assert "no end point found" in str(ended)


def test_a_method_that_follows_the_potential_has_no_ph_to_judge(make_plan: MakePlan) -> None:
    plan = make_plan(limits={"lowest_ph": 4.0, "highest_ph": 9.0})
    assert _ended_by(plan, _point(ph=None)) is None


def test_the_run_time_limit_ends_the_run(make_plan: MakePlan) -> None:
    assert _ended_by(make_plan(), elapsed_s=3600.0) is None
    ended = _ended_by(make_plan(), elapsed_s=3600.1)
    assert ended is not None
    assert "run time limit of 3600 s reached" in str(ended)


def test_the_titrant_limit_ends_the_run_where_no_dose_fits_any_more(make_plan: MakePlan) -> None:
    assert _ended_by(make_plan(), delivered_ml=11.995) is None
    assert _ended_by(make_plan(), delivered_ml=11.996) is not None


def test_the_overrun_counts_from_the_last_expected_end_point_only(make_plan: MakePlan) -> None:
    assert _ended_by(make_plan(), delivered_ml=6.001) is None
    assert _ended_by(make_plan(), found=(FOUND,), delivered_ml=6.0) is None
    assert _ended_by(make_plan(end_points={"expected": 2}), found=(FOUND,), delivered_ml=6.001) is None
    ended = _ended_by(make_plan(), found=(FOUND,), delivered_ml=6.001)
    assert ended is not None
    assert "1.000 mL beyond the last end point" in str(ended)


@pytest.mark.parametrize(
    ("change", "delivered_ml", "most_ml"),
    [
        pytest.param({"vessel": {"largest_dose_ml": 0.3}}, 0.0, 0.3, id="the bench's largest dose"),
        pytest.param({"pump": {"syringe_ml": 0.4}}, 0.0, 0.4, id="the syringe"),
        pytest.param({"limits": {"titrant_ml": 2.0}}, 1.8, 0.2, id="the titrant limit"),
        pytest.param({"vessel": {"capacity_ml": 71.1}}, 1.0, 0.1, id="the vessel"),
        pytest.param({"pump": {"refill": "none", "contents_ml": 0.25}}, 0.0, 0.25, id="what the syringe holds"),
        pytest.param({}, 0.0, 0.5, id="as wanted"),
    ],
)
def test_a_dose_is_cut_to_what_may_still_be_delivered(
    make_plan: MakePlan, change: dict[str, dict[str, float]], delivered_ml: float, most_ml: float
) -> None:
    plan = make_plan(**change)
    world = Exchange(plan)
    world.delivered_ml = delivered_ml
    assert largest_dose_ml(plan, world, 0.5) == pytest.approx(most_ml, abs=1e-9)
    assert largest_dose_ml(plan, world, 0.01) == pytest.approx(0.01, abs=1e-9)


def test_a_syringe_that_can_be_filled_again_does_not_bound_the_room(make_plan: MakePlan) -> None:
    plan = make_plan(pump={"contents_ml": 0.25})
    assert room_ml(plan, Exchange(plan)) == pytest.approx(12.0)


def test_the_guard_holds_the_bench_s_largest_dose_and_rate(make_plan: MakePlan) -> None:
    def refusal(volume_ml: float, **change: dict[str, float]) -> str | None:
        guard = Guard(make_plan(questions=(), **change))
        return guard.refusal(Dose(number=1, volume_ml=volume_ml, reason=""), 0.0)

    assert refusal(1.0) is None
    assert refusal(1.0001) == "dose of 1.0001 mL; this bench allows up to 1 mL"
    assert refusal(0.1, pump={"rate_ml_min": 10.0}) is None
    assert refusal(0.1, pump={"rate_ml_min": 10.1}) == "pump rate 10.1 mL/min; this bench allows up to 10 mL/min"
