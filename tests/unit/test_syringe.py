"""The syringe's mechanics: exact steps, and the errors of what leaves the tip."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from simulators.delivery import DeliveryError, SyringeTruth
from simulators.flow import Flow
from simulators.syringe import Syringe, SyringeRefusedError

EXACT = SyringeTruth(step_ml=0.0005, syringe_ml=10.0, contents_ml=10.0, reservoir_ml=100.0)
REAL = replace(EXACT, position_sd_ml=0.0009, position_correlation_ml=0.05, stop_sd_ml=0.00045)


class Jar:
    """Takes what is poured; keeps the flows in force."""

    def __init__(self) -> None:
        self.flows: list[Flow] = []

    def pour(self, flows) -> None:
        for flow in flows:
            assert not self.flows or flow.start_s >= self.flows[-1].end_s
            self.flows.append(flow)

    def stop_at(self, at_s: float) -> None:
        kept = []
        for start_s, end_s, volume_ml in self.flows:
            if end_s <= at_s:
                kept.append(Flow(start_s, end_s, volume_ml))
            elif start_s < at_s:
                kept.append(Flow(start_s, at_s, volume_ml * (at_s - start_s) / (end_s - start_s)))
        self.flows = kept

    @property
    def volume_ml(self) -> float:
        return sum(flow.volume_ml for flow in self.flows)


def syringe(truth: SyringeTruth = EXACT, seed: int = 1) -> tuple[Syringe, Jar]:
    jar = Jar()
    return Syringe(truth, jar, seed=seed), jar


# --- steps and time ---


def test_a_dose_takes_its_time_and_its_steps():
    pump, jar = syringe()
    pump.begin(1000, 5.0, 10.0)  # 0.5 mL at 5 mL/min
    assert pump.ends_at_s() == pytest.approx(16.0)
    assert pump.moving(15.9)
    assert not pump.moving(16.0)
    assert [pump.steps_done(t) for t in (10.0, 10.003, 10.006, 13.0, 16.0, 99.0)] == [0, 0, 1, 500, 1000, 1000]
    assert pump.contents_steps(13.0) == 19500
    assert pump.tip_steps_total(99.0) == 1000
    assert jar.volume_ml == pytest.approx(0.5, abs=1e-15)


def test_a_halted_dose_stands_at_its_last_whole_step():
    pump, jar = syringe()
    pump.begin(1000, 5.0, 0.0)
    assert pump.halt(1.0001) == 166
    assert not pump.moving(1.0001)
    assert pump.steps_done(50.0) == 166
    assert pump.contents_steps(50.0) == 20000 - 166
    assert jar.volume_ml == pytest.approx(166 * 0.0005, abs=1e-15)
    pump.begin(34, 5.0, 2.0)
    assert pump.tip_steps_total(10.0) == 200
    assert jar.volume_ml == pytest.approx(0.1, abs=1e-15)


@pytest.mark.parametrize(
    ("steps", "match"), [(20001, "20001 steps asked, 20000 left"), (0, "0 steps"), (-3, "-3 steps")]
)
def test_it_refuses_what_it_does_not_hold(steps, match):
    pump, jar = syringe()
    with pytest.raises(SyringeRefusedError, match=match):
        pump.begin(steps, 5.0, 0.0)
    assert pump.contents_steps(100.0) == 20000
    assert not jar.flows


def test_it_refuses_while_it_moves_and_with_a_fault():
    pump, _ = syringe()
    pump.begin(1000, 5.0, 0.0)
    with pytest.raises(SyringeRefusedError, match="moves already"):
        pump.begin(1, 5.0, 3.0)
    with pytest.raises(SyringeRefusedError, match="moves"):
        pump.fill_by_hand(3.0)
    pump.set_fault("the motor lost steps")
    with pytest.raises(SyringeRefusedError, match="lost steps"):
        pump.begin(1, 5.0, 30.0)
    assert pump.fault(30.0) == "the motor lost steps"
    pump.set_fault(None)
    pump.begin(1, 5.0, 31.0)


def test_a_fill_draws_from_the_reservoir_until_full():
    pump, _ = syringe(replace(EXACT, contents_ml=4.0, fill_rate_ml_min=12.0, valve_s=1.0))
    pump.begin_fill(0.0)
    assert pump.contents_steps(16.0) == pytest.approx(14000, abs=1)  # 15 s at 0.2 mL/s
    assert pump.reservoir_ml(16.0) == pytest.approx(97.0, abs=0.001)
    assert pump.ends_at_s() == pytest.approx(32.0)
    assert pump.contents_steps(32.0) == 20000
    assert pump.reservoir_ml(32.0) == pytest.approx(94.0)
    pump.begin(100, 5.0, 40.0)
    assert pump.reservoir_ml(50.0) == pytest.approx(94.0)
    assert pump.steps_done(50.0) == 100


def test_a_fill_that_is_halted_keeps_what_it_drew():
    pump, jar = syringe(replace(EXACT, contents_ml=4.0, fill_rate_ml_min=12.0, backlash_ml=0.004))
    pump.begin_fill(0.0)
    pump.halt(16.0)
    held = pump.contents_steps(16.0)
    assert 13990 <= held <= 14000
    assert pump.contents_steps(99.0) == held
    pump.begin(100, 5.0, 100.0)
    assert jar.volume_ml == pytest.approx(0.05 - 0.004)  # its backlash was not taken up


def test_an_empty_reservoir_fills_nothing_and_is_a_fault_once_the_syringe_is_empty_too():
    pump, _ = syringe(replace(EXACT, contents_ml=0.1, reservoir_ml=1.0))
    pump.begin_fill(0.0)
    assert pump.contents_steps(100.0) == 2200
    pump.begin_fill(100.0)
    assert pump.contents_steps(200.0) == 2200
    assert pump.fault(200.0) is None
    pump.begin(2200, 5.0, 200.0)
    assert pump.fault(300.0) == "syringe and reservoir are empty"
    pump.change_reservoir(50.0, 300.0)
    assert pump.fault(300.0) is None
    assert pump.reservoir_ml(300.0) == pytest.approx(50.0)


def test_ways_to_fill():
    without, _ = syringe(replace(EXACT, refill="none", contents_ml=1.0))
    with pytest.raises(SyringeRefusedError, match="cannot be refilled"):
        without.begin_fill(0.0)
    by_hand, _ = syringe(replace(EXACT, refill="by-hand", contents_ml=1.0))
    by_hand.fill_by_hand(0.0)
    assert by_hand.contents_steps(0.0) == 20000
    assert by_hand.reservoir_ml(0.0) == pytest.approx(91.0)
    by_hand.begin_fill(1.0)  # nothing left to do
    assert by_hand.ends_at_s() == pytest.approx(1.0)


actions = st.lists(
    st.tuples(st.sampled_from(["dose", "prime", "fill"]), st.integers(1, 4000), st.floats(0.0, 1.5)), max_size=25
)


@settings(max_examples=120, deadline=None)
@given(actions, st.integers(0, 50))
@example([("dose", 500, 0.95)], 0)  # halted in the last bit before a step
def test_steps_are_exact_whatever_happens(sequence, seed):
    truth = replace(REAL, syringe_ml=3.0, contents_ml=3.0, backlash_ml=0.004, backlash_taken_up=False)
    pump, jar = syringe(truth, seed)
    at_s, contents, through_tip, drawn = 0.0, 6000, 0, 0
    for kind, steps, until in sequence:
        if kind == "fill":
            pump.begin_fill(at_s)
        elif steps > contents:
            with pytest.raises(SyringeRefusedError):
                pump.begin(steps, 5.0, at_s)
            continue
        elif kind == "dose":
            pump.begin(steps, 5.0, at_s)
        else:
            pump.begin_prime(steps, 5.0, at_s)
        at_s += until * (pump.ends_at_s() - at_s)  # beyond 1: it has ended
        done = pump.halt(at_s)
        if kind == "fill":
            drawn += pump.contents_steps(at_s) - contents
            contents = pump.contents_steps(at_s)
        else:
            assert done == (steps if until >= 1.0 else pump.steps_done(at_s)) <= steps
            contents, through_tip = contents - done, through_tip + done
        assert (pump.contents_steps(at_s), pump.tip_steps_total(at_s)) == (contents, through_tip)
        assert contents == 6000 - through_tip + drawn
        assert not pump.moving(at_s)
        assert pump.reservoir_ml(at_s) == pytest.approx(100.0 - drawn * 0.0005)
        at_s += 1.0
    assert jar.volume_ml <= through_tip * 0.0005 + 0.01


# --- what really leaves the tip ---


def test_halting_gives_the_volume_of_the_steps_done():
    pump, jar = syringe(replace(REAL, stop_sd_ml=0.0, periodic_ml=0.001, gain_error=0.002))
    pump.begin(1000, 5.0, 0.0)
    pump.halt(3.4567)
    done = pump.steps_done(9.0)
    nominal_ml = done * pump.step_ml
    assert jar.volume_ml == pytest.approx(nominal_ml + pump.error.at(nominal_ml), abs=1e-14)
    pump.begin(1000 - done, 5.0, 9.0)
    assert jar.volume_ml == pytest.approx(0.5 + pump.error.at(0.5), abs=1e-14)


def test_the_volume_depends_on_the_position_not_on_the_number_of_doses():
    one, one_jar = syringe(replace(REAL, stop_sd_ml=0.0))
    many, many_jar = syringe(replace(REAL, stop_sd_ml=0.0))
    one.begin(4000, 5.0, 0.0)
    for k in range(400):
        many.begin(10, 5.0, 1.0 * k)
    assert many_jar.volume_ml == pytest.approx(one_jar.volume_ml, abs=1e-12)


def test_the_error_of_a_stop_does_not_add_up():
    at_stop = []
    for seed in range(300):
        pump, jar = syringe(replace(EXACT, stop_sd_ml=0.00045), seed)
        for k in range(30):
            pump.begin(20, 5.0, 2.0 * k)
        at_stop.append(jar.volume_ml - 0.3)
    assert np.std(at_stop) == pytest.approx(0.00045, rel=0.15)


def test_the_position_error_has_the_stated_spread_and_correlation_length():
    places_ml = np.arange(0.5, 9.5, 0.025)
    screws = [DeliveryError(REAL, seed) for seed in range(60)]
    errors = np.array([[screw.at(float(p)) for p in places_ml] for screw in screws]) * 1e3
    assert np.sqrt(np.mean(errors**2)) == pytest.approx(0.9, rel=0.05)
    correlations = [float(np.mean(errors[:, k:] * errors[:, :-k])) / 0.81 for k in (1, 2, 4)]
    assert correlations == pytest.approx([np.exp(-0.5), np.exp(-1.0), np.exp(-2.0)], abs=0.06)
    assert all(DeliveryError(REAL, seed).at(0.0) == 0.0 for seed in range(5))


def test_gain_and_screw():
    error = DeliveryError(replace(EXACT, gain_error=-0.003, periodic_ml=0.002, period_ml=0.25, phase_rad=0.7), seed=1)
    screw = [error.at(1.0 + 0.25 * k / 40) - error.at(1.0) + 0.003 * 0.25 * k / 40 for k in range(41)]
    assert max(screw) - min(screw) == pytest.approx(0.004, rel=0.01)
    assert error.at(2.0) == pytest.approx(-0.006, abs=1e-12)  # eight whole turns


def test_backlash_is_lost_after_a_fill_unless_taken_up():
    volumes = []
    for taken_up in (True, False):
        pump, jar = syringe(replace(EXACT, contents_ml=5.0, backlash_ml=0.004, backlash_taken_up=taken_up))
        pump.begin_fill(0.0)
        pump.begin(100, 5.0, 100.0)
        volumes.append(jar.volume_ml)
        pump.begin(100, 5.0, 200.0)
        volumes.append(jar.volume_ml)
    # not taken up: once from before the fill, once from the fill
    assert volumes == pytest.approx([0.05, 0.1, 0.05 - 0.008, 0.1 - 0.008])


def test_an_empty_line_must_be_primed():
    pump, jar = syringe(replace(EXACT, dead_volume_ml=0.2))
    pump.begin(100, 5.0, 0.0)
    assert jar.volume_ml == 0.0
    pump.begin_prime(400, 5.0, 100.0)
    assert jar.volume_ml == 0.0
    pump.begin(100, 5.0, 200.0)
    assert jar.volume_ml == pytest.approx(0.05)
    pump.trap_bubble(0.01)
    pump.begin(100, 5.0, 300.0)
    assert jar.volume_ml == pytest.approx(0.09)
    assert jar.flows[-1].start_s == pytest.approx(300.0 + 0.01 * 12.0)


def test_halting_before_anything_flowed_leaves_the_last_stop_as_it_was():
    pump, jar = syringe(replace(REAL, backlash_ml=0.01, backlash_taken_up=False))
    pump.begin(200, 5.0, 0.0)
    before = jar.volume_ml
    pump.trap_bubble(0.01)
    for halted_s in (10.05, 20.0, 30.0000001):
        pump.begin(100, 5.0, float(int(halted_s)))
        pump.halt(halted_s)
        assert jar.volume_ml == pytest.approx(before, abs=1e-15)
    pump.begin(100, 5.0, 40.0)
    assert jar.volume_ml > before


def test_flows_are_in_order_and_forwards():
    pump, jar = syringe(replace(REAL, stop_sd_ml=0.0, periodic_ml=0.001))
    for k in range(40):
        pump.begin(137, 5.0, 3.0 * k)
    assert all(one.end_s <= other.start_s for one, other in itertools.pairwise(jar.flows))
    assert all(flow.volume_ml > 0.0 for flow in jar.flows)
