"""The guard: no sequence of actions passes a limit, whatever the pump does with them; plans that cannot fit."""

from __future__ import annotations

import math
from collections.abc import Callable

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from controller.guard import Guard, room_ml
from controller.planning.plancheck import StartRefusedError, check_start, start_warnings, titrant_at_hand_ml
from controller.titration.actions import Action, Dose, Prime, Read, Refill, Wait
from controller.titration.plan import RunPlan

MakePlan = Callable[..., RunPlan]
volumes = st.one_of(
    st.floats(0.01, 8.0),
    st.floats(0.01, 8.0),
    st.floats(-1.0, 60.0),
    st.sampled_from([0.0, math.nan, math.inf, -math.inf, 1e-9, 1.0]),
)
actions = st.one_of(
    volumes.map(lambda v: Dose(number=1, volume_ml=v, reason="")),
    volumes.map(lambda v: Prime(volume_ml=v)),
    st.just(Refill()),
    st.just("tip"),
    st.floats(-1.0, 3000.0).map(lambda s: Wait(seconds=s)),
    st.just(Read()),
    st.sampled_from(["tip", "goggles"]),
)
#: what became of an action that was let through: a share of it, or nobody knows
outcomes = st.floats(0.0, 1.0) | st.none()


@settings(max_examples=150, deadline=None)
@given(
    st.lists(st.tuples(actions, outcomes), max_size=60),
    st.floats(20.0, 79.0),
    st.floats(0.5, 100.0),
    st.floats(0.0, 60.0),
)
def test_no_sequence_of_actions_passes_a_limit(
    make_plan: MakePlan,
    steps: list[tuple[Action | str, float | None]],
    initial_ml: float,
    largest_ml: float,
    reservoir_ml: float,
) -> None:
    """The world is kept apart from the guard; a dose that nobody knows about was in truth delivered whole."""
    plan = make_plan(
        sample={"initial_volume_ml": initial_ml},
        vessel={"largest_dose_ml": largest_ml},
        pump={"reservoir_ml": reservoir_ml},
    )
    guard = Guard(plan)
    vessel_ml, waste_ml, contents_ml, reservoir, now_s, asked = initial_ml, 0.0, 10.0, reservoir_ml, 0.0, False
    guard.answered("tip-over-waste", "yes")
    for action, share in steps:
        if isinstance(action, str):
            guard.answered(*(("tip-over-waste", "yes") if action == "tip" else ("goggles", "yes")))
            asked = asked or action == "goggles"
            continue
        if guard.refusal(action, now_s) is not None:
            continue
        if isinstance(action, Dose | Prime):
            moved_ml = action.volume_ml * (1.0 if share is None else share)
            guard.intend(action)
            guard.settle(action, math.nan if share is None else moved_ml)
            contents_ml -= moved_ml
            now_s += moved_ml / plan.pump.rate_ml_min * 60.0
            if isinstance(action, Dose):
                assert asked
                assert action.volume_ml <= largest_ml + 1e-6
                vessel_ml += moved_ml
            else:
                waste_ml += moved_ml
        elif isinstance(action, Refill):
            drawn_ml = min(10.0 - contents_ml, reservoir)
            contents_ml, reservoir = contents_ml + drawn_ml, reservoir - drawn_ml
            guard.filled(contents_ml, reservoir)
        elif isinstance(action, Wait):
            now_s += action.seconds
        assert vessel_ml < room_ml(plan)
        assert waste_ml <= plan.vessel.waste_ml + 1e-6
        assert contents_ml >= -1e-6
        assert now_s <= plan.vessel.longest_run_s + 1e-6
    assert vessel_ml + waste_ml - initial_ml <= 10.0 + reservoir_ml + 1e-6


def test_a_dose_up_to_just_below_the_room_is_let_through(make_plan: MakePlan) -> None:
    guard = Guard(make_plan(sample={"initial_volume_ml": 79.5}, questions=()))
    assert guard.refusal(Dose(number=1, volume_ml=0.499, reason=""), 0.0) is None
    refusal = guard.refusal(Dose(number=1, volume_ml=0.5, reason=""), 0.0)
    assert refusal is not None
    assert "79.5 mL in the vessel and a dose of 0.5 mL reach its limit of 80 mL (100 mL less 10" in refusal


def test_a_dose_larger_than_the_bench_allows_is_refused(make_plan: MakePlan) -> None:
    guard = Guard(make_plan(questions=(), vessel={"largest_dose_ml": 0.6}))
    assert guard.refusal(Dose(number=1, volume_ml=0.6, reason=""), 0.0) is None
    refusal = guard.refusal(Dose(number=1, volume_ml=0.601, reason=""), 0.0)
    assert refusal == "dose of 0.601 mL; this bench allows up to 0.6 mL"


