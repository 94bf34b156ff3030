"""One body for every route: what drivers and virtual devices promise one another, in manual time."""

from __future__ import annotations

import math

import pytest

from drivers.clock import ScaledClock, SystemClock
from drivers.errors import (
    DeviceGarbledError,
    DeviceGoneError,
    DeviceRefusedError,
    DeviceSilentError,
    DoseCutShortError,
    DoseUnknownError,
    StoppedError,
)
from drivers.link import LinkSettings, open_link
from drivers.scpi_probe import ScpiProbe
from simulators.device_end import LostBytesError

LOST = b""


def lose(data):
    return LOST


def to(*headers):
    return lambda request: any(header in request for header in headers)


def test_both_devices_say_who_they_are(bench):
    assert bench.pump.identify().key == "Cidery Workshop Syringe Burette B-7"
    assert bench.probe.identify().serial == "P-3"
    assert (bench.pump.step_ml, bench.pump.syringe_ml, bench.pump.refill) == (0.0005, 10.0, "valve")


def test_doses_are_exact_to_the_step(bench):
    for number, volume_ml in enumerate((0.0005, 0.0425, 1.2345, 0.25), start=1):
        delivered = bench.pump.dose(number, volume_ml)
        assert delivered.steps == round(volume_ml / 0.0005)
        assert delivered.volume_ml == pytest.approx(volume_ml, abs=1e-12)
        # 5 mL/min, and the pump is asked when it said that it would be done
        assert delivered.at_s - delivered.started_at_s == pytest.approx(volume_ml * 12.0, abs=0.0011)
    assert bench.pushed() == 1 + 85 + 2469 + 500
    assert bench.pump.delivered_ml() == pytest.approx(1.5275, abs=1e-12)
    status = bench.pump.status()
    assert (status.last_dose_number, status.moving, status.fault) == (4, False, None)
    assert status.contents_ml == pytest.approx(10.0 - 1.5275, abs=1e-9)


def test_the_rate_of_doses_is_the_one_asked_for(bench):
    from drivers.scpi_pump import ScpiPump

    slow = ScpiPump(bench.pump_link, bench.clock, rate_ml_min=2.0)
    delivered = slow.dose(1, 0.1)
    assert delivered.at_s - delivered.started_at_s == pytest.approx(3.0, abs=0.0011)


def test_a_number_is_never_used_twice(bench):
    bench.pump.dose(7, 0.05)
    with pytest.raises(DeviceRefusedError, match="dose 7 was started before") as caught:
        bench.pump.dose(7, 0.05)
    assert (caught.value.lowest_ml, caught.value.highest_ml) == (0.0, 0.0)
    assert caught.value.exit_status == 3
    assert bench.pushed() == 100


def test_a_repeated_start_does_nothing(bench):
    bench.pump.dose(1, 0.05)
    bench.pump_link.send(b"BUR:DOSE:STAR 1;:BUR:DOSE:LAST?;:SYST:ERR?\n")
    reply = bench.pump_link.receive(bench.pump_link.line_s() + 1.0)
    assert reply == b'1,1,DONE,100,0.05,0.0;0,"No error"'
    bench.clock.wait(10.0)
    assert bench.pushed() == 100


@pytest.mark.parametrize("times", [1, 2])
def test_a_lost_reply_to_the_start_is_settled_by_asking(bench, spoil, times):
    fault = spoil(bench.pump_port, to(b"STAR ", b"LAST?"), reply=lose, times=times)
    assert bench.pump.dose(1, 0.05).steps == 100
    assert fault.spoilt == times
    assert bench.pushed() == 100


def test_a_lost_start_is_sent_again_once_the_pump_said_that_it_waits(bench, spoil):
    fault = spoil(bench.pump_port, to(b"STAR "), request=lose)
    assert bench.pump.dose(1, 0.05).steps == 100
    assert fault.spoilt == 1
    assert bench.pushed() == 100


def test_a_dose_armed_wrongly_on_the_line_is_not_started(bench, spoil):
    fault = spoil(bench.pump_port, to(b"DOSE:ARM "), request=lambda data: data.replace(b",0.05,", b",9.05,"))
    assert bench.pump.dose(1, 0.05).steps == 100
    assert fault.spoilt == 1
    assert bench.pushed() == 100


def test_a_garbled_reply_is_asked_again(bench, spoil):
    fault = spoil(bench.probe_port, to(b"READ?"), reply=lambda data: data.replace(b",", b"\xff"), times=2)
    assert bench.probe.read().sequence == 3
    assert fault.spoilt == 2


