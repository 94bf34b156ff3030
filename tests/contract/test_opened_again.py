"""Another program opens the ports after one that ended: nothing of the one before is in its way."""

from __future__ import annotations

from functools import reduce
from operator import xor
from types import SimpleNamespace

import pytest

from controller.running.startcheck import check_devices
from drivers.clock import ManualClock
from drivers.errors import DeviceError
from drivers.link import LinkSettings, open_link
from drivers.scpi_pump import ScpiPump
from simulators.ascii_devices import OrchardLanePump


def test_a_pump_that_its_watchdog_halted_says_so_until_it_is_told_to_stop(bench):
    bench.pump.dose_and_fall_silent(1, 1.0, 7.0)
    assert "no message for 5 s" in bench.pump.status().fault
    assert bench.pump.stop()
    assert bench.pump.status().fault is None
    assert bench.pump.dose(2, 0.1).volume_ml == pytest.approx(0.1)


@pytest.mark.parametrize("parity", ["none", "even", "odd"])
def test_a_port_opens_over_and_over(build, route, parity):
    settings = LinkSettings(parity=parity, baud_rate=19200)
    bench = build(route, ManualClock(), settings=settings)
    bench.pump.status()
    bench.pump_link.close()
    for _ in range(4):
        link = open_link(bench.pump_port.url, settings, clock=bench.clock, device="pump")
        assert ScpiPump(link, bench.clock).status().fault is None
        link.close()


def test_a_run_begins_after_the_watchdog_of_the_run_before_halted_the_pump(bench):
    bench.pump.dose_and_fall_silent(1, 1.0, 7.0)
    status = bench.pump.status()
    plan = SimpleNamespace(
        pump=SimpleNamespace(
            identity=bench.pump.identify().key,
            start_count=status.start_count,
            last_dose_number=status.last_dose_number,
        ),
        probe=SimpleNamespace(identity=bench.probe.identify().key),
    )
    devices = SimpleNamespace(pump=bench.pump, probe=bench.probe)
    assert check_devices(plan, devices)[1] == status.delivered_ml
    bench.mechanism.fault = lambda at_s: "the plunger is stuck"
    with pytest.raises(DeviceError, match="not ready: the plunger is stuck"):
        check_devices(plan, devices)


def test_the_pump_of_the_dialect_forgets_its_halt_when_told_to_halt(plain_mechanism):
    pump = OrchardLanePump(plain_mechanism, serial="1")
    for line in ("NEXT 20000", "GUARD 2.0", "PUSH"):
        pump.feed(sealed(line), 0.0)
    assert b"FAULT nobody spoke" in pump.feed(sealed("STATE"), 10.0)
    pump.feed(sealed("HALT"), 11.0)
    assert b"RESTING LEFT 0 FAULT none" in pump.feed(sealed("STATE"), 12.0)


def sealed(line: str) -> bytes:
    """A line as the pump's (invented) manual has it: address, exclusive or of all letters before the mark."""
    body = f"P2 {line}"
    return f"{body}*{reduce(xor, body.encode()):02X}\r\n".encode()
