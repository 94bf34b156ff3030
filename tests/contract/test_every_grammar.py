"""One body of tests for every grammar on every route: SCPI, dialects, and (probes) Modbus.

The devices of dialects and Modbus share no code with the drivers or the SCPI devices: they are written out by hand.
What belongs to one grammar alone stands at the end; for SCPI that is tests/contract/test_wire.py.
"""

from __future__ import annotations

import itertools
import math
import random
import threading
from dataclasses import dataclass
from typing import Any

import pytest

from configs.dialectfile import DialectSettings
from configs.settings import shipped_dialect
from drivers.clock import ManualClock, SystemClock
from drivers.dialect_probe import DialectProbe
from drivers.dialect_pump import DialectPump
from drivers.errors import (
    DeviceError,
    DeviceGarbledError,
    DeviceGoneError,
    DeviceRefusedError,
    DeviceSilentError,
    DoseCutShortError,
    DoseUnknownError,
    StoppedError,
)
from drivers.identity import Identity
from drivers.link import LinkSettings, open_link
from drivers.modbus import ModbusProbe
from drivers.scpi_probe import ScpiProbe
from drivers.scpi_pump import ScpiPump
from simulators.ascii_devices import OrchardLaneMeter, OrchardLanePump
from simulators.devices import ProbeDevice, PumpDevice
from simulators.modbus_devices import Transmitter
from simulators.port import VirtualPorts

NAMES = itertools.count()
SCPI = None  # needs no dialect
WHO_PUMP = Identity(maker="Orchard Lane Works", model="plunger drive", serial="OL-7", firmware="1")
WHO_PROBE = Identity(maker="Orchard Lane Works", model="glass meter", serial="OL-9", firmware="1")
#: what stands in the requests of a grammar
SCPI_WORDS = {"push": b"STAR ", "prime": b"PRIM", "who": b"*IDN?", "any": b"EXCH", "halt": b"*RST\n"}
DIALECT_WORDS = {"push": b"PUSH", "prime": b"PUSH", "who": b"WHO", "any": b"P2", "halt": b"P2 HALT*53\r\n"}
PUMP = shipped_dialect("orchard-lane-pump")
PROBE = shipped_dialect("orchard-lane-probe")
TRANSMITTER = shipped_dialect("orchard-lane-transmitter")


def changed(dialect: DialectSettings, group: str, **keys: Any) -> DialectSettings:
    """The dialect with some keys of one group put in place (None takes one away), checked again."""
    whole = dialect.model_dump(exclude_none=True)
    whole[group] = {key: value for key, value in {**whole[group], **keys}.items() if value is not None}
    return DialectSettings.model_validate(whole)


#: the pump of the shipped dialect, one that tells only where its plunger stands, one that takes its volume in one go
BY_SUM = PUMP
BY_PLACE = changed(
    DialectSettings.model_validate({**PUMP.model_dump(exclude_none=True), "numbers": {
        **PUMP.model_dump()["numbers"], "position": {"times": 0.0001, "decimals": 0}}}),
    "pump", delivered=None, position={"say": "PLACE", "hear": "PLACE <position>"}, starts=None,
)  # fmt: skip
AT_ONCE = changed(
    PUMP, "pump", target=None, read_target=None, dose={"say": "PUSH <volume>", "hear": "YES"}, starts=None
)
COUNTLESS = changed(PUMP, "pump", delivered=None, contents=None)


@dataclass
class Built:
    clock: Any
    ports: VirtualPorts
    mechanism: Any
    device: Any
    port: Any
    link: Any
    driver: Any
    stop: threading.Event
    words: dict[str, bytes]

    def pushed(self) -> int:
        return self.mechanism.tip_steps_total(self.clock.now_s())