def test_a_probe_that_only_garbles_is_named(bench, spoil):
    spoil(bench.probe_port, to(b"READ?"), reply=lambda data: data.replace(b",", b"\xff"), times=99)
    with pytest.raises(DeviceGarbledError, match=r"^probe on .*Check the baud rate") as caught:
        bench.probe.read()
    assert bench.probe_link.url in str(caught.value)


@pytest.mark.parametrize("value", [b"NAN", b"INF", b"9.9E37", b"2500.0", b"1_0.0", b"", b"12mV"])
def test_a_potential_that_no_electrode_gives_is_garbled(bench, spoil, value):
    spoil(
        bench.probe_port,
        to(b"READ?"),
        reply=lambda data: b",".join([data.split(b",")[0], value, b"25.000,OK\n"]),
        times=99,
    )
    with pytest.raises(DeviceGarbledError):
        bench.probe.read()


def test_a_silent_device_costs_its_deadlines_in_manual_time(bench, spoil):
    spoil(bench.probe_port, to(b"READ?"), reply=lose, times=99)
    with pytest.raises(DeviceSilentError, match=r"probe on .*: no answer within 0.5 s"):
        bench.probe.read()
    assert bench.clock.now_s() == pytest.approx(1.5)  # three attempts


def test_an_empty_syringe_is_refused_and_nothing_moves(bench):
    bench.pump.dose(1, 9.9)
    with pytest.raises(DeviceRefusedError, match=r"syringe empty: holds 0\.1 mL, asked 0\.2 mL.*Refill") as caught:
        bench.pump.dose(2, 0.2)
    assert (caught.value.lowest_ml, caught.value.highest_ml) == (0.0, 0.0)
    assert bench.pushed() == 19_800
    bench.pump.fill()
    assert bench.pump.dose(2, 0.2).steps == 400


@pytest.mark.parametrize("volume_ml", [0.0, -0.1, 0.0001, 10.1, math.nan, math.inf])
def test_a_volume_out_of_range_is_refused(bench, volume_ml):
    with pytest.raises(DeviceRefusedError, match=r"allowed 0\.0005 to 10 mL"):
        bench.pump.dose(1, volume_ml)
    assert bench.pushed() == 0


def test_a_restart_within_a_dose_leaves_it_unknown(bench):
    bench.pump.status()
    bench.manual.call_at(1.0, lambda: bench.pump_device.restart(1.0))
    with pytest.raises(DoseUnknownError, match=r"between 0 and 0\.5 mL") as caught:
        bench.pump.dose(1, 0.5)
    assert (caught.value.lowest_ml, caught.value.highest_ml) == (0.0, 0.5)
    assert 0 < bench.pushed() < 1000
    status = bench.pump.status()
    assert (status.start_count, status.last_dose_number, status.delivered_ml) == (2, 0, 0.0)
    assert bench.pump.dose(2, 0.05).steps == 100


def test_a_restart_between_doses_is_told_before_anything_moves(bench):
    bench.pump.dose(1, 0.05)
    bench.pump_device.restart(bench.clock.now_s())
    with pytest.raises(DoseUnknownError) as caught:
        bench.pump.dose(2, 0.05)
    assert (caught.value.lowest_ml, caught.value.highest_ml) == (0.0, 0.0)
    assert bench.pushed() == 100


def test_a_stop_within_a_dose_reports_what_was_delivered(bench):
    bench.manual.call_at(1.3, bench.stop.set)
    with pytest.raises(StoppedError) as caught:
        bench.pump.dose(1, 0.5)
    delivered = caught.value.delivered
    assert caught.value.confirmed
    assert bench.clock.now_s() == pytest.approx(1.3)
    assert delivered.steps == bench.pushed() == 216  # 5 mL/min for 1.3 s
    bench.stop.clear()
    assert bench.pump.dose(2, 0.05).steps == 100


def test_a_stop_before_the_start_reaches_the_pump_leaves_nothing_delivered(bench, spoil):
    spoil(bench.pump_port, to(b"STAR "), request=lose)
    bench.manual.call_at(0.2, bench.stop.set)  # while the reply to the lost start is waited for
    with pytest.raises(StoppedError) as caught:
        bench.pump.dose(1, 0.5)
    assert caught.value.delivered.steps == 0
    assert bench.pushed() == 0