def test_a_refill_draws_no_more_than_the_reservoir_holds(make_plan: MakePlan) -> None:
    """Whatever the pump tells of itself: the rest of the syringe is air."""
    guard = Guard(make_plan(questions=(), pump={"contents_ml": 0.0, "reservoir_ml": 1.5}))
    guard.filled(10.0, None)
    assert (guard.account.contents_ml, guard.account.reservoir_ml) == (1.5, 0.0)
    assert guard.refusal(Dose(number=1, volume_ml=0.9, reason=""), 0.0) is None
    guard.intend(Dose(number=1, volume_ml=0.9, reason=""))
    assert guard.refusal(Dose(number=2, volume_ml=0.7, reason=""), 0.0) is not None


def test_an_account_passed_after_the_fact_is_a_breach(make_plan: MakePlan) -> None:
    guard = Guard(make_plan(sample={"initial_volume_ml": 79.5}, questions=()))
    dose = Dose(number=1, volume_ml=0.1, reason="")
    guard.intend(dose)
    guard.settle(dose, 0.7)
    assert guard.breach is not None
    assert guard.refusal(Dose(number=2, volume_ml=0.001, reason=""), 0.0) == guard.breach
    assert guard.refusal(Refill(), 0.0) == guard.breach


def test_waste_is_a_breach_too(make_plan: MakePlan) -> None:
    guard = Guard(make_plan())
    prime = Prime(volume_ml=1.0)
    guard.intend(prime)
    guard.settle(prime, 21.0)
    assert guard.breach == "21 mL are in the waste, it takes 20 mL"


def test_a_dose_that_nobody_knows_of_counts_whole(make_plan: MakePlan) -> None:
    guard = Guard(make_plan(sample={"initial_volume_ml": 79.0}, questions=()))
    dose = Dose(number=1, volume_ml=0.6, reason="")
    guard.intend(dose)
    guard.settle(dose, math.nan)
    assert guard.account.vessel_ml == pytest.approx(79.6)
    assert guard.refusal(Dose(number=2, volume_ml=0.5, reason=""), 0.0) is not None


def test_a_dose_cut_short_leaves_its_rest_in_the_syringe(make_plan: MakePlan) -> None:
    guard = Guard(make_plan(pump={"contents_ml": 1.0}, questions=()))
    dose = Dose(number=1, volume_ml=1.0, reason="")
    guard.intend(dose)
    guard.settle(dose, 0.25)
    assert guard.account.vessel_ml == pytest.approx(50.25)
    assert guard.refusal(Dose(number=2, volume_ml=0.75, reason=""), 0.0) is None
    assert guard.refusal(Dose(number=2, volume_ml=0.76, reason=""), 0.0) is not None


def test_what_was_primed_before_counts(make_plan: MakePlan) -> None:
    guard = Guard(make_plan(pump={"contents_ml": 100.0}))
    guard.answered("tip-over-waste", "yes")
    for _ in range(2):
        assert guard.refusal(Prime(volume_ml=9.0), 0.0) is None
        guard.intend(Prime(volume_ml=9.0))
        guard.settle(Prime(volume_ml=9.0), 9.0)
    refusal = guard.refusal(Prime(volume_ml=9.0), 0.0)
    assert refusal == "18 mL in the waste and 9 mL to prime exceed its 20 mL; empty it"


def test_a_dose_that_would_end_too_late_is_refused(make_plan: MakePlan) -> None:
    guard = Guard(make_plan(questions=()))  # 1 mL takes 12 s
    assert guard.refusal(Dose(number=1, volume_ml=1.0, reason=""), 7188.0) is None
    assert guard.refusal(Dose(number=1, volume_ml=1.0, reason=""), 7188.1) is not None


def test_tip_over_waste_is_forgotten_with_the_next_dose(make_plan: MakePlan) -> None:
    guard = Guard(make_plan(questions=()))
    guard.answered("tip-over-waste", "yes")
    assert guard.refusal(Prime(volume_ml=1.0), 0.0) is None
    guard.intend(Dose(number=1, volume_ml=0.1, reason=""))
    assert guard.refusal(Prime(volume_ml=1.0), 0.0) is not None


@pytest.mark.parametrize("temperature_c", [None, 10.0, 25.0, 40.0])
def test_temperatures_inside_the_window_are_fine(make_plan: MakePlan, temperature_c: float | None) -> None:
    guard = Guard(make_plan())
    guard.saw_temperature(temperature_c)
    assert guard.breach is None


@pytest.mark.parametrize("temperature_c", [9.9, 40.1, -300.0])
def test_temperatures_outside_are_not(make_plan: MakePlan, temperature_c: float) -> None:
    guard = Guard(make_plan())
    for _ in range(2):
        guard.saw_temperature(temperature_c)
    assert guard.breach is None  # a digit may be garbled
    guard.saw_temperature(temperature_c)
    assert guard.breach is not None