@pytest.fixture
def built(monkeypatch, build):
    """Builds one device on a route; `build` brings the quiet socket of the other contract tests."""
    made = []

    def ends(dialect, mechanism, sensor, device):
        if dialect is SCPI:
            if mechanism is not None:
                return PumpDevice(mechanism, WHO_PUMP)
            return ProbeDevice(sensor, WHO_PROBE)
        if dialect.pump is not None:
            return OrchardLanePump(mechanism, serial="OL-7", **device)
        if dialect.probe is not None:
            return OrchardLaneMeter(sensor, serial="OL-9", **device)
        return Transmitter(sensor, serial=70_017, **device)

    def drivers(dialect, link, clock, stop, mechanism):
        if dialect is SCPI:
            return ScpiPump(link, clock, stop) if mechanism is not None else ScpiProbe(link, clock, stop)
        if dialect.pump is not None:
            return DialectPump(
                link, clock, stop, dialect=dialect, step_ml=0.0005, syringe_ml=10.0, refill="valve", rate_ml_min=5.0
            )
        kind = DialectProbe if dialect.probe is not None else ModbusProbe
        return kind(link, clock, stop, dialect=dialect)

    def builder(route, dialect, clock=None, *, mechanism=None, sensor=None, **device):
        clock, stop = clock or ManualClock(), threading.Event()
        ports = VirtualPorts(clock)
        end = ends(dialect, mechanism, sensor, device)
        port = ports.add(f"device {next(NAMES)}", end, route)
        lines = dialect is SCPI or dialect.transmitter is None
        link = open_link(port.url, LinkSettings(reply_end=b"\n" if lines else b""), clock=clock, device="device")
        driver = drivers(dialect, link, clock, stop, mechanism)
        words = SCPI_WORDS if dialect is SCPI else DIALECT_WORDS
        made.append(Built(clock, ports, mechanism, end, port, link, driver, stop, words))
        return made[-1]

    yield builder
    for one in made:
        one.link.close()
        one.ports.close()


OF_DIALECTS = [
    pytest.param((BY_SUM, "sum"), id="sum"),
    pytest.param((BY_PLACE, "place"), id="place"),
    pytest.param((AT_ONCE, "sum"), id="at-once"),
]


@pytest.fixture(params=[pytest.param((SCPI, None), id="scpi"), *OF_DIALECTS])
def pump(request, route, built, plain_mechanism):
    """A pump of every grammar."""
    dialect, counts = request.param
    return built(route, dialect, mechanism=plain_mechanism, **({} if dialect is SCPI else {"counts": counts}))


@pytest.fixture(params=OF_DIALECTS)
def dialect_pump(request, route, built, plain_mechanism):
    """A pump of every kind of dialect."""
    dialect, counts = request.param
    return built(route, dialect, mechanism=plain_mechanism, counts=counts)


def lose(data):
    return b""


def has(*words):
    return lambda request: any(word in request for word in words)


# the pump


def test_it_says_who_it_is(pump):
    assert pump.driver.identify().key == "Orchard Lane Works plunger drive OL-7"


def test_doses_are_exact_to_the_step(pump):
    for number, volume_ml in enumerate((0.0005, 0.0425, 1.2345, 0.25), start=1):
        delivered = pump.driver.dose(number, volume_ml)
        assert delivered.steps == round(volume_ml / 0.0005)
        assert delivered.at_s - delivered.started_at_s == pytest.approx(volume_ml * 12.0, abs=0.03)
    assert pump.pushed() == 1 + 85 + 2469 + 500
    assert pump.driver.delivered_ml() == pytest.approx(1.5275, abs=1e-9)
    status = pump.driver.status()
    assert (status.last_dose_number, status.moving, status.fault) == (4, False, None)
    assert status.contents_ml == pytest.approx(10.0 - 1.5275, abs=1e-9)
    last = pump.driver.last_dose()
    assert (last.number, last.steps, last.state) == (4, 500, "done")


def test_a_number_is_never_used_twice(pump):
    pump.driver.dose(7, 0.05)
    with pytest.raises(DeviceRefusedError, match="dose 7 was started before") as caught:
        pump.driver.dose(7, 0.05)
    assert (caught.value.lowest_ml, caught.value.highest_ml) == (0.0, 0.0)
    assert pump.pushed() == 100


@pytest.mark.parametrize("times", [1, 3])
def test_a_lost_reply_to_the_push_is_settled_by_the_count(pump, spoil, times):
    fault = spoil(pump.port, has(pump.words["push"]), reply=lose, times=times)
    assert pump.driver.dose(1, 0.05).steps == 100
    assert fault.spoilt == 1  # it was not sent again
    assert pump.pushed() == 100


