"""A walk through a bench: port, identity, grammar, readings, a dry dose, totals, stop, watchdog; a verdict for each.

A step that fails does not end the walk; what rests on it is passed over, and says so. Whatever moves is asked for first
and ends in the waste.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Generator, Iterator
from dataclasses import dataclass
from statistics import median

from configs.benchfile import BenchSettings
from controller.benchwork.bench_finding import Finding, Verdict, passed_over, step, wrong
from controller.benchwork.bench_motion import STEPS, MotionCheck
from controller.benchwork.connection import check_capabilities, dialect_of
from controller.benchwork.reached import ReachedBench
from controller.running.stopping import StopSwitch
from drivers.clock import Clock, real_seconds_scale
from drivers.portfailure import owner_of
from drivers.probe import Probe, ProbeReading
from drivers.pump import Pump, PumpStatus

QUESTIONS = 10
READINGS = 10
#: a reply slower than this says that the line is poor, s
SLOW_REPLY_S = 0.2
LARGEST_MV = 500.0


@dataclass(slots=True)
class Passed:
    """What was opened and asked on the way; None: it could not be."""

    pump: Pump | None = None
    probe: Probe | None = None
    pump_identity: str | None = None
    probe_identity: str | None = None
    status: PumpStatus | None = None


class BenchCheck:
    """The walk. `locked` takes a device's lock by its identity, and raises where a run uses it."""

    def __init__(
        self, bench: BenchSettings, reached: ReachedBench, stop: StopSwitch, locked: Callable[[str], None]
    ) -> None:
        self._bench, self._reached, self._stop, self._locked = bench, reached, stop, locked
        self._clock: Clock = reached.clock
        self.operator, self.stop = reached.operator, stop
        self.passed = Passed()

    def utc_s(self) -> float:
        """Return POSIX time by the bench's clock."""
        return self._clock.utc_s()

    def walk(self, *, moving: bool = True) -> Iterator[Finding]:
        """Yield the findings one by one, as they are made.

        Args:
            moving: also what moves liquid.
        """
        yield from self.pump()
        yield from self.probe()
        yield from self.readings()
        if moving:
            yield from self.walk_motion()

    def walk_motion(self) -> Iterator[Finding]:
        """Yield the findings of what moves liquid."""
        if self.passed.pump is None or self.passed.status is None:
            yield from passed_over(STEPS, "the pump is not ready")
            return
        motion = MotionCheck(self._bench, self._reached, self._stop, self.passed.pump)
        yield from motion.walk(self.passed.status)

    # what is asked

    def pump(self) -> Iterator[Finding]:
        """Port, identity, grammar and account of the pump."""
        settings, reached, passed = self._bench.pump, self._reached, self.passed
        pump = yield from step(
            "pump: port",
            lambda: reached.connecting.pump(settings, url=reached.urls[0], traffic=reached.traffic["pump"]),
            lambda opened: f"{reached.urls[0]} is open",
        )
        if pump is None:
            yield from passed_over(("pump: identity", "pump: grammar", "pump: account"), "its port is not open")
            return
        yield from _shared("pump", reached.urls[0])
        passed.pump_identity = yield from self._identified("pump", pump.identify)
        if passed.pump_identity is None:
            yield from passed_over(("pump: grammar", "pump: account"), "it does not say who it is")
            return
        spoken = yield from step(
            "pump: grammar", lambda: self._asked(pump.status), lambda slowest_s: self._quick("status", slowest_s)
        )
        if spoken is not None:
            yield from self._slow("pump", spoken)
            yield from self._weak_points()
        passed.status = yield from step("pump: account", lambda: self._account(pump), self._account_text)
        if passed.status is not None and passed.status.fault:
            passed.status = yield from self._acknowledged(pump, passed.status.fault)
        passed.pump = pump

    def probe(self) -> Iterator[Finding]:
        """Port, identity and grammar of the probe."""
        settings, reached, passed = self._bench.probe, self._reached, self.passed
        probe = yield from step(
            "probe: port",
            lambda: reached.connecting.probe(
                settings, temperature_c=reached.temperature_c, url=reached.urls[1], traffic=reached.traffic["probe"]
            ),
            lambda opened: f"{reached.urls[1]} is open",
        )
        if probe is None:
            yield from passed_over(("probe: identity", "probe: grammar"), "its port is not open")
            return
        yield from _shared("probe", reached.urls[1])
        passed.probe_identity = yield from self._identified("probe", probe.identify)
        if passed.probe_identity is None:
            yield from passed_over(("probe: grammar",), "it does not say who it is")
            return
        spoken = yield from step(
            "probe: grammar", lambda: self._asked(probe.identify), lambda slowest_s: self._quick("identity", slowest_s)
        )
        if spoken is not None:
            yield from self._slow("probe", spoken)
            passed.probe = probe

    def readings(self) -> Iterator[Finding]:
        """Readings: do they come, differ and make sense."""
        probe = self.passed.probe
        if probe is None:
            yield from passed_over(("probe: readings",), "the probe does not answer")
            return
        seen = yield from step("probe: readings", lambda: self._read(probe), _readings_text)
        if seen is not None:
            yield from self._doubtful(seen)

    # tools

    def _identified(self, role: str, identify: Callable[[], object]) -> Generator[Finding, None, str | None]:
        def ask() -> str:
            key = str(getattr(identify(), "key", ""))
            self._locked(key)
            return key

        return (yield from step(f"{role}: identity", ask, lambda key: key))

    def _asked(self, question: Callable[[], object]) -> float:
        """Ask over and over; return the slowest reply, s of real time."""
        slowest_s = 0.0
        for _ in range(QUESTIONS):
            begun_s = self._clock.now_s()
            question()
            slowest_s = max(slowest_s, self._clock.now_s() - begun_s)
        return slowest_s / real_seconds_scale(self._clock)

    @staticmethod
    def _quick(what: str, slowest_s: float) -> str:
        return f"{what} asked {QUESTIONS} times, the slowest answer after {1000.0 * slowest_s:.0f} ms"

    @staticmethod
    def _slow(role: str, slowest_s: float) -> Iterator[Finding]:
        if slowest_s > SLOW_REPLY_S:
            yield Finding(
                step=f"{role}: grammar",
                verdict="warning",
                what=f"answers slowly ({1000.0 * slowest_s:.0f} ms)",
                remedy="Replies may be lost and asked again: check baud rate, cable and its screen",
            )

    def _weak_points(self) -> Iterator[Finding]:
        """What a dialect leaves open."""
        dialect = dialect_of(self._bench.pump, "pump", self._reached.connecting.place)
        if dialect is None or dialect.pump is None:
            return
        if (why := dialect.unfit_unattended()) is not None:
            yield Finding(
                step="pump: grammar",
                verdict="failed",
                what=f"not for unattended runs: {why}",
                remedy="Add delivered or position to the dialect, if the device has it",
            )
        if dialect.pump.read_target is None and not dialect.line.echo and dialect.line.checksum == "none":
            yield Finding(
                step="pump: grammar",
                verdict="warning",
                what="a volume garbled on the line would be seen only while it is delivered",
                remedy="Add target and read_target, echo or checksum to the dialect, if the device has them",
            )

    @staticmethod
    def _acknowledged(pump: Pump, fault: str) -> Generator[Finding, None, PumpStatus | None]:
        """Tell the pump to stop, which acknowledges a halt of before (its watchdog's, say); a defect stays."""
        again = yield from step("pump: stop", lambda: (pump.stop(), pump.status())[1], lambda _: "told to stop")
        if again is None or again.fault:
            what = fault if again is None else again.fault
            yield Finding(step="pump: account", verdict="failed", what=str(what), remedy="See to the pump")
            return None
        yield Finding(
            step="pump: account",
            verdict="warning",
            what=f"said {fault!r}, and stands now; something halted it since it was last used",
            remedy="If no program was ended while it moved, find out what",
        )
        return again

    def _account(self, pump: Pump) -> PumpStatus:
        check_capabilities(self._bench.pump, pump)
        status = pump.status()
        if status.moving:
            raise wrong("it is moving", "Stop it, and find out who moves it")
        return status

    @staticmethod
    def _account_text(status: PumpStatus) -> str:
        reservoir = "" if status.reservoir_ml is None else f", reservoir {status.reservoir_ml:g} mL"
        return (
            f"stands, the syringe holds {status.contents_ml:.3f} mL{reservoir}; start {status.start_count}, last dose "
            f"{status.last_dose_number}"
        )

    def _read(self, probe: Probe) -> list[ProbeReading]:
        seen: list[ProbeReading] = []
        for _ in range(READINGS):
            reading = probe.read()
            if seen and reading.sequence <= seen[-1].sequence:
                raise wrong(
                    f"reading {reading.sequence} comes after {seen[-1].sequence}",
                    "Check the meter: it does not count on",
                )
            seen.append(reading)
            self._clock.wait(self._bench.probe.reading_interval_s, self._stop.event)
        return seen

    def _doubtful(self, seen: list[ProbeReading]) -> Iterator[Finding]:
        vessel, settings = self._bench.vessel, self._bench.probe
        bad = {reading.status for reading in seen} - {"ok"}
        if bad:
            yield self._warning(f"status {', '.join(sorted(bad))}", "Look at probe, plug and membrane", "failed")
        values = [reading.potential_mv for reading in seen]
        if max(values) == min(values):
            yield self._warning(
                f"{len(values)} readings are the same to the last digit",
                "That may be its resolution, or a stuck meter: touch the liquid and look again",
            )
        elif max(values) - min(values) > LARGEST_MV / 10.0:
            yield self._warning(
                f"readings differ by {max(values) - min(values):.0f} mV", "Immerse the probe; check plug and membrane"
            )
        if any(abs(value) > LARGEST_MV for value in values):
            yield self._warning(
                f"{max(values, key=abs):.0f} mV is more than a glass electrode gives",
                "Check that the probe is plugged in, and the scale in the dialect",
            )
        temperatures = [reading.temperature_c for reading in seen if reading.temperature_c is not None]
        if not temperatures and settings.typed_temperature_c is None:
            yield self._warning("there is no temperature", "Connect its sensor, or set typed_temperature_c")
        elif temperatures and not (vessel.lowest_temperature_c <= median(temperatures) <= vessel.highest_temperature_c):
            yield self._warning(
                f"{median(temperatures):.1f} degrees C is outside {vessel.lowest_temperature_c:g} to "
                f"{vessel.highest_temperature_c:g}: a run would stop",
                "Check the sensor, or widen the window in the bench file",
            )

    @staticmethod
    def _warning(what: str, remedy: str, verdict: Verdict = "warning") -> Finding:
        return Finding(step="probe: readings", verdict=verdict, what=what, remedy=remedy)


def _shared(role: str, url: str) -> Iterator[Finding]:
    """Some programs hold a port without locking it; a served pseudo-terminal is held by who serves it."""
    owner = None if "://" in url or url.startswith("/dev/pts/") else owner_of(url)
    if owner is not None:
        yield Finding(
            step=f"{role}: port",
            verdict="warning",
            what=f"{owner[1]} (process {owner[0]}) holds it open as well",
            remedy="Close it there: two readers of one line each get half of what comes",
        )


def _readings_text(seen: list[ProbeReading]) -> str:
    values = [reading.potential_mv for reading in seen]
    temperatures = [reading.temperature_c for reading in seen if reading.temperature_c is not None]
    steps = [abs(b - a) for a, b in itertools.pairwise(values)]
    noise_mv = 1.4826 * median(steps) / 2.0**0.5
    at = f" at {median(temperatures):.1f} degrees C" if temperatures else ""
    return f"{len(seen)} readings, {median(values):.2f} mV{at}, noise {noise_mv:.2f} mV"
