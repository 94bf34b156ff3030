"""A bench small enough to see through, on every route, for tests of the wire."""

from __future__ import annotations

import itertools
import math
import threading
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from types import SimpleNamespace
from typing import Any

import pytest

from drivers.clock import Clock, ManualClock
from drivers.identity import Identity
from drivers.link import Link, LinkSettings, TrafficLog, open_link
from drivers.scpi_probe import ScpiProbe
from drivers.scpi_pump import ScpiPump
from simulators.device_end import VirtualPort
from simulators.devices import ProbeDevice, PumpDevice
from simulators.port import VirtualPorts

_NAMES = itertools.count()
PUMP_IDENTITY = Identity(maker="Cidery Workshop", model="Syringe Burette", serial="B-7", firmware="1.0")
PROBE_IDENTITY = Identity(maker="Cidery Workshop", model="Glass Probe", serial="P-3", firmware="1.0")


class PlainMechanism:
    """A faultless syringe: 10 mL in steps of 0.5 uL; fills in 10 s."""

    def __init__(self) -> None:
        self.step_ml, self.capacity_steps = 0.0005, 20_000
        self.held, self.pushed, self.reservoir = 20_000, 0, 100.0
        self._kind, self._steps, self._begin_s, self._end_s = "none", 0, 0.0, -math.inf

    def _start(self, kind: str, steps: int, seconds: float, at_s: float) -> None:
        self._book(at_s)
        self._kind, self._steps, self._begin_s, self._end_s = kind, steps, at_s, at_s + seconds

    def begin(self, steps: int, rate_ml_min: float, at_s: float) -> None:
        self._start("push", steps, steps * self.step_ml * 60.0 / rate_ml_min, at_s)

    def begin_prime(self, steps: int, rate_ml_min: float, at_s: float) -> None:
        self.begin(steps, rate_ml_min, at_s)

    def begin_fill(self, at_s: float) -> None:
        self._start("fill", self.capacity_steps - self.contents_steps(at_s), 10.0, at_s)

    def _done(self, at_s: float) -> int:
        if at_s >= self._end_s:
            return self._steps
        return int(self._steps * (at_s - self._begin_s) / (self._end_s - self._begin_s) + 1e-9)

    def _book(self, at_s: float) -> None:
        self.held, self.pushed = self.contents_steps(at_s), self.tip_steps_total(at_s)
        self._kind = "none"

    def steps_done(self, at_s: float) -> int:
        return self._done(at_s)

    def moving(self, at_s: float) -> bool:
        return at_s < self._end_s

    def ends_at_s(self) -> float:
        return self._end_s

    def halt(self, at_s: float) -> int:
        self._steps, self._end_s = self._done(at_s), min(at_s, self._end_s)
        return self._steps

    def contents_steps(self, at_s: float) -> int:
        return self.held + {"push": -1, "fill": 1, "none": 0}[self._kind] * self._done(at_s)

    def reservoir_ml(self, at_s: float) -> float:
        return self.reservoir

    def tip_steps_total(self, at_s: float) -> int:
        return self.pushed + (self._done(at_s) if self._kind == "push" else 0)

    def fault(self, at_s: float) -> str | None:
        return None


@dataclass(frozen=True)
class PlainReading:
    potential_mv: float
    temperature_c: float | None
    status: str


class PlainSensor:
    """A potential that tells time and index."""

    def read(self, at_s: float, sample_index: int) -> PlainReading:
        return PlainReading(100.0 + 0.5 * (at_s % 1000.0) + 0.1 * (sample_index % 7), 25.0, "ok")


@dataclass
class WireBench:
    """Pump and probe with everything between, and the traffic of both lines."""

    clock: Clock
    ports: VirtualPorts
    mechanism: PlainMechanism
    pump_device: PumpDevice
    probe_device: ProbeDevice
    pump_port: VirtualPort
    probe_port: VirtualPort
    pump_link: Link
    probe_link: Link
    pump: ScpiPump
    probe: ScpiProbe
    stop: threading.Event
    pump_traffic: TrafficLog = field(default_factory=TrafficLog)
    probe_traffic: TrafficLog = field(default_factory=TrafficLog)

    @property
    def manual(self) -> ManualClock:
        assert isinstance(self.clock, ManualClock)
        return self.clock

    def pushed(self) -> int:
        """Steps that really went through the tip."""
        return self.mechanism.tip_steps_total(self.clock.now_s())

    def close(self) -> None:
        self.pump_link.close()
        self.probe_link.close()
        self.ports.close()


