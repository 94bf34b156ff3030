"""Scripted faults of a simulated bench: what a fault file says happens, at its moment, on the bench's own clock.

The drivers and the controller cannot tell them from real ones: they change the bytes on the lines, the world behind
the devices, the computer's clock and disk, and nothing else. What becomes of the run is the controller's doing.
"""

from __future__ import annotations

import heapq
import itertools
import math
import os
import signal
from collections.abc import Callable
from typing import TYPE_CHECKING

from configs.errors import HalfdropError
from drivers.clock import Clock, ManualClock
from simulators.bench import VirtualBench
from simulators.devices import PumpDevice
from simulators.faulty_disk import FaultyDisk, Written
from simulators.faulty_line import FaultyLine, Spoiler
from simulators.faulty_world import CRACKED_SHARE, FaultySensor, FaultySyringe
from simulators.noise import KeyedNoise
from simulators.port import VirtualPorts

if TYPE_CHECKING:
    from configs.faultfile import FaultSettings, FaultsSettings

_MESSAGES = ("lost-reply", "lost-message", "garbled-reply", "garbled-message", "late-reply", "earlier-reply")


def kill_process() -> None:
    """End this process as the system would, without a word."""
    os.kill(os.getpid(), getattr(signal, "SIGKILL", signal.SIGTERM))


