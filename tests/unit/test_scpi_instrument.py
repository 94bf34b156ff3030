"""The device's side of IEEE 488.2: common commands, error queue, registers; burette and probe told by literal bytes."""

from __future__ import annotations

import pytest

from drivers.identity import Identity
from simulators.devices import ProbeDevice, PumpDevice
from simulators.instrument import Instrument
from simulators.syringe import SyringeRefusedError

IDENTITY = Identity(maker="Cidery Workshop", model="Syringe Burette", serial="B-7", firmware="1.0")


class Plunger:
    """1000 steps of 1 uL, 10 steps/s at every rate, as plain as can be."""

    step_ml, capacity_steps = 0.001, 1000

    def __init__(self):
        self.held, self.total, self.begin_s, self.end_s, self.steps, self.broken = 1000, 0, 0.0, -1.0, 0, None

    def begin(self, steps, rate_ml_min, at_s):
        if self.broken:
            raise SyringeRefusedError(self.broken, where="syringe", remedy="Mend it")
        self.held, self.total = self.contents_steps(at_s), self.tip_steps_total(at_s)
        self.steps, self.begin_s, self.end_s = steps, at_s, at_s + steps / 10.0

    begin_prime = begin

    def begin_fill(self, at_s):
        raise SyringeRefusedError("the reservoir is empty", where="syringe", remedy="Fill it")

    def steps_done(self, at_s):
        return min(self.steps, round((at_s - self.begin_s) * 10.0))

    def moving(self, at_s):
        return at_s < self.end_s

    def ends_at_s(self):
        return self.end_s

    def halt(self, at_s):
        self.steps, self.end_s = self.steps_done(at_s), min(self.end_s, at_s)
        return self.steps

    def contents_steps(self, at_s):
        return self.held - self.steps_done(at_s)

    def reservoir_ml(self, at_s):
        return 0.0

    def tip_steps_total(self, at_s):
        return self.total + self.steps_done(at_s)

    def fault(self, at_s):
        return self.broken


@pytest.fixture
def burette():
    return PumpDevice(Plunger(), IDENTITY)


def test_it_says_who_it_is_and_what_it_speaks(burette):
    assert burette.feed(b"*IDN?\n", 0.0) == b"Cidery Workshop,Syringe Burette,B-7,1.0\n"
    assert burette.feed(b"SYST:VERS?;*TST?\r\n", 0.0) == b"1999.0;0\n"


@pytest.mark.parametrize(
    ("line", "number"),
    [
        pytest.param(b"FOO:BAR?", -113, id="undefined header"),
        pytest.param(b"*XYZ", -113, id="undefined common command, the standard's own example"),
        pytest.param(b"BUR:STEP 1", -113, id="a query's header as a command"),
        pytest.param(b"BUR:STEP? 1", -108, id="parameter not allowed"),
        pytest.param(b"*CLS 1", -108, id="parameter not allowed on a common command"),
        pytest.param(b"BUR:DOSE:ARM 1", -109, id="missing parameter"),
        pytest.param(b"BUR:DOSE:ARM 1,2,3,4", -108, id="too many parameters"),
        pytest.param(b"BUR:DOSE:ARM one,0.1", -104, id="no number"),
        pytest.param(b"BUR:DOSE:ARM 1,0.1ML", -138, id="a unit"),
        pytest.param(b"BUR:DOSE:ARM 1,99", -222, id="more than the syringe"),
        pytest.param(b"BUR:DOSE:ARM 1,-1", -222, id="negative"),
        pytest.param(b"BUR:DOSE:ARM 1,0.1,999", -222, id="too fast"),
        pytest.param(b"BUR:DOSE:ARM 0,0.1", 203, id="a number used before"),
        pytest.param(b"BUR:DOSE:STAR 1", -221, id="not armed"),
        pytest.param(b"BUR:FILL", -240, id="what the mechanics refuse"),
        pytest.param(b"BUR:PRIM 0.1,99", -222, id="volume and steps differ"),
        pytest.param(b"BUR:WATC 0", -222, id="no watchdog"),
        pytest.param(b"*ESE 256", -222, id="more than a register holds"),
        pytest.param(b"*IDN\xff?", -101, id="noise"),
        pytest.param(b"x" * 2000, -363, id="too long"),
    ],
)
def test_every_mistake_has_the_standards_number_and_moves_nothing(burette, line, number):
    assert burette.feed(line + b"\n", 0.0) == b""
    assert burette.feed(b"SYST:ERR:COUN?\n", 0.0) == b"1\n"
    assert burette.feed(b"SYST:ERR?\n", 0.0).startswith(b'%d,"' % number)
    assert burette.feed(b"SYST:ERR?\n", 0.0) == b'0,"No error"\n'
    assert burette.feed(b"BUR:MOT?\n", 10.0) == b"1,0,0.0\n"