def _build(route: Any, clock: Clock, *, latency_s: float = 0.0, settings: LinkSettings | None = None) -> WireBench:
    mechanism = PlainMechanism()
    pump_device, probe_device = PumpDevice(mechanism, PUMP_IDENTITY), ProbeDevice(PlainSensor(), PROBE_IDENTITY)
    ports, stop = VirtualPorts(clock), threading.Event()
    name = next(_NAMES)
    pump_port = ports.add(f"pump {name}", pump_device, route, latency_s=latency_s)
    probe_port = ports.add(f"probe {name}", probe_device, route, latency_s=latency_s)
    pump_traffic, probe_traffic = TrafficLog(), TrafficLog()
    pump_link = open_link(pump_port.url, settings, clock=clock, device="pump", traffic=pump_traffic)
    probe_link = open_link(probe_port.url, settings, clock=clock, device="probe", traffic=probe_traffic)
    return WireBench(
        clock, ports, mechanism, pump_device, probe_device, pump_port, probe_port, pump_link, probe_link,
        ScpiPump(pump_link, clock, stop), ScpiProbe(probe_link, clock, stop), stop, pump_traffic, probe_traffic,
    )  # fmt: skip


class Fault:
    """Spoils messages of one port: `hit` chooses by request, and `request` or `reply` says what becomes of it.

    Each works on the first `times` messages chosen; the rest pass.
    """

    def __init__(
        self,
        port: VirtualPort,
        hit: Callable[[bytes], bool],
        *,
        request: Callable[[bytes], bytes] | None = None,
        reply: Callable[[bytes], bytes] | None = None,
        times: int = 1,
    ) -> None:
        self.spoilt = 0
        self._hit, self._request, self._reply, self._times = hit, request, reply, times
        self._chosen = False
        port.spoil_request, port.spoil_reply = self._on_request, self._on_reply

    def hit_from(self, clock: ManualClock, at_s: float) -> None:
        """Begin to spoil at a time only."""
        hit, self._hit = self._hit, lambda data: clock.now_s() >= at_s and hit(data)

    def _on_request(self, data: bytes) -> bytes:
        self._chosen = self.spoilt < self._times and self._hit(data)
        if self._chosen and self._request is not None:
            self.spoilt += 1
            return self._request(data)
        return data

    def _on_reply(self, data: bytes) -> bytes:
        if self._chosen and self._reply is not None:
            self.spoilt += 1
            return self._reply(data)
        return data


@pytest.fixture
def plain_mechanism() -> PlainMechanism:
    """A faultless syringe."""
    return PlainMechanism()


@pytest.fixture
def plain_sensor() -> PlainSensor:
    """A sensor that tells time and index."""
    return PlainSensor()


@pytest.fixture
def spoil() -> type[Fault]:
    """The fault to put on a port."""
    return Fault


@pytest.fixture
def build(monkeypatch: pytest.MonkeyPatch) -> Iterator[Callable[..., WireBench]]:
    """Builds benches on a route and clock, and closes them all afterwards."""
    # pyserial sleeps 0.3 s after it closed a socket
    monkeypatch.setattr("serial.urlhandler.protocol_socket.time", SimpleNamespace(sleep=lambda seconds: None))
    built: list[WireBench] = []

    def builder(route: str, clock: Clock | None = None, **kwargs: Any) -> WireBench:
        built.append(_build(route, clock or ManualClock(), **kwargs))
        return built[-1]

    yield builder
    for bench in built:
        bench.close()


@pytest.fixture(params=["memory", "pty", "tcp"])
def route(request: pytest.FixtureRequest) -> str:
    """Every route; a pseudo-terminal only where there are any."""
    if request.param == "pty":
        pytest.importorskip("pty")
    return str(request.param)


@pytest.fixture
def bench(route: str, build: Callable[..., WireBench]) -> WireBench:
    """A bench on each route in turn, in manual time."""
    return build(route)
