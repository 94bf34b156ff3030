"""The composition root: a bench file becomes devices, clock and operator. Only here do virtual devices come in.

A driver cannot know what is at the other end of its line; real and simulated benches differ in what is opened here and
in nothing else.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterator, Mapping
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TextIO

from configs.benchfile import SIMULATED_PORT, BenchSettings
from configs.errors import HalfdropError
from configs.faultfile import FaultsSettings
from configs.method import MethodSettings
from configs.notifying import NotifySettings
from controller.benchwork.connection import Connecting, check_capabilities
from controller.benchwork.pace import FAST, clock_of
from controller.benchwork.reached import ReachedBench
from controller.benchwork.serving import Route
from controller.benchwork.virtualdevices import MAKER, simulated_world, spoken_devices
from controller.planning.runplan import PumpAccount
from controller.running.devices import Devices
from controller.running.stopping import StopSwitch
from controller.running.trafficlog import traffic_of
from controller.titration.plan import Sample
from drivers.clock import Clock, SystemClock
from drivers.operator import AnswersOperator, ConsoleOperator, Operator
from drivers.transport import TrafficLog
from simulators.bench import VirtualBench
from simulators.chemist import VirtualChemist
from simulators.device_end import Device
from simulators.faults import FaultScript
from simulators.port import VirtualPorts

#: what says where pump and probe are after a drop-out; None: looked for by the name in the bench file
Finders = tuple[Callable[[], str] | None, Callable[[], str] | None]


@dataclass(frozen=True, slots=True, kw_only=True)
class OpenBench:
    """A bench with its ports open.

    `world` is the truth behind simulated ports, None on a real bench; `traffic` holds the last messages of each line.
    """

    clock: Clock
    devices: Devices
    account: PumpAccount
    probe_identity: str
    stop: StopSwitch
    traffic: Mapping[str, TrafficLog]
    world: VirtualBench | None = None
    seed: int | None = None
    pump_device: Device | None = None
    faults: FaultScript | None = None
    notify: NotifySettings | None = None
    reservoir_told: bool = True


@dataclass(frozen=True, slots=True, kw_only=True)
class Opening:
    """How a bench is opened.

    Args:
        seed: of a simulated bench; None: that of its file.
        time_scale: simulated bench only: "fast" (or None), or how many times real time.
        route: simulated bench only: what carries the bytes; None: as its file says.
        answers: answers to questions by key; None: a person is asked at the terminal.
        answers_from: where the answers stand, for messages.
        place: the lab folder; simulated devices of different labs are different devices.
        talk: where questions and messages of an operator without a terminal go.
        start_utc_s: POSIX time at which manual time begins; None: now.
        faults: simulated bench only: what goes wrong; None: what its file says.
        unattended: nobody is there; see controller/benchwork/connection.py.
        traffic_log: keep everything that goes over the lines in logs/ of the lab folder.
    """

    seed: int | None = None
    time_scale: str | None = None
    route: Route | None = None
    answers: Mapping[str, str] | None = None
    answers_from: str = "answers"
    place: Path | None = None
    talk: TextIO | None = None
    start_utc_s: float | None = None
    faults: FaultsSettings | None = None
    unattended: bool = False
    traffic_log: bool = False


def is_simulated(bench: BenchSettings) -> bool:
    """Tell whether the bench's devices are simulated.

    Raises:
        HalfdropError: one of them is and the other is not.
    """
    simulated = [port.port == SIMULATED_PORT for port in (bench.pump, bench.probe)]
    if simulated[0] != simulated[1]:
        raise HalfdropError(
            "one of pump.port and probe.port is simulated, the other is not",
            where=f"bench {bench.name}",
            remedy="Set both to simulated, or both to real ports",
        )
    return simulated[0]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Served:
    """The devices of a simulated bench behind their ports."""

    urls: tuple[str, str]
    clock: Clock
    world: VirtualBench
    seed: int
    pump_device: Device
    faults: FaultScript | None
    find: Finders


@contextmanager
def reach_bench(
    bench: BenchSettings, method: MethodSettings, sample: Sample, *, opening: Opening, stop: StopSwitch
) -> Iterator[ReachedBench]:
    """Serve the ports of a simulated bench, open nothing, and close afterwards whatever was opened.

    Raises:
        HalfdropError: settings that do not fit together.
    """
    with ExitStack() as held:
        yield _Opener(bench=bench, opening=opening, stop=stop, held=held, temperature_c=method.temperature_c).reached(
            method, sample
        )


@contextmanager
def open_bench(
    bench: BenchSettings, method: MethodSettings, sample: Sample, *, opening: Opening, stop: StopSwitch
) -> Iterator[OpenBench]:
    """Open the ports of a bench, ask the devices who they are, and close everything afterwards; nothing moves.

    Raises:
        DeviceError: a port cannot be opened, or a device does not answer.
        HalfdropError: settings that do not fit together.
    """
    with ExitStack() as held:
        opener = _Opener(bench=bench, opening=opening, stop=stop, held=held, temperature_c=method.temperature_c)
        opened = opener.simulated(method, sample) if is_simulated(bench) else opener.real()
        yield replace(opened, notify=bench.notify)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Opener:
    """Opens one bench; what it opened is closed by `held`."""

    bench: BenchSettings
    opening: Opening
    stop: StopSwitch
    held: ExitStack
    temperature_c: float

    def simulated(self, method: MethodSettings, sample: Sample) -> OpenBench:
        served = self.served(method, sample)
        chemist = VirtualChemist(
            served.world, served.clock.now_s, questions=method.questions, answers=self.opening.answers
        )
        opened = self._connected(served.urls, served.clock, chemist, served.find)
        return replace(
            opened, world=served.world, seed=served.seed, pump_device=served.pump_device, faults=served.faults
        )

    def served(self, method: MethodSettings, sample: Sample) -> _Served:
        simulation, opening = self.bench.simulation, self.opening
        assert simulation is not None  # the bench file was checked
        clock = clock_of(opening.time_scale, start_utc_s=opening.start_utc_s)
        seed = simulation.seed if opening.seed is None else opening.seed
        world = simulated_world(self.bench, simulation, method, sample, seed=seed, start_s=clock.now_s())
        settings = opening.faults or simulation.faults
        faults = None if settings is None else FaultScript(settings, world, clock)
        pump_device, probe_device = spoken_devices(self.bench, world, place=opening.place, faults=faults)
        ports = self.held.enter_context(VirtualPorts(clock))
        route = opening.route or simulation.link
        name = f"{os.getpid()}-{id(ports):x}"  # ports in memory share one process
        pump_url = ports.add(f"pump-{name}", pump_device, route).url
        probe_url = ports.add(f"probe-{name}", probe_device, route).url
        if faults is not None:
            for role in ("pump", "probe"):
                faults.attach(ports, role, f"{role}-{name}")
        return _Served(
            urls=(pump_url, probe_url),
            clock=clock,
            world=world,
            seed=seed,
            pump_device=pump_device,
            faults=faults,
            find=(lambda: ports.where(pump_device), lambda: ports.where(probe_device)),
        )

    def reached(self, method: MethodSettings, sample: Sample) -> ReachedBench:
        opening, bench = self.opening, self.bench
        clock: Clock
        if is_simulated(bench):
            served = self.served(method, sample)
            urls, clock = served.urls, served.clock
            usual = {"tip-over-waste": "yes", "probe-stored": "yes", "refill-by-hand": "stop"}
            answers = usual | dict(opening.answers or {})
            operator: Operator = AnswersOperator(answers, where=opening.answers_from, sink=opening.talk or sys.stderr)
        else:
            urls = (bench.pump.port, bench.probe.port)
            clock = SystemClock() if opening.time_scale is None else clock_of(opening.time_scale)
            operator = self._operator()
        return ReachedBench(
            clock=clock,
            operator=operator,
            urls=urls,
            traffic=self._traffic,
            temperature_c=self.temperature_c,
            connecting=self._connecting(clock),
        )

    def real(self) -> OpenBench:
        opening, bench = self.opening, self.bench
        for option, given in (("--seed", opening.seed), ("--faults", opening.faults)):
            if given is not None:
                raise self._not_simulated(option)
        operator = self._operator()
        if opening.time_scale is None:
            return self._connected((bench.pump.port, bench.probe.port), SystemClock(), operator)
        if opening.time_scale == FAST:
            raise self._not_simulated(f"--time-scale {FAST}")
        opened = self._connected((bench.pump.port, bench.probe.port), clock_of(opening.time_scale), operator)
        if not all(told.startswith(MAKER) for told in (opened.account.identity, opened.probe_identity)):
            raise self._not_simulated("--time-scale")  # only a served simulated bench lives at another pace
        return opened

    @property
    def _traffic(self) -> dict[str, TrafficLog]:
        opening = self.opening
        wanted = opening.traffic_log or self.bench.traffic_log
        return traffic_of(opening.place if wanted else None, self.held)

    def _operator(self) -> Operator:
        opening = self.opening
        if opening.answers is None:
            return ConsoleOperator()
        return AnswersOperator(opening.answers, where=opening.answers_from, sink=opening.talk or sys.stderr)

    def _connecting(self, clock: Clock) -> Connecting:
        return Connecting(
            clock=clock,
            stop=self.stop.event,
            held=self.held,
            place=self.opening.place,
            unattended=self.opening.unattended,
        )

    def _not_simulated(self, option: str) -> HalfdropError:
        return HalfdropError(
            f"{option} is for simulated benches, this one is real",
            where=f"bench {self.bench.name}",
            remedy=f"Leave {option} out",
        )

    def _connected(
        self, urls: tuple[str, str], clock: Clock, operator: Operator, find: Finders = (None, None)
    ) -> OpenBench:
        bench = self.bench
        traffic = self._traffic
        connecting = self._connecting(clock)
        pump = connecting.pump(bench.pump, url=urls[0], traffic=traffic["pump"], find=find[0])
        probe = connecting.probe(
            bench.probe, temperature_c=self.temperature_c, url=urls[1], traffic=traffic["probe"], find=find[1]
        )
        pump_identity, probe_identity, status = pump.identify(), probe.identify(), pump.status()
        check_capabilities(bench.pump, pump)
        return OpenBench(
            clock=clock,
            devices=Devices(pump=pump, probe=probe, operator=operator),
            account=PumpAccount(
                identity=pump_identity.key,
                start_count=status.start_count,
                last_dose_number=status.last_dose_number,
                contents_ml=status.contents_ml,
                reservoir_ml=bench.pump.reservoir_ml if status.reservoir_ml is None else status.reservoir_ml,
            ),
            reservoir_told=status.reservoir_ml is not None,
            probe_identity=probe_identity.key,
            stop=self.stop,
            traffic=traffic,
        )
