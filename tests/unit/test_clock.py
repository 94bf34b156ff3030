"""Clocks: waiting and being stopped are one act, and manual time stops at every event."""

from __future__ import annotations

import math
import threading
import time

import pytest

from drivers.clock import MANUAL_START_UTC_S, Line, ManualClock, ScaledClock, SystemClock, real_seconds_scale


class Alarm:
    """A party that notes when it was let act, with events at fixed times."""

    def __init__(self, clock, *times_s):
        self.clock, self.times_s, self.seen_s = clock, list(times_s), []
        clock.join(self)

    def act(self):
        if self.times_s and self.times_s[0] <= self.clock.now_s():
            self.seen_s.append(self.clock.now_s())
            self.times_s.pop(0)
            return True
        return False

    def next_event_s(self):
        return self.times_s[0] if self.times_s else math.inf


def test_manual_time_moves_only_when_somebody_waits():
    clock = ManualClock()
    assert (clock.now_s(), clock.utc_s()) == (0.0, MANUAL_START_UTC_S)
    assert not clock.wait(7.5)
    assert (clock.now_s(), clock.utc_s()) == (7.5, MANUAL_START_UTC_S + 7.5)
    assert not clock.wait(-1.0)
    assert clock.now_s() == 7.5


def test_the_default_start_is_the_first_second_of_2026():
    assert time.gmtime(MANUAL_START_UTC_S)[:6] == (2026, 1, 1, 0, 0, 0)


def test_manual_time_stops_at_every_event_of_every_party():
    clock = ManualClock()
    one, other = Alarm(clock, 0.0, 0.5, 3.0, 99.0), Alarm(clock, 0.5, 0.75)
    clock.wait(10.0)
    assert clock.now_s() == 10.0
    assert one.seen_s == [0.0, 0.5, 3.0]
    assert other.seen_s == [0.5, 0.75]


def test_a_stop_ends_a_manual_wait_at_its_instant():
    clock, stop = ManualClock(), threading.Event()
    clock.call_at(3.0, stop.set)
    assert clock.wait(10.0, stop)
    assert clock.now_s() == 3.0
    assert clock.wait(10.0, stop)
    assert clock.now_s() == 3.0


def test_scripted_calls_come_in_order_of_time_and_then_of_asking():
    clock, seen = ManualClock(), []
    for at_s, name in ((2.0, "c"), (1.0, "a"), (1.0, "b")):
        clock.call_at(at_s, lambda name=name: seen.append((clock.now_s(), name)))
    clock.wait(5.0)
    assert seen == [(1.0, "a"), (1.0, "b"), (2.0, "c")]


def test_parties_that_never_come_to_rest_are_an_error():
    class Restless:
        def act(self):
            return True

        def next_event_s(self):
            return math.inf

    clock = ManualClock()
    clock.join(Restless())
    with pytest.raises(RuntimeError, match="do not come to rest"):
        clock.wait(1.0)


def test_utc_can_be_shifted_against_run_time():
    clock = ManualClock(start_utc_s=1000.0)
    clock.shift_utc(3600.0)
    assert (clock.now_s(), clock.utc_s()) == (0.0, 4600.0)


def test_a_line_knows_what_is_on_its_way():
    line = Line()
    line.link_written, line.device_taken, line.device_written, line.link_taken = 10, 4, 7, 7
    assert (line.to_device(), line.to_link()) == (6, 0)
    line.clear()
    assert (line.to_device(), line.to_link()) == (0, 0)


@pytest.mark.parametrize("clock", [SystemClock(), ScaledClock(1.0)])
def test_real_waits_are_cut_by_a_stop_that_comes_meanwhile(clock):
    stop = threading.Event()
    timer = threading.Timer(0.01, stop.set)
    timer.start()
    assert clock.wait(3600.0, stop)
    timer.join()


def test_real_waits_last_at_least_as_long_as_asked():
    clock = SystemClock()
    before_s = clock.now_s()
    assert not clock.wait(0.01)
    assert clock.now_s() - before_s >= 0.01
    assert not clock.wait(0.0, threading.Event())


def test_scaled_time_passes_faster_than_real_time():
    clock = ScaledClock(1000.0)
    run_s, real_s, utc_s = clock.now_s(), time.monotonic(), clock.utc_s()
    clock.wait(10.0)
    real_elapsed_s = time.monotonic() - real_s
    assert clock.now_s() - run_s >= max(10.0, 999.0 * real_elapsed_s)
    assert clock.utc_s() - utc_s >= 9.0
    assert real_seconds_scale(clock) == 1000.0
    assert real_seconds_scale(SystemClock()) == real_seconds_scale(ManualClock()) == 1.0


@pytest.mark.parametrize("scale", [0.0, -1.0, math.nan, math.inf])
def test_a_scale_that_is_none_is_refused(scale):
    with pytest.raises(ValueError, match="allowed: a number above 0"):
        ScaledClock(scale)