def test_nothing_begins_once_stopped(bench):
    bench.stop.set()
    for action in (lambda: bench.pump.dose(1, 0.5), bench.pump.fill, lambda: bench.pump.prime(0.1)):
        with pytest.raises(StoppedError, match="stopped before"):
            action()
    assert bench.pump.stop()
    assert bench.pushed() == 0


def test_a_stop_that_is_not_answered_is_not_confirmed(bench, spoil):
    spoil(bench.pump_port, to(b"BUR:STOP"), request=lose, times=99)
    bench.manual.call_at(1.0, bench.stop.set)
    with pytest.raises(StoppedError, match="did not confirm") as caught:
        bench.pump.dose(1, 5.0)
    assert not caught.value.confirmed
    assert caught.value.delivered is None


def test_a_halt_that_the_controller_did_not_ask_for_is_exact(bench):
    bench.manual.call_at(0.7, lambda: bench.pump_device.feed(b"*RST\n", 0.7))
    with pytest.raises(DoseCutShortError) as caught:
        bench.pump.dose(1, 0.5)
    assert caught.value.lowest_ml == caught.value.highest_ml == pytest.approx(bench.pushed() * 0.0005)
    assert 0 < bench.pushed() < 1000


def test_the_watchdog_halts_a_pump_whose_controller_fell_silent(bench, spoil):
    bench.pump.status()
    bench.manual.call_at(0.9, lambda: spoil(bench.pump_port, to(b"EXCH"), request=lose, times=3))
    with pytest.raises(DeviceSilentError) as caught:
        bench.pump.dose(1, 9.0)
    bench.clock.wait(100.0)
    # the last message came at 0.5 s, the watchdog waits 5 s, 5 mL/min: 916.7 steps, and only whole ones are done
    assert bench.pushed() == 916
    assert caught.value.lowest_ml <= bench.pushed() * 0.0005 <= caught.value.highest_ml
    assert "no message" in bench.pump.status().fault
    last = bench.pump.last_dose()
    assert (last.number, last.state, last.steps) == (1, "stopped", bench.pushed())


def test_readings_are_numbered_and_dated(bench):
    seen = []
    for _ in range(5):
        seen.append(bench.probe.read())
        bench.clock.wait(0.5)
    assert [reading.sequence for reading in seen] == [1, 2, 3, 4, 5]
    assert [reading.at_s for reading in seen] == [0.0, 0.5, 1.0, 1.5, 2.0]
    assert seen[2].potential_mv == pytest.approx(100.0 + 0.5 + 0.3)
    assert (seen[2].temperature_c, seen[2].status) == (25.0, "ok")


def test_a_late_reply_is_not_taken_for_the_next_one(bench, spoil):
    held = []

    def slip(data):
        held.append(data)
        return LOST if len(held) == 1 else held[-2] + data

    spoil(bench.probe_port, to(b"READ?"), reply=slip, times=2)
    assert bench.probe.read().sequence == 2
    assert bench.probe.read().sequence == 3


def test_bytes_that_came_unasked_are_thrown_away(bench):
    bench.probe_device.feed(b"*IDN?;*IDN", 0.0)  # half a message of someone else before us
    assert bench.probe.read().potential_mv == pytest.approx(100.0, abs=2.0)


def test_filling_and_priming_survive_lost_replies(bench, spoil):
    bench.pump.dose(1, 4.0)
    spoil(bench.pump_port, to(b"BUR:PRIM"), reply=lose)
    assert bench.pump.prime(0.5) == pytest.approx(0.5, abs=1e-12)
    assert bench.pushed() == 9000
    spoil(bench.pump_port, to(b"BUR:PRIM"), request=lose)
    assert bench.pump.prime(0.5) == pytest.approx(0.5, abs=1e-12)
    assert bench.pushed() == 10_000
    spoil(bench.pump_port, to(b"BUR:FILL"), reply=lose)
    assert bench.pump.fill().contents_ml == pytest.approx(10.0)


def test_a_prime_whose_volume_was_garbled_does_not_move(bench, spoil):
    spoil(bench.pump_port, to(b"BUR:PRIM"), request=lambda data: data.replace(b" 0.5,", b" 9.5,"), times=99)
    with pytest.raises(DeviceRefusedError):
        bench.pump.prime(0.5)
    assert bench.pushed() == 0