def test_single_garbled_temperatures_never_add_up(make_plan: MakePlan) -> None:
    guard = Guard(make_plan())
    for temperature_c in (2.0, 25.0, 250.0, 25.0, 2.0, 2.0, 25.0) * 5:
        guard.saw_temperature(temperature_c)
    assert guard.breach is None


def test_a_refill_without_valve_or_reservoir_is_refused(make_plan: MakePlan) -> None:
    assert Guard(make_plan(pump={"refill": "none"})).refusal(Refill(), 0.0) is not None
    assert Guard(make_plan(pump={"reservoir_ml": 0.0})).refusal(Refill(), 0.0) is not None
    assert Guard(make_plan()).refusal(Refill(), 0.0) is None


def test_a_pump_that_does_not_tell_its_reservoir_is_counted(make_plan: MakePlan) -> None:
    guard = Guard(make_plan(pump={"contents_ml": 2.0, "reservoir_ml": 12.0}))
    guard.filled(10.0, None)
    assert (guard.account.contents_ml, guard.account.reservoir_ml) == (10.0, 4.0)


# --- before anything moves -------------------------------------------------------------------------------------------


def test_a_plan_that_fits_is_let_through_without_a_warning(plan: RunPlan) -> None:
    check_start(plan)
    assert start_warnings(plan) == []


@pytest.mark.parametrize(
    ("change", "texts"),
    [
        pytest.param(
            {"limits": {"titrant_ml": 30.0}},
            ["titrant limit of 30 mL on 50 mL of sample exceeds the vessel's 80 mL", "set it below 30 mL"],
            id="vessel",
        ),
        pytest.param({"sample": {"initial_volume_ml": 80.0}}, ["the sample's 80 mL do not fit"], id="sample"),
        pytest.param(
            {"pump": {"refill": "none"}}, ["exceeds the titrant at hand: the syringe holds 10 mL"], id="syringe"
        ),
        pytest.param(
            {"pump": {"reservoir_ml": 1.5}}, ["syringe and reservoir hold 11.5 mL; fill up"], id="syringe plan"
        ),
        pytest.param({"dosing": {"largest_ml": 2.0}}, ["largest dose is 2; this bench allows up to 1 mL"], id="dose"),
        pytest.param(
            {"dosing": {"largest_ml": 12.0}, "vessel": {"largest_dose_ml": 20.0}},
            ["up to 10 mL, the whole syringe"],
            id="dose beyond the syringe",
        ),
        pytest.param({"pump": {"rate_ml_min": 11.0}}, ["pump rate is 11; this bench allows up to 10 mL"], id="rate"),
        pytest.param(
            {"limits": {"run_time_s": 9000.0}}, ["time limit is 9000; this bench allows up to 7200"], id="time"
        ),
    ],
)
def test_a_plan_that_cannot_fit_is_refused_with_numbers_and_remedy(
    make_plan: MakePlan, change: dict[str, dict[str, object]], texts: list[str]
) -> None:
    with pytest.raises(StartRefusedError) as caught:
        check_start(make_plan(**change))
    for text in texts:
        assert text in str(caught.value)
    assert caught.value.exit_status == 2


def test_every_reason_is_given_at_once(make_plan: MakePlan) -> None:
    with pytest.raises(StartRefusedError) as caught:
        check_start(make_plan(limits={"titrant_ml": 300.0, "run_time_s": 1e6}, dosing={"largest_ml": 5.0}))
    assert len(caught.value.problems) == 4


def test_a_runaway_pump_that_would_overflow_is_warned_of(make_plan: MakePlan) -> None:
    """50 + 10 + 1000 mL; vessel and tray hold 100 - 10 + 500 mL."""
    [warning] = start_warnings(make_plan(pump={"reservoir_ml": 1000.0}))
    assert "vessel and tray hold 590 mL" in warning
    assert start_warnings(make_plan(pump={"reservoir_ml": 1000.0, "refill": "by-hand"})) == []


def test_titrant_at_hand(make_plan: MakePlan) -> None:
    assert titrant_at_hand_ml(make_plan()) == 110.0
    assert titrant_at_hand_ml(make_plan(pump={"refill": "none"})) == 10.0


def test_the_syringe_counts_in_the_worst_case_of_a_runaway_pump(make_plan: MakePlan) -> None:
    """50 mL of sample, 100 of reservoir and the syringe; vessel and tray hold 100 - 10 + tray_ml."""
    assert start_warnings(make_plan(vessel={"tray_ml": 70.0})) == []
    [warning] = start_warnings(make_plan(vessel={"tray_ml": 69.9}))
    assert "the syringe (10 mL)" in warning