def test_a_lost_push_is_sent_again_once_the_pump_said_that_nothing_moved(pump, spoil):
    fault = spoil(pump.port, has(pump.words["push"]), request=lose, times=2)
    assert pump.driver.dose(1, 0.05).steps == 100
    assert fault.spoilt == 2
    assert pump.pushed() == 100


@pytest.mark.parametrize("word", [b"NEXT", b"SUM", b"PLACE", b"STATE", b"PUSH"])
def test_garbled_replies_are_asked_again(dialect_pump, spoil, word):
    spoil(dialect_pump.port, has(word), reply=lambda data: data.replace(b"P2", b"P\xff"), times=1)
    assert dialect_pump.driver.dose(1, 0.05).steps == 100
    assert dialect_pump.pushed() == 100


@pytest.mark.parametrize("word", [b"NEXT", b"PUSH"])
def test_a_command_garbled_on_its_way_does_not_move_another_volume(dialect_pump, spoil, word):
    spoil(dialect_pump.port, has(word), request=lambda data: data.replace(b"500", b"900"), times=1)
    assert dialect_pump.driver.dose(1, 0.05).steps == 100
    assert dialect_pump.pushed() == 100


def test_a_silent_device_is_named(pump, spoil):
    spoil(pump.port, has(pump.words["who"]), request=lose, times=99)
    with pytest.raises(DeviceSilentError, match=r"device on .*no answer within"):
        pump.driver.identify()


def test_an_empty_syringe_is_refused_and_nothing_moves(pump):
    pump.driver.dose(1, 9.9)
    with pytest.raises(DeviceRefusedError, match="syringe empty") as caught:
        pump.driver.dose(2, 0.2)
    assert (caught.value.lowest_ml, caught.value.highest_ml) == (0.0, 0.0)
    assert pump.pushed() == 19_800
    assert pump.driver.fill().contents_ml == pytest.approx(10.0)
    assert pump.driver.dose(3, 0.2).steps == 400


@pytest.mark.parametrize("volume_ml", [0.0, -0.1, 0.0001, 10.1, math.nan, math.inf])
def test_a_volume_out_of_range_is_refused(pump, volume_ml):
    with pytest.raises(DeviceRefusedError, match=r"allowed 0\.0005 to 10 mL"):
        pump.driver.dose(1, volume_ml)
    assert pump.pushed() == 0


def test_a_stop_within_a_dose_reports_what_was_delivered(pump):
    pump.driver.status()
    pump.clock.call_at(1.3, pump.stop.set)
    with pytest.raises(StoppedError) as caught:
        pump.driver.dose(1, 0.5)
    delivered = caught.value.delivered
    assert caught.value.confirmed
    assert delivered.steps == pump.pushed()
    assert 200 < pump.pushed() < 230  # 5 mL/min for 1.3 s
    pump.stop.clear()
    assert pump.driver.dose(2, 0.05).steps == 100


def test_a_stop_that_is_not_answered_is_not_confirmed(pump, spoil):
    pump.driver.status()
    spoil(pump.port, has(pump.words["any"]), request=lose, times=999).hit_from(pump.clock, 0.9)
    pump.clock.call_at(1.0, pump.stop.set)
    with pytest.raises(StoppedError, match="did not confirm") as caught:
        pump.driver.dose(1, 5.0)
    assert not caught.value.confirmed
    assert caught.value.delivered is None


def test_a_halt_that_nobody_asked_for_is_exact(pump):
    pump.driver.status()
    pump.clock.call_at(0.7, lambda: halt_by_hand(pump))
    with pytest.raises(DoseCutShortError) as caught:
        pump.driver.dose(1, 0.5)
    assert caught.value.lowest_ml == caught.value.highest_ml == pytest.approx(pump.pushed() * 0.0005)
    assert 0 < pump.pushed() < 1000


def halt_by_hand(pump):
    pump.device.feed(pump.words["halt"], pump.clock.now_s())
    assert pump.device.next_event_s() == math.inf  # it stands


def test_a_restart_within_a_dose_is_noticed(pump):
    pump.driver.status()
    pump.clock.call_at(1.0, lambda: pump.device.restart(1.0))
    with pytest.raises((DoseUnknownError, DoseCutShortError)) as caught:
        pump.driver.dose(1, 0.5)
    # where the count is kept over the restart the volume is exact, else it is unknown
    assert caught.value.lowest_ml <= pump.pushed() * 0.0005 <= caught.value.highest_ml
    assert 0 < pump.pushed() < 1000