class FaultScript:
    """The faults of one bench. Make it, put its parts in front of the sound ones, then let the clock run.

    Args:
        settings: what is to happen.
        bench: the sound world.
        clock: the bench's.
        kill: ends the process.

    Attributes:
        sensor, syringe: in front of the bench's own.
        happened: what happened and when, s of the clock.

    Raises:
        HalfdropError: the clock cannot be set as the script wants.
    """

    def __init__(
        self,
        settings: FaultsSettings,
        bench: VirtualBench,
        clock: Clock,
        *,
        kill: Callable[[], None] = kill_process,
    ) -> None:
        self._settings, self._bench, self._clock, self._kill = settings, bench, clock, kill
        self._start_s = clock.now_s()
        self.sensor = FaultySensor(bench, seed=settings.seed)
        self.syringe = FaultySyringe(bench.mechanism, bench.beaker, self._dose_begins)
        self.lines: dict[str, FaultyLine] = {}
        self.happened: list[tuple[float, str]] = []
        self.disks: list[FaultyDisk] = []
        self._pump: PumpDevice | None = None
        self._ports: VirtualPorts | None = None
        self._names: dict[str, str] = {}
        self._disk_state = ""
        self._order = itertools.count()
        self._due: list[tuple[float, int, Callable[[float], None]]] = []
        self._waiting: list[tuple[int, FaultSettings]] = []
        self._check_clock()
        for index, fault in enumerate(settings.faults):
            self._plan(index, fault)

    # --- put in front of the sound parts ---

    def attach(self, ports: VirtualPorts, role: str, name: str) -> None:
        """Come between a device ("pump" or "probe") and the port that serves it under `name`."""
        port = ports.ports[name]
        if isinstance(port.device, PumpDevice):
            self._pump = port.device
        port.device = self.lines[role] = FaultyLine(port.device, self.wake, self.wakes_at_s)
        self._ports, self._names[role] = ports, name
        for index, fault in enumerate(self._settings.faults):
            if fault.chance is not None and fault.device == role:
                self._spoil(index, fault, math.inf)

    def address(self, role: str) -> str:
        """Return where a device is found now."""
        assert self._ports is not None
        return self._ports.ports[self._names[role]].url

    def disk(self, sink: Written) -> FaultyDisk:
        """Return what a record is to be written into."""
        made = FaultyDisk(sink)
        self.disks.append(made)
        self._set_disks()
        return made

    # --- time ---

    def wakes_at_s(self) -> float:
        """When something is to happen next."""
        return self._due[0][0] if self._due else math.inf

    def wake(self, at_s: float) -> None:
        """Let everything happen that is due."""
        while self._due and self._due[0][0] <= at_s:
            due_s, _, act = heapq.heappop(self._due)
            act(due_s)

    def _at(self, at_s: float, act: Callable[[float], None]) -> None:
        heapq.heappush(self._due, (at_s, next(self._order), act))

    def _plan(self, index: int, fault: FaultSettings) -> None:
        if fault.at_s is not None:
            self._at(self._start_s + fault.at_s, lambda at_s: self._happen(index, fault, at_s))
        elif fault.at_dose is not None or fault.at_volume_ml is not None:
            self._waiting.append((index, fault))

    def _dose_begins(self, number: int, from_s: float, to_s: float, from_ml: float, to_ml: float) -> None:
        """Find the faults whose moment lies within this dose."""
        for index, fault in [*self._waiting]:
            if fault.at_dose is not None:
                share = 0.5 if fault.at_dose == number else -1.0
            else:
                at_ml = fault.at_volume_ml or 0.0
                share = (at_ml - from_ml) / (to_ml - from_ml) if from_ml <= at_ml <= to_ml else -1.0
            if share >= 0.0:
                self._waiting.remove((index, fault))
                at_s = from_s + share * (to_s - from_s)
                self._at(at_s, lambda due_s, i=index, f=fault: self._happen(i, f, due_s))  # type: ignore[misc]

    # --- what happens ---

    def _happen(self, index: int, fault: FaultSettings, at_s: float) -> None:
        self.happened.append((at_s, fault.what))
        if fault.what in _MESSAGES:
            self._spoil(index, fault, fault.times or 1)
            return
        until_s = math.inf if fault.for_s is None else at_s + fault.for_s
        for one in (self._to_line, self._to_pump, self._to_probe, self._to_computer):
            if one(fault, at_s, until_s):
                return
        raise ValueError(f"nothing is known of the fault {fault.what!r}")

    def _spoil(self, index: int, fault: FaultSettings, left: float) -> None:
        self.lines[str(fault.device)].spoilers.append(
            Spoiler(
                what=fault.what,
                left=left,
                chance=1.0 if fault.chance is None else fault.chance,
                by_s=fault.by_s or 0.0,
                noise=KeyedNoise(self._settings.seed, f"fault {index}"),
            )
        )

    def _to_line(self, fault: FaultSettings, at_s: float, until_s: float) -> bool:
        device = str(fault.device)
        match fault.what:
            case "silence":
                self.lines[device].silent_until_s = until_s
            case "unplugged":
                assert self._ports is not None
                self._ports.ports[self._names[device]].unplug()
                if until_s < math.inf:
                    self._at(until_s, lambda _: self._plug_in(device, bool(fault.other_port)))
            case _:
                return False
        return True

    def _plug_in(self, role: str, to_another: bool) -> None:
        assert self._ports is not None
        name = self._names[role]
        other_name = f"{name}-again" if to_another else None
        self._ports.plug_in(name, other_name=other_name)
        self._names[role] = other_name or name

    def _to_pump(self, fault: FaultSettings, at_s: float, until_s: float) -> bool:
        syringe, pump = self._bench.mechanism, self._pump
        match fault.what:
            case "pump-restart":
                if pump is not None:
                    pump.restart(at_s)
            case "stalled-plunger":
                syringe.set_fault("the plunger does not move")
                if pump is not None:
                    pump.jam(at_s, "the plunger does not move")
                if until_s < math.inf:
                    self._at(until_s, lambda _: syringe.set_fault(None))
            case "air-in-syringe":
                syringe.trap_bubble(fault.volume_ml or 0.0)
            case "empty-reservoir":
                syringe.change_reservoir(0.0, at_s)
            case "leaking-valve":
                self.syringe.leak(fault.rate_ml_min or 0.0, at_s, until_s)
            case _:
                return False
        return True

    def _to_probe(self, fault: FaultSettings, at_s: float, until_s: float) -> bool:
        sensor, bench = self.sensor, self._bench
        match fault.what:
            case "stuck-reading":
                sensor.stuck_until_s = until_s
            case "open-circuit":
                sensor.open_until_s = until_s
            case "cracked-probe":
                sensor.slope_share = CRACKED_SHARE if fault.factor is None else fault.factor
            case "bubble-at-probe":
                sensor.bubble_mv, sensor.bubble_until_s = fault.by_mv or 0.0, until_s
            case "slow-probe":
                bench.beaker.slow_film(fault.factor or 1.0, at_s)
                if until_s < math.inf:
                    self._at(until_s, lambda due_s: bench.beaker.slow_film(1.0, due_s))
            case "drift":
                sensor.drift(at_s, until_s, fault.by_mv_min or 0.0)
            case "temperature-step":
                sensor.warm(at_s, fault.by_c or 0.0)
            case "stirrer-stopped":
                bench.stir(False, at_s)
                if until_s < math.inf:
                    self._at(until_s, lambda due_s: bench.stir(True, due_s))
            case _:
                return False
        return True

    def _to_computer(self, fault: FaultSettings, at_s: float, until_s: float) -> bool:
        clock = self._clock
        match fault.what:
            case "disk-full" | "read-only-disk":
                self._disk_state = fault.what
                self._set_disks()
            case "clock-jump" if isinstance(clock, ManualClock):
                clock.shift_utc(fault.by_s or 0.0)
            case "computer-asleep" if isinstance(clock, ManualClock):
                self._sleep(clock, fault.for_s or 0.0)
            case "process-killed":
                self._kill()
            case _:
                return False
        return True

    def _sleep(self, clock: ManualClock, seconds: float) -> None:
        """The computer does nothing while the world goes on; it finds that out by UTC."""
        clock.call_at(clock.now_s(), lambda: clock.sleep_through(seconds))

    def _set_disks(self) -> None:
        for disk in self.disks:
            disk.full = disk.full or self._disk_state == "disk-full"
            disk.read_only = self._disk_state == "read-only-disk"

    def _check_clock(self) -> None:
        wanted = [one.what for one in self._settings.faults if one.what in ("clock-jump", "computer-asleep")]
        if wanted and not isinstance(self._clock, ManualClock):
            raise HalfdropError(
                f"{wanted[0]} needs a clock that can be set",
                where="faults",
                remedy="Leave --time-scale out, or that fault",
            )