def test_a_pulled_cable_is_a_device_gone(bench):
    bench.probe.read()
    bench.probe_port.unplug()
    with pytest.raises(DeviceGoneError, match=r"probe on .*Check the cable"):
        bench.probe.read()
    assert not bench.probe_link.settings.dtr
    with pytest.raises(DeviceGoneError):
        bench.probe_link.open()


def test_a_link_can_be_closed_and_opened_again(bench):
    bench.probe.read()
    bench.probe_link.close()
    with pytest.raises(DeviceGoneError, match="not open"):
        bench.probe.read()
    bench.probe_link.open()
    assert bench.probe.read().sequence == 2


def test_a_port_has_one_user(bench):
    with pytest.raises(DeviceGoneError, match="another program has opened it"):
        open_link(bench.probe_link.url, clock=bench.clock, device="probe")
    assert bench.probe.read().sequence == 1


def test_bytes_that_never_arrive_end_the_run_instead_of_moving_time(bench, monkeypatch):
    monkeypatch.setattr("simulators.device_end.ARRIVAL_LIMIT_S", 0.001)
    monkeypatch.setattr(bench.probe_port.route, "take", lambda wait_s=0.0: b"")
    with pytest.raises(LostBytesError, match="did not arrive"):
        bench.probe.read()
    assert bench.clock.now_s() == 0.0
    bench.probe_port.line.clear()


def test_a_reply_that_never_arrives_ends_the_run_instead_of_moving_time(bench, monkeypatch):
    monkeypatch.setattr("drivers.virtualline.ARRIVAL_LIMIT_S", 0.001)
    monkeypatch.setattr(bench.probe_port.route, "give", len)
    with pytest.raises(DeviceGoneError, match="did not arrive"):
        bench.probe.read()
    assert bench.clock.now_s() == 0.0
    bench.probe_port.line.clear()


def test_latency_is_manual_time(route, build):
    bench = build(route, latency_s=0.02)
    assert bench.probe.read().at_s == pytest.approx(0.02)
    assert bench.pump.dose(1, 0.05).steps == 100
    assert bench.pushed() == 100


def test_a_latency_beyond_the_deadline_is_a_silence_and_no_slip(route, build):
    bench = build(route, latency_s=0.3, settings=LinkSettings(reply_deadline_s=0.2))
    with pytest.raises(DeviceSilentError):
        bench.probe.read()
    bench.clock.wait(1.0)
    with pytest.raises(DeviceSilentError):
        bench.pump.dose(1, 0.05)
    assert bench.pushed() == 0


def session(bench, spoil):
    spoil(bench.pump_port, to(b"STAR 2"), reply=lose)
    bench.pump.status()
    for number in range(1, 6):
        bench.pump.dose(number, 0.05 * number)
        for _ in range(20):
            bench.probe.read()
            bench.clock.wait(0.3)
    bench.pump.fill()
    return list(bench.pump_traffic.entries), list(bench.probe_traffic.entries)


def test_two_equal_runs_give_identical_bytes_at_identical_times(route, build, spoil):
    first, second = session(build(route), spoil), session(build(route), spoil)
    assert first == second
    assert len(first[1]) == 2 * 100


def test_every_route_carries_the_same_bytes(route, build, spoil):
    assert session(build(route), spoil) == session(build("memory"), spoil)


def test_a_port_that_is_not_there_is_gone():
    with pytest.raises(
        DeviceGoneError, match=r"pump on /dev/no-such-port: cannot be opened.*Check that it is connected"
    ):
        open_link("/dev/no-such-port", clock=SystemClock(), device="pump")
    with pytest.raises(DeviceGoneError, match="probe on nonsense://here"):
        open_link("nonsense://here", clock=SystemClock(), device="probe")


def test_a_port_has_one_user_in_real_time(route, build):
    bench = build(route, SystemClock())
    assert bench.probe.read().sequence == 1
    with pytest.raises(DeviceGoneError):
        ScpiProbe(open_link(bench.probe_link.url, clock=bench.clock, device="probe"), bench.clock).read()
    assert bench.probe.read().sequence == 2


@pytest.mark.parametrize("clock", [SystemClock, lambda: ScaledClock(5.0)], ids=["system", "scaled"])
def test_real_time_smoke(route, build, clock):
    bench = build(route, clock())
    assert bench.pump.identify().serial == "B-7"
    assert bench.pump.dose(1, 0.005).steps == 10
    assert bench.probe.read().sequence == 1
    assert bench.pump.stop()
    assert bench.pushed() == 10