def test_the_guard_halts_a_pump_whose_controller_fell_silent(pump, spoil):
    pump.driver.status()
    spoil(pump.port, has(pump.words["any"]), request=lose, times=999).hit_from(pump.clock, 0.9)
    with pytest.raises(DeviceSilentError) as caught:
        pump.driver.dose(1, 9.0)
    pump.clock.wait(100.0)
    assert 0 < pump.pushed() < 1100  # 5 s after the last message at 5 mL/min
    assert caught.value.lowest_ml <= pump.pushed() * 0.0005 <= caught.value.highest_ml


def test_priming_survives_a_lost_reply(pump, spoil):
    spoil(pump.port, has(pump.words["prime"]), reply=lose)
    assert pump.driver.prime(0.5) == pytest.approx(0.5)
    assert pump.pushed() == 1000


def test_more_than_was_asked_halts_the_pump(dialect_pump):
    begin = dialect_pump.mechanism.begin
    dialect_pump.mechanism.begin = lambda steps, rate, at_s: begin(10 * steps, rate, at_s)  # a scale that is wrong
    with pytest.raises(DoseCutShortError, match="Check volume and units") as caught:
        dialect_pump.driver.dose(1, 0.1)
    assert caught.value.lowest_ml == pytest.approx(dialect_pump.pushed() * 0.0005)
    assert dialect_pump.pushed() < 1000


def test_a_pump_that_comes_back_within_a_dose_tells_what_became_of_it(dialect_pump, route, plain_mechanism):
    dialect_pump.driver.identify()
    begun = dialect_pump.clock.now_s()
    dialect_pump.clock.call_at(begun + 1.0, dialect_pump.port.unplug)
    found = []

    def back():
        again = dialect_pump.ports.add(f"again {next(NAMES)}", dialect_pump.device, route)
        found.append(again.url)

    dialect_pump.clock.call_at(begun + 4.0, back)
    dialect_pump.link._find = lambda: found[0] if found else (_ for _ in ()).throw(OSError("nowhere"))
    # the guard would halt it after 5 s of silence; it is back after 3 s and goes on to its end
    assert dialect_pump.driver.dose(1, 0.5).steps == 1000
    assert dialect_pump.pushed() == 1000


def test_another_pump_at_the_port_is_refused(dialect_pump, route, plain_mechanism):
    dialect_pump.driver.identify()
    dialect_pump.port.unplug()
    other = OrchardLanePump(plain_mechanism, serial="OL-8")
    again = dialect_pump.ports.add(f"other {next(NAMES)}", other, route)
    dialect_pump.link._find = lambda: again.url
    with pytest.raises(DeviceGoneError, match="Check the cable"):
        dialect_pump.driver.status()
    with pytest.raises(DeviceGoneError, match="another device answers: Orchard Lane Works plunger drive OL-8"):
        dialect_pump.driver.status()


def test_a_pump_that_counts_nothing_leaves_a_doubt(route, built, spoil, plain_mechanism):
    pump = built(route, COUNTLESS, mechanism=plain_mechanism, counts="nothing")
    assert "neither the volume" in COUNTLESS.unfit_unattended()
    assert BY_PLACE.unfit_unattended() is None
    assert pump.driver.dose(1, 0.05).steps == 100
    spoil(pump.port, has(b"PUSH"), request=lose)
    with pytest.raises(DoseUnknownError) as caught:
        pump.driver.dose(2, 0.05)
    assert (caught.value.lowest_ml, caught.value.highest_ml) == (0.0, 0.05)


# the probe


@pytest.fixture(params=["scpi", "dialect", "stream", "ph", "modbus", "modbus-ph"])
def probe(request, route, built, plain_sensor):
    kind = request.param
    if kind == "scpi":
        return built(route, SCPI, sensor=plain_sensor)
    if kind == "modbus":
        return built(route, TRANSMITTER, sensor=plain_sensor)
    if kind == "modbus-ph":
        as_ph = changed(TRANSMITTER, "transmitter", potential=None, ph={"register_number": 14})
        return built(route, as_ph, sensor=plain_sensor)
    if kind == "stream":
        stream = changed(PROBE, "probe", read={"hear": "<sequence>: <potential> at <temperature>, <status>"})
        return built(route, stream, sensor=plain_sensor, streams_every_s=0.25)
    if kind == "ph":
        as_ph = changed(PROBE, "probe", read={"say": "tell", "hear": "<sequence>: pH <ph> at <temperature>, <status>"})
        return built(route, as_ph, sensor=plain_sensor, ph_of=lambda mv: 7.0 - mv / 59.1593)
    return built(route, PROBE, sensor=plain_sensor)


