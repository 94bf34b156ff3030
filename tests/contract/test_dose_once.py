"""A dose happens exactly once and never wrong: one fault at every message, at every byte, in every way."""

from __future__ import annotations

import random

import pytest

from drivers.errors import DeviceError

VOLUME_ML, STEPS = 0.25, 500


def changed(place, byte):
    return lambda data: data[:place] + bytes([byte]) + data[place + 1 :]


def without(place):
    return lambda data: data[:place] + data[place + 1 :]


def cut(place):
    return lambda data: data[:place]


WAYS = {
    "a digit for another": lambda data, place: changed(place, ord("7") if data[place] != ord("7") else ord("3")),
    "noise": lambda data, place: changed(place, 0xF7),
    "an end mark": lambda data, place: changed(place, ord("\n")),
    "a separator": lambda data, place: changed(place, ord(";")),
    "one byte lost": lambda data, place: without(place),
    "cut off": lambda data, place: cut(place),
}


def messages(build):
    """The traffic of a dose without faults: (request, reply) from the arming on."""
    bench = build("memory")
    _ = bench.pump.step_ml
    before = len(bench.pump_traffic.entries)
    bench.pump.dose(1, VOLUME_ML)
    return [data for _, _, data in list(bench.pump_traffic.entries)[before:]]


@pytest.mark.parametrize("way", WAYS)
@pytest.mark.parametrize("end", ["request", "reply"])
def test_one_fault_anywhere_never_doubles_or_falsifies_a_dose(build, spoil, end, way):
    traffic = messages(build)[(0 if end == "request" else 1) :: 2]
    assert len(traffic) >= 5  # arm, start, and some questions while it moves
    unsettled: list[str] = []
    for index, message in enumerate(traffic):
        for place in range(len(message)):
            bench = build("memory")
            _ = bench.pump.step_ml
            seen = iter(range(1000))
            spoil(bench.pump_port, lambda _, n=index, s=seen: next(s) == n, **{end: WAYS[way](message, place)})
            delivered, bounds_ml, fault = None, (VOLUME_ML, VOLUME_ML), ""
            try:
                delivered = bench.pump.dose(1, VOLUME_ML)
            except DeviceError as error:
                bounds_ml, fault = (error.lowest_ml, error.highest_ml), str(error)
            bench.clock.wait(60.0)
            truth_ml = bench.pushed() * 0.0005
            assert bounds_ml[0] - 1e-9 <= truth_ml <= bounds_ml[1] + 1e-9, (index, place, fault)
            if delivered is None:
                unsettled.append(f"message {index}, byte {place} of {message!r}: {fault}")
            else:
                assert delivered.steps == bench.pushed() == STEPS, (index, place)
            bench.close()
    assert unsettled == []  # one fault alone is settled


def unreliable(rng, share):
    """A line on which each message is lost, cut or changed in one byte with probability `share`."""

    def spoilt(data):
        if rng.random() >= share or not data:
            return data
        place = rng.randrange(len(data))
        return rng.choice([b"", cut(place)(data), without(place)(data), changed(place, rng.randrange(256))(data)])

    return spoilt


@pytest.mark.parametrize("seed", range(60))
def test_a_bad_line_never_makes_the_account_wrong(build, seed):
    rng = random.Random(seed)
    bench = build("memory")
    _ = bench.pump.step_ml
    bench.pump_port.spoil_request = bench.pump_port.spoil_reply = unreliable(rng, 0.12)
    done = 0
    for number in range(1, 13):
        before, steps = bench.pushed(), rng.randrange(1, 600)
        try:
            delivered = bench.pump.dose(number, steps * 0.0005)
        except DeviceError as error:
            bounds_ml = (error.lowest_ml, error.highest_ml)
        else:
            bounds_ml = (delivered.volume_ml, delivered.volume_ml)
            done += 1
            assert delivered.steps == steps
        bench.clock.wait(30.0)
        truth_ml = (bench.pushed() - before) * 0.0005
        assert bounds_ml[0] - 1e-9 <= truth_ml <= bounds_ml[1] + 1e-9
    assert done >= 6  # it is the account that counts, but most doses come through


def test_a_dose_armed_with_a_garbled_rate_is_armed_again_and_never_started_so(build, spoil):
    bench = build("memory")
    _ = bench.pump.step_ml
    fault = spoil(
        bench.pump_port,
        lambda data: b"DOSE:ARM 1," in data,
        request=lambda data: data.replace(b",0.25,5.0;", b",0.25,2.5;"),
    )
    delivered = bench.pump.dose(1, VOLUME_ML)
    assert fault.spoilt == 1
    assert delivered.steps == bench.pushed() == STEPS
    assert bench.clock.now_s() == pytest.approx(60.0 * VOLUME_ML / 5.0, abs=0.01)


def test_a_rate_that_is_never_taken_as_meant_starts_nothing(build, spoil):
    bench = build("memory")
    _ = bench.pump.step_ml
    spoil(
        bench.pump_port,
        lambda data: b"DOSE:ARM 1," in data,
        request=lambda data: data.replace(b",0.25,5.0;", b",0.25,2.5;"),
        times=100,
    )
    with pytest.raises(DeviceError, match="dose 1 of 500 steps is not what it reads back"):
        bench.pump.dose(1, VOLUME_ML)
    bench.clock.wait(60.0)
    assert bench.pushed() == 0


def test_steps_that_go_backwards_cannot_be_true_and_are_asked_again(build, spoil):
    """After 166 steps at 1 s the pump says 2 of 500, moving, with nothing left to wait for, then the truth."""
    bench = build("memory")
    _ = bench.pump.step_ml
    fault = spoil(
        bench.pump_port,
        lambda data: b"LAST?" in data and b"STAR" not in data,
        reply=lambda data: data.replace(b"MOVING,250,0.125,1.5", b"MOVING,2,0.001,1.5"),
    )
    fault.hit_from(bench.manual, 1.5)
    before = len(bench.pump_traffic.entries)
    assert bench.pump.dose(1, VOLUME_ML).steps == bench.pushed() == STEPS
    asked_s = [
        at_s for at_s, kind, data in list(bench.pump_traffic.entries)[before:] if kind == "sent" and b"LAST?" in data
    ]
    assert fault.spoilt == 1
    assert asked_s.count(1.5) == 2  # not believed: asked once more at once
