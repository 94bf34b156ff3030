"""Our header tree: every message and reply as literal bytes, read and written, and what must not be read."""

from __future__ import annotations

import pytest

from drivers import scpi_tree as tree
from drivers.identity import Identity
from drivers.pump import LastDose, PumpStatus
from drivers.scpi import ScpiError, parse_reply

STEP_ML = 0.0005


def values(line):
    units = parse_reply(line)
    assert len(units) == 1
    return units[0]


@pytest.mark.parametrize(
    ("written", "literal"),
    [
        (tree.EXCHANGE.question(42), b":EXCH? 42"),
        (tree.ARM.command(7, 0.0425, 5.0), b":BUR:DOSE:ARM 7,0.0425,5.0"),
        (tree.ARM.question(), b":BUR:DOSE:ARM?"),
        (tree.START.command(7), b":BUR:DOSE:STAR 7"),
        (tree.LAST.question(), b":BUR:DOSE:LAST?"),
        (tree.FILL.command(), b":BUR:FILL"),
        (tree.PRIME.command(0.5, 1000), b":BUR:PRIM 0.5,1000"),
        (tree.STOP.command(), b":BUR:STOP"),
        (tree.MOTION.question(), b":BUR:MOT?"),
        (tree.STATUS.question(), b":BUR:STAT?"),
        (tree.DELIVERED.question(), b":BUR:DEL?"),
        (tree.CONTENTS.question(), b":BUR:CONT?"),
        (tree.CAPACITY.question(), b":BUR:CAP?"),
        (tree.STEP.question(), b":BUR:STEP?"),
        (tree.START_COUNT.question(), b":BUR:STAR:COUN?"),
        (tree.REFILL.question(), b":BUR:REF?"),
        (tree.RATE.question(), b":BUR:RATE?"),
        (tree.WATCHDOG.command(5.0), b":BUR:WATC 5.0"),
        (tree.READ.question(), b":PROB:READ?"),
        (tree.NEXT_ERROR.question(), b":SYST:ERR?"),
        (tree.IDENTITY.question(), b"*IDN?"),
    ],
)
def test_what_the_controller_sends(written, literal):
    assert written == literal


def last(number, state, steps, remaining_s):
    return LastDose(
        start_count=3, number=number, state=state, steps=steps, volume_ml=steps * STEP_ML, remaining_s=remaining_s
    )


@pytest.mark.parametrize(
    ("reply", "literal"),
    [
        (last(7, "moving", 85, 0.512), b"3,7,MOVING,85,0.0425,0.512"),
        (last(7, "done", 100, 0.0), b"3,7,DONE,100,0.05,0.0"),
        (last(0, "none", 0, 0.0), b"3,0,NONE,0,0.0,0.0"),
    ],
)
def test_the_last_dose_both_ways(reply, literal):
    assert tree.write_last_dose(reply) == literal
    assert tree.read_last_dose(values(literal), STEP_ML) == reply


@pytest.mark.parametrize(
    "literal",
    [
        pytest.param(b"3,7,DONE,100,0.05", id="a value is missing"),
        pytest.param(b"3,7,DONE,100,0.05,0.0,1", id="a value too many"),
        pytest.param(b"3,7,DON,100,0.05,0.0", id="half a word"),
        pytest.param(b"3,7,DONE,700,0.05,0.0", id="steps and volume differ"),
        pytest.param(b"3,7,DONE,100,0.051,0.0", id="a digit added"),
        pytest.param(b"3,7,DONE,100,0.05,-1.0", id="time runs backwards"),
        pytest.param(b"3,7,DONE,100,NAN,0.0", id="NaN"),
        pytest.param(b"3,7,DONE,100,9.91E37,0.0", id="not a number"),
        pytest.param(b"3,x,DONE,100,0.05,0.0", id="no number"),
        pytest.param(b"", id="nothing"),
    ],
)
def test_a_reply_that_cannot_be_a_last_dose(literal):
    with pytest.raises(ScpiError):
        tree.read_last_dose(values(literal), STEP_ML)


@pytest.mark.parametrize(
    ("status", "literal"),
    [
        (
            PumpStatus(start_count=2, last_dose_number=9, delivered_ml=1.25, contents_ml=8.75, reservoir_ml=100.0,
                       moving=False, fault=None),
            b'2,9,0,1.25,8.75,100.0,""',
        ),
        (
            PumpStatus(start_count=2, last_dose_number=9, delivered_ml=1.25, contents_ml=8.75, reservoir_ml=None,
                       moving=True, fault="plunger stuck"),
            b'2,9,1,1.25,8.75,9.91E37,"plunger stuck"',
        ),
    ],
)  # fmt: skip
def test_the_status_both_ways(status, literal):
    assert tree.write_status(status) == literal
    assert tree.read_status(values(literal)) == status


def test_small_replies_both_ways():
    armed = tree.Armed(start_count=1, number=7, steps=85, rate_ml_min=5.0)
    assert tree.write_armed(armed) == b"1,7,85,5.0"
    assert tree.read_armed([b"1", b"7", b"85", b"5.0"]) == armed
    motion = tree.Motion(start_count=1, moving=True, remaining_s=0.25)
    assert tree.write_motion(motion) == b"1,1,0.25"
    assert tree.read_motion([b"1", b"1", b"0.25"]) == motion
    assert tree.write_steps(85, STEP_ML) == b"85,0.0425"
    assert tree.read_steps([b"85", b"0.0425"], STEP_ML) == 85
    for refill, word in (("valve", b"VALVE"), ("by-hand", b"HAND"), ("none", b"NONE")):
        assert tree.write_refill(refill) == word
        assert tree.read_refill([word]) == refill
    assert tree.read_error([b"-113", b'"Undefined header;FOO"']) == (-113, "Undefined header;FOO")


@pytest.mark.parametrize(
    ("reading", "literal"),
    [
        ((12, -123.4, 25.0, "ok"), b"12,-123.4000,25.000,OK"),
        ((12, 0.05, None, "ok"), b"12,0.0500,9.91E37,OK"),
        ((1, 1999.9, 4.5, "over range"), b"1,1999.9000,4.500,OVER_RANGE"),
    ],
)
def test_readings_both_ways(reading, literal):
    assert tree.write_reading(*reading) == literal
    assert tree.read_reading(values(literal)) == reading


@pytest.mark.parametrize(
    "literal",
    [b"1,2500.0,25.0,OK", b"1,nan,25.0,OK", b"1,0.0,900.0,OK", b"1,0.0,25.0,0K", b"1,0.0,25.0", b"x,0.0,25.0,OK"],
)
def test_a_reply_that_cannot_be_a_reading(literal):
    with pytest.raises(ScpiError):
        tree.read_reading(values(literal))


def test_an_identity_is_four_fields_whatever_is_in_them():
    identity = Identity(maker="Mill, Press; Co", model='"B"', serial="7", firmware="")
    written = tree.write_identity(identity)
    assert written == b"Mill  Press  Co,B,7,0"
    assert tree.read_identity(values(written)).key == "Mill  Press  Co B 7"