def test_readings_are_numbered_dated_and_right(probe):
    probe.driver.identify()
    seen = []
    for _ in range(5):
        seen.append(probe.driver.read())
        probe.clock.wait(0.5)
    assert [b.sequence > a.sequence for a, b in itertools.pairwise(seen)] == [True] * 4
    for reading in seen:
        # PlainSensor: 100 mV + 0.5 mV/s + up to 0.6 mV by its index; a pH to 0.001 is 0.06 mV
        assert 99.9 <= reading.potential_mv - 0.5 * reading.at_s <= 100.7
        assert (reading.temperature_c, reading.status) == (25.0, "ok")


def test_the_probe_says_who_it_is(probe):
    assert probe.driver.identify().maker == "Orchard Lane Works"
    assert probe.driver.identify().serial in ("OL-9", "70017")


def test_one_garbled_or_lost_reply_is_asked_again(probe, spoil):
    spoil(probe.port, lambda request: True, reply=lose)
    assert probe.driver.read().status == "ok"
    spoil(probe.port, lambda request: True, reply=lambda data: data[:-3] + b"\xff\xff\xff")
    assert probe.driver.read().status == "ok"


def test_a_silent_probe_is_named(probe, spoil):
    spoil(probe.port, lambda request: True, reply=lose, times=9999)
    probe.port.spoil_reply = lose
    with pytest.raises(DeviceSilentError, match=r"device on .*no answer within 0\.5 s"):
        probe.driver.read()


def test_a_probe_pulled_out_is_gone_and_found_again(probe, route):
    probe.driver.identify()
    probe.port.unplug()
    with pytest.raises(DeviceGoneError, match=r"Check the cable|is not there"):
        probe.driver.read()
    again = probe.ports.add(f"again {next(NAMES)}", probe.device, route)
    probe.link._find = lambda: again.url
    assert probe.driver.read().status == "ok"


def test_what_no_electrode_gives_is_garbled(route, built, plain_sensor, spoil):
    probe = built(route, PROBE, sensor=plain_sensor)
    spoil(probe.port, has(b"tell"), reply=lambda data: b"12: 999999 at 250, fine\r\nready> ", times=99)
    with pytest.raises(DeviceGarbledError, match=r"potential of 9999\.99 mV"):
        probe.driver.read()


def test_a_wrong_address_is_silence_and_a_wrong_register_a_refusal(route, built, plain_sensor):
    with pytest.raises(DeviceSilentError):
        built(route, changed(TRANSMITTER, "transmitter", unit_address=8), sensor=plain_sensor).driver.read()
    away = changed(TRANSMITTER, "transmitter", potential={"register_number": 900})
    with pytest.raises(DeviceRefusedError, match="refused register 900"):
        built(route, away, sensor=plain_sensor).driver.read()


def test_an_adapter_that_hears_itself_is_understood(route, built, plain_sensor):
    echoing = changed(TRANSMITTER, "line", echo=True)
    assert built(route, echoing, sensor=plain_sensor, echoes=True).driver.read().status == "ok"
    with pytest.raises(DeviceGarbledError):
        built(route, TRANSMITTER, sensor=plain_sensor, echoes=True).driver.read()


@pytest.mark.parametrize("dialect", [PROBE, TRANSMITTER], ids=["dialect", "modbus"])
def test_real_time_smoke_of_probes(route, built, plain_sensor, dialect):
    probe = built(route, dialect, SystemClock(), sensor=plain_sensor)
    assert probe.driver.read().status == "ok"


def test_real_time_smoke_of_the_pump(route, built, plain_mechanism):
    pump = built(route, PUMP, SystemClock(), mechanism=plain_mechanism)
    assert pump.driver.dose(1, 0.005).steps == 10
    assert pump.driver.stop()
    assert pump.pushed() == 10