def test_event_registers_follow_the_errors(burette):
    assert burette.feed(b"*ESR?;*ESR?\n", 0.0) == b"128;0\n"  # power on, then read and cleared
    burette.feed(b"FOO\nBUR:DOSE:STAR 1\nBUR:DOSE:ARM 0,0.1\n", 0.0)
    assert burette.feed(b"*ESE 32;*ESE?;*STB?\n", 0.0) == b"32;36\n"  # an event that is enabled, and errors waiting
    assert burette.feed(b"*SRE 32;*SRE?;*STB?\n", 0.0) == b"32;100\n"
    assert burette.feed(b"*ESR?\n", 0.0) == b"56\n"  # command 32, execution 16, device 8
    assert burette.feed(b"*CLS;*STB?;:SYST:ERR?\n", 0.0) == b'0;0,"No error"\n'


def test_an_execution_error_leaves_the_rest_of_the_message_standing(burette):
    assert burette.feed(b"EXCH? 5;:BUR:DOSE:STAR 1;:BUR:MOT?\n", 0.0) == b"5;1,0,0.0\n"


def test_a_command_error_ends_the_message(burette):
    assert burette.feed(b"EXCH? 5;:FOO;:BUR:MOT?\n", 0.0) == b"5\n"


def test_bytes_may_come_in_any_cut(burette):
    reply = b"".join(burette.feed(bytes([byte]), 0.0) for byte in b"BUR:STEP?;CAP?\n*OPC?\n")
    assert reply == b"0.001;1000,1.0\n1\n"


def test_a_dose_on_the_wire(burette):
    assert burette.feed(b"BURETTE:DOSE:ARM 1,0.1;ARM?;LAST?\n", 0.0) == b"1,1,100,5.0;1,1,ARMED,0,0.0,0.0\n"
    assert burette.feed(b"BUR:DOSE:STAR 1;LAST?\n", 0.0) == b"1,1,MOVING,0,0.0,10.0\n"
    assert burette.next_event_s() == 5.0  # the watchdog
    assert burette.feed(b"BUR:DOSE:ARM 2,0.1;:SYST:ERR?\n", 4.0) == b'-221,"Settings conflict;the plunger is moving"\n'
    assert burette.feed(b"BUR:DOSE:LAST?\n", 5.55) == b"1,1,MOVING,56,0.056,4.45\n"
    assert burette.next_event_s() == 10.0  # the end
    assert burette.feed(b"BUR:DOSE:LAST?;:BUR:DEL?;CONT?\n", 12.0) == b"1,1,DONE,100,0.1,0.0;100,0.1;900,0.9\n"


def test_operation_complete_waits_for_the_motion_and_shuts_no_stop_out(burette):
    burette.feed(b"*CLS;:BUR:DOSE:ARM 1,0.01;STAR 1\n", 0.0)
    assert burette.feed(b"*OPC;*OPC?\n", 0.1) == b""
    assert burette.feed(b"*ESR?\n", 0.2) == b"0\n"
    assert burette.advance(1.0) == b"1\n"
    assert burette.feed(b"*ESR?\n", 1.0) == b"1\n"
    burette.feed(b"BUR:DOSE:ARM 2,0.1;STAR 2\n*OPC?\n", 2.0)
    assert burette.feed(b"*WAI;:BUR:STOP;MOT?\n", 3.0) == b"1,0,0.0\n"
    assert burette.feed(b"BUR:DOSE:LAST?\n", 4.0) == b"1\n1,2,STOPPED,10,0.01,0.0\n"


