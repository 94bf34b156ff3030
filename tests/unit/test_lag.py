"""The lag cascade against a general integrator, and its promises about time."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp

from simulators.convolution import convolved_exponentials
from simulators.lag import LagCascade, LagConstants

USUAL = LagConstants(bulk_s=1.5, film_s=2.0, slow_s=30.0, slow_share=0.01, dead_time_s=0.5)
NEAR = replace(USUAL, film_s=1.5 * (1 + 1e-7), slow_s=1.5 * (1 - 1e-6))
CONSTANTS = [
    pytest.param(USUAL, id="usual"),
    pytest.param(replace(USUAL, film_s=1.5), id="two equal"),
    pytest.param(replace(USUAL, film_s=1.5, slow_s=1.5, slow_share=0.3), id="all equal"),
    pytest.param(NEAR, id="nearly equal"),
    pytest.param(replace(USUAL, bulk_s=40.0, film_s=0.02, slow_share=0.2), id="unstirred"),
]
RAMPS = [(1.0, 4.0, 0.25), (9.0, 9.3, 0.02), (12.0, 12.0, 0.005), (12.0, 18.0, 0.5), (40.0, 41.0, 0.1)]


def filled(constants: LagConstants) -> LagCascade:
    cascade = LagCascade(constants)
    for ramp in RAMPS:
        cascade.ramp(*ramp)
    return cascade


def delivered(at_s: float) -> float:
    return sum(v if at_s >= e else v * max(0.0, at_s - s) / (e - s) for s, e, v in RAMPS if at_s > s or at_s >= e)


def integrated(constants: LagConstants, times: list[float]) -> list[float]:
    c = constants

    def slope(at_s: float, x: np.ndarray) -> list[float]:
        u = delivered(at_s - c.dead_time_s)
        return [(u - x[0]) / c.bulk_s, (x[0] - x[1]) / c.film_s, (x[1] - x[2]) / c.slow_s]

    breaks = sorted({0.0, *times, *(t + c.dead_time_s for ramp in RAMPS for t in ramp[:2])})
    x, seen = np.zeros(3), {0.0: 0.0}
    for start, end in itertools.pairwise(breaks):
        inner = np.nextafter(start, end), np.nextafter(end, start)
        x = solve_ivp(slope, inner, x, method="DOP853", rtol=1e-12, atol=1e-14).y[:, -1]
        seen[end] = (1 - c.slow_share) * x[1] + c.slow_share * x[2]
    return [seen[t] for t in times]


@pytest.mark.parametrize("constants", CONSTANTS)
def test_the_closed_form_agrees_with_a_general_integrator(constants):
    times = [1.2, 2.0, 4.7, 9.1, 12.6, 15.0, 20.0, 41.0, 90.0]
    cascade = filled(constants)
    assert [cascade.seen_ml(t) for t in times] == pytest.approx(integrated(constants, times), abs=1e-10)


@pytest.mark.parametrize("constants", CONSTANTS)
def test_one_jump_of_seven_seconds_is_seventy_of_a_tenth(constants):
    far, near = filled(constants), filled(constants)
    for k in range(1, 71):
        last = near.seen_ml(10.0 + 0.1 * k)
    assert far.seen_ml(17.0) == pytest.approx(last, abs=1e-13)
    # and by restarting from the states at every step, so that 70 closed forms are chained
    chained = far.changed(10.0, constants)
    for k in range(1, 70):
        chained = chained.changed(10.0 + 0.1 * k, constants)
    assert chained.seen_ml(17.0) == pytest.approx(far.seen_ml(17.0), abs=1e-10)


def test_values_do_not_depend_on_the_order_of_questions():
    times = [3.3, 17.0, 12.6, 50.0, 9.0, 0.0]
    asked_forwards = {t: (c := filled(USUAL)).seen_ml(t) for t in sorted(times)}
    cascade = filled(USUAL)
    assert {t: cascade.seen_ml(t) for t in times} == asked_forwards
    assert c.seen_ml(3.3) == asked_forwards[3.3]


def test_everything_is_seen_in_the_end():
    cascade = filled(USUAL)
    assert cascade.seen_ml(1000.0) == pytest.approx(0.875, abs=1e-12)
    assert cascade.delivered_ml(15.0) == pytest.approx(0.525)


def test_nothing_is_seen_before_the_dead_time():
    cascade = filled(USUAL)
    assert cascade.seen_ml(1.4999) == 0.0
    assert cascade.seen_ml(1.6) > 0.0


@pytest.mark.parametrize("constants", CONSTANTS)
@pytest.mark.parametrize("at_s", [2.0, 4.0, 12.6, 19.0, 41.2, 60.0])
def test_derivatives_agree_with_differences(constants, at_s):
    cascade = filled(constants)
    seen, slopes = cascade.seen_with_derivatives(at_s)
    assert seen == pytest.approx(cascade.seen_ml(at_s), abs=1e-12)
    for name in ("bulk_s", "film_s", "slow_s", "slow_share", "dead_time_s"):
        value = getattr(constants, name)
        high, low = (cascade.retuned(replace(constants, **{name: value * f})).seen_ml(at_s) for f in (1.0001, 0.9999))
        # in mL for a change of the constant by all of itself
        assert getattr(slopes, name) * value == pytest.approx((high - low) / 2e-4, abs=1e-8 + 2e-4 * abs(high - low))


def test_a_ramp_cut_short_is_as_one_that_was_never_longer():
    cut, short = LagCascade(USUAL), LagCascade(USUAL)
    cut.ramp(1.0, 5.0, 0.4)
    cut.seen_ml(9.0)
    cut.stop_at(3.0)
    short.ramp(1.0, 3.0, 0.2)
    for at_s in (2.0, 3.4, 8.0, 60.0):
        assert cut.seen_ml(at_s) == pytest.approx(short.seen_ml(at_s), abs=1e-14)
    cut.ramp(3.0, 4.0, 0.1)
    assert cut.delivered_ml(4.0) == pytest.approx(0.3)


def test_other_constants_from_a_time_on_keep_the_states_and_what_is_on_its_way():
    slower = replace(USUAL, bulk_s=30.0)
    cascade = filled(USUAL)
    changed = cascade.changed(2.0, slower)
    assert changed.states(2.0) == cascade.states(2.0)
    assert changed.seen_ml(4.0) < cascade.seen_ml(4.0)
    assert changed.seen_ml(5000.0) == pytest.approx(0.875, abs=1e-12)
    assert cascade.changed(2.0, USUAL).seen_ml(4.0) == pytest.approx(cascade.seen_ml(4.0), abs=1e-14)
    with pytest.raises(ValueError, match="dead time"):
        cascade.changed(2.0, replace(USUAL, dead_time_s=1.0))


def test_ramps_come_in_order_of_time():
    cascade = filled(USUAL)
    with pytest.raises(ValueError, match="after one that ended"):
        cascade.ramp(40.5, 42.0, 0.1)


@pytest.mark.parametrize("wrong", [{"bulk_s": 0.0}, {"slow_share": 1.5}, {"dead_time_s": -1.0}])
def test_constants_out_of_range_are_refused(wrong):
    with pytest.raises(ValueError, match=r"must be > 0 s|slow share"):
        replace(USUAL, **wrong)


rates = st.floats(0.01, 10.0)


@settings(max_examples=60, deadline=None)
@given(st.lists(rates, min_size=2, max_size=4), st.floats(0.01, 20.0))
def test_convolutions_are_positive_and_do_not_care_for_order(nodes, dt_s):
    value = convolved_exponentials(tuple(nodes), dt_s)
    assert value > 0.0 or min(nodes) * dt_s > 100.0
    assert convolved_exponentials(tuple(reversed(nodes)), dt_s) == pytest.approx(value, rel=1e-9)


@settings(max_examples=60, deadline=None)
@given(rates, st.floats(-12.0, -1.0), st.floats(0.01, 20.0))
def test_a_convolution_of_nearly_equal_rates_lies_by_that_of_equal_ones(rate, exponent, dt_s):
    gap = 10.0**exponent
    equal, near = convolved_exponentials((rate, rate), dt_s), convolved_exponentials((rate, rate + gap), dt_s)
    # exactly: the factor (1 - exp(-gap dt))/(gap dt)
    assert near == pytest.approx(equal * -np.expm1(-gap * dt_s) / (gap * dt_s), rel=1e-9)