def test_a_late_reply_is_not_taken_for_the_next(probe, spoil):
    """A transmitter's temperature and status are one register each: nothing in a reply tells which it is."""
    held = []

    def late(data):
        held.append(data)
        probe.clock.call_at(probe.clock.now_s() + 0.7, lambda: probe.port._send(data))
        return b""

    spoil(probe.port, lambda request: b"\x00\x0c\x00\x01" in request or b"tell" in request, reply=late)
    before = probe.clock.now_s()
    reading = probe.driver.read()
    assert (reading.temperature_c, reading.status) == (25.0, "ok")
    assert held == [] or probe.clock.now_s() - before >= 0.7


def test_a_device_that_never_stops_talking_is_garbled_and_ends(route, built, plain_sensor, spoil):
    probe = built(route, PROBE, sensor=plain_sensor)
    spoil(probe.port, has(b"tell"), reply=lambda data: b"(noise)\r\n" * 300, times=99)
    with pytest.raises((DeviceGarbledError, DeviceSilentError)):
        probe.driver.read()
    spoil(probe.port, has(b"tell"), reply=lambda data: b"x" * 100_000, times=99)
    with pytest.raises(DeviceGarbledError):
        probe.driver.read()
    assert probe.link._reader.waiting <= 1024


@pytest.mark.parametrize("dialect", [PROBE, TRANSMITTER], ids=["dialect", "modbus"])
def test_any_reply_is_a_sound_reading_or_a_typed_error(built, plain_sensor, spoil, dialect):
    probe = built("memory", dialect, sensor=plain_sensor)
    chance = random.Random(20261201)

    def mangle(data):
        kind = chance.randrange(5)
        if kind == 0:
            return chance.randbytes(chance.randrange(300))
        if kind == 1:
            return data[: chance.randrange(len(data) + 1)]
        if kind == 2:
            return data * chance.randrange(2, 4)
        where = chance.randrange(len(data))
        return data[:where] + chance.randbytes(1) + data[where + 1 :]

    spoil(probe.port, lambda request: True, reply=mangle, times=10**9)
    outcomes = {"reading": 0, "error": 0}
    for _ in range(300):
        try:
            reading = probe.driver.read()
        except DeviceError:
            outcomes["error"] += 1
        else:
            outcomes["reading"] += 1
            assert abs(reading.potential_mv) <= 2000
            assert reading.temperature_c is None or -50 <= reading.temperature_c <= 200
    assert min(outcomes.values()) > 10


@pytest.mark.parametrize("way", ["reply", "request"])
@pytest.mark.parametrize(
    ("dialect", "counts"), [(BY_SUM, "sum"), (BY_PLACE, "place"), (AT_ONCE, "sum")], ids=["sum", "place", "at-once"]
)
def test_a_pump_on_a_line_that_garbles_a_tenth_never_lies(built, plain_mechanism, spoil, *, dialect, counts, way):
    """What dose() returns, or the bounds that it raises, always hold what went through the tip."""
    pump = built("memory", dialect, mechanism=plain_mechanism, counts=counts)
    chance = random.Random(7)
    pump.driver.identify()

    def mangle(data):
        where = chance.randrange(len(data))
        return data[:where] + chance.randbytes(1) + data[where + 1 :] if chance.random() < 0.9 else b""

    spoil(pump.port, lambda request: chance.random() < 0.1, **{way: mangle}, times=10**9)
    exact = 0
    for number in range(1, 120):
        if pump.mechanism.contents_steps(pump.clock.now_s()) < 400:
            pump.port.spoil_reply = pump.port.spoil_request = None
            pump.driver.fill()
            spoil(pump.port, lambda request: chance.random() < 0.1, **{way: mangle}, times=10**9)
        before = pump.pushed()
        try:
            steps = pump.driver.dose(number, 0.0005 * chance.randrange(1, 200)).steps
            lowest, highest = steps, steps
            exact += 1
        except DeviceError as error:
            pump.clock.wait(30.0)
            lowest, highest = round(error.lowest_ml / 0.0005), round(error.highest_ml / 0.0005)
        assert lowest <= pump.pushed() - before <= highest
    assert exact > 90
