"""A device that drops out is found again by whatever name its port has then; a command that moves opens no port."""

from __future__ import annotations

import pytest

from drivers.errors import DeviceGoneError
from drivers.identity import Identity
from simulators.devices import ProbeDevice, PumpDevice


def replug(bench, role):
    """Unplug now and bring the device back under another name."""
    ports = bench.ports
    name = next(key for key, held in ports.ports.items() if held is getattr(bench, f"{role}_port"))
    device = getattr(bench, f"{role}_device")
    getattr(bench, f"{role}_link")._find = lambda: ports.where(device)
    getattr(bench, f"{role}_port").unplug()
    return lambda: ports.plug_in(name, other_name=f"{name} again")


def test_a_probe_is_read_again_under_another_name(bench):
    bench.probe.identify()
    before = bench.probe.read()
    back = replug(bench, "probe")
    with pytest.raises(DeviceGoneError, match="Check the cable"):
        bench.probe.read()
    with pytest.raises(DeviceGoneError, match=r"is not there.*Connect it again"):
        bench.probe.read()
    back()
    assert bench.probe.read().sequence == before.sequence + 1
    assert bench.probe_link.openings == 2


def test_a_pump_tells_after_a_drop_out_what_became_of_its_dose(bench):
    bench.pump.identify()
    bench.pump.dose(1, 0.05)
    held = []
    bench.manual.call_at(bench.clock.now_s() + 1.0, lambda: held.append(replug(bench, "pump")))
    with pytest.raises(DeviceGoneError) as caught:
        bench.pump.dose(2, 1.0)  # 12 s at 5 mL/min
    assert caught.value.lowest_ml < caught.value.highest_ml
    bench.clock.wait(3.0)
    held[0]()
    last = bench.pump.last_dose()
    assert (last.number, last.state) == (2, "moving")  # it is back before its watchdog's time
    bench.clock.wait(20.0)
    # nobody asked meanwhile, so the watchdog halted it 5 s after the last question; all of it is known
    last = bench.pump.last_dose()
    assert (last.number, last.state) == (2, "stopped")
    assert bench.pushed() == 100 + last.steps


def test_the_watchdog_is_set_again_after_a_power_cut(bench):
    bench.pump.identify()
    bench.pump.status()
    back = replug(bench, "pump")
    bench.pump_device._power_up_watchdog_s = 60.0  # another firmware's own
    bench.pump_device.restart(bench.clock.now_s())
    back()
    with pytest.raises(DeviceGoneError):
        bench.pump.status()
    assert bench.pump.status().start_count == 2
    assert bench.pump.dose(1, 0.05).steps == 100
    assert bench.pump_device._watchdog_s == 5.0


def test_a_command_that_moves_opens_no_port(bench):
    bench.pump.identify()
    bench.pump.status()
    assert bench.pump.step_ml == 0.0005
    back = replug(bench, "pump")
    back()
    with pytest.raises(DeviceGoneError, match="Check the cable") as first:
        bench.pump.dose(1, 0.05)
    with pytest.raises(DeviceGoneError, match="the port was lost") as second:
        bench.pump.dose(1, 0.05)
    for caught in (first, second):
        assert (caught.value.lowest_ml, caught.value.highest_ml) == (0.0, 0.0)
    assert bench.pushed() == 0
    bench.pump.status()  # a question does
    assert bench.pump.dose(1, 0.05).steps == 100


@pytest.mark.parametrize("role", ["pump", "probe"])
def test_another_device_at_the_port_is_refused(bench, route, role):
    driver, link = getattr(bench, role), getattr(bench, f"{role}_link")
    driver.identify()
    getattr(bench, f"{role}_port").unplug()
    stranger = Identity(maker="Another", model="Device", serial="1", firmware="1")
    end = PumpDevice(bench.mechanism, stranger) if role == "pump" else ProbeDevice(bench.probe_device.sensor, stranger)
    there = bench.ports.add(f"stranger {link.url}", end, route)
    link._find = lambda: there.url
    with pytest.raises(DeviceGoneError, match="Check the cable"):
        driver.identify()
    for _ in range(2):  # however often it is asked
        with pytest.raises(DeviceGoneError, match="another device answers: Another Device 1"):
            bench.pump.status() if role == "pump" else bench.probe.read()


def test_a_link_that_was_closed_stays_closed(bench):
    bench.probe.read()
    bench.probe_link.close()
    with pytest.raises(DeviceGoneError, match="the port is not open"):
        bench.probe.read()