def test_reset_stands_still_and_keeps_the_account(burette):
    burette.feed(b"BUR:DOSE:ARM 1,0.1;STAR 1\n", 0.0)
    burette.feed(b"*RST\n", 1.0)
    assert burette.feed(b"BUR:DOSE:LAST?\n", 9.0) == b"1,1,STOPPED,10,0.01,0.0\n"


def test_a_power_cycle_forgets_all_but_the_start_count(burette):
    burette.feed(b"BUR:DOSE:ARM 1,0.1;STAR 1\n", 0.0)
    burette.feed(b"half a messa", 0.5)
    burette.restart(1.0)
    assert burette.feed(b"BUR:STAR:COUN?;:BUR:DOSE:LAST?\n", 2.0) == b"2;2,0,NONE,0,0.0,0.0\n"
    assert burette.feed(b"BUR:DEL?;:BUR:DOSE:ARM?;:*ESR?\n", 2.0).startswith(b"0,0.0;2,0,0,5.0")


def test_the_watchdog_halts_at_its_time_however_late_it_is_looked_at(burette):
    burette.feed(b"BUR:WATC 2;:BUR:DOSE:ARM 1,0.1;STAR 1\n", 0.0)
    assert burette.next_event_s() == 2.0
    assert burette.feed(b"SYST:ERR?;:BUR:DOSE:LAST?\n", 500.0) == (
        b'202,"Device-specific error;no message for 2 s";1,1,STOPPED,20,0.02,0.0\n'
    )


def test_the_watchdog_counts_real_seconds_under_a_scaled_clock(burette):
    burette.time_scale = 60.0
    burette.feed(b"BUR:DOSE:ARM 1,1.0;STAR 1\n", 0.0)
    assert burette.next_event_s() == 100.0  # the end; the watchdog's 5 s are 300 s of run time


def test_a_fault_of_the_mechanics_refuses_the_start(burette):
    burette.feed(b"BUR:DOSE:ARM 1,0.1\n", 0.0)
    burette.mechanism.broken = "plunger stuck"
    assert burette.feed(b"BUR:DOSE:STAR 1;:SYST:ERR?\n", 0.0) == b'-240,"Hardware error;plunger stuck"\n'
    assert burette.feed(b"BUR:STAT?\n", 0.0) == b'1,0,0,0.0,1.0,0.0,"plunger stuck"\n'


@pytest.mark.parametrize("refill", ["by-hand", "none"])
def test_without_a_valve_filling_is_refused(refill):
    burette = PumpDevice(Plunger(), IDENTITY, refill=refill)
    assert burette.feed(b"BUR:FILL;:SYST:ERR?\n", 0.0).startswith(b'-241,"Hardware missing')
    assert b",9.91E37," in burette.feed(b"BUR:STAT?\n", 0.0)  # no reservoir


def test_a_probe_on_the_wire():
    class Electrode:
        def read(self, at_s, sample_index):
            values = {
                "potential_mv": -10.0 * at_s,
                "temperature_c": None,
                "status": f"reading {'ab'[sample_index % 2]}",
            }
            return type("Reading", (), values)()

    probe = ProbeDevice(Electrode(), IDENTITY)
    assert probe.feed(b"PROBE:READ?;READ?\n", 1.25) == b"1,-12.5000,9.91E37,READING_B;2,-12.5000,9.91E37,READING_A\n"
    assert probe.feed(b"PROB:COUN?;:PROB:READ? 1\n", 2.0) == b"2\n"
    assert probe.next_event_s() == float("inf")


def test_a_bare_instrument_has_every_mandatory_common_command():
    # IEEE 488.2, 10: *CLS *ESE *ESE? *ESR? *IDN? *OPC *OPC? *RST *SRE *SRE? *STB? *TST? *WAI (list from memory)
    bare = Instrument(IDENTITY, {}, {})
    bare.feed(b"*CLS;*ESE 0;*ESE?;*ESR?;*IDN?;*OPC;*OPC?;*RST;*SRE 0;*SRE?;*STB?;*TST?;*WAI\n", 0.0)
    assert bare.feed(b"SYST:ERR?\n", 0.0) == b'0,"No error"\n'
