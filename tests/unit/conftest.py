"""A small run plan and devices of plain Python, for the tests of runner, guard and record."""

from __future__ import annotations

import threading
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import pytest

from controller.titration.plan import (
    PLAN_SCHEMA_VERSION,
    Chemistry,
    Dosing,
    EndPoints,
    Limits,
    Probe,
    ProbeCalibration,
    ProbeResponse,
    Pump,
    Question,
    ReportAs,
    RunPlan,
    Sample,
    Settling,
    Titrant,
    Vessel,
    WeakAcid,
)
from drivers.clock import ManualClock
from drivers.errors import StoppedError
from drivers.identity import Identity
from drivers.probe import ProbeReading
from drivers.pump import Delivered, LastDose, PumpStatus

PUMP_IDENTITY = Identity(maker="Orchard", model="Burette", serial="0001", firmware="1")
PROBE_IDENTITY = Identity(maker="Orchard", model="Meter", serial="0002", firmware="1")
STEP_ML = 0.0005


def _plan() -> RunPlan:
    return RunPlan(
        schema_version=PLAN_SCHEMA_VERSION,
        program_version="0.1.0",
        kind="equivalence",
        method_name="juice-acidity",
        method_title="Titratable acidity of pressed juice",
        sample=Sample(sample_id="press-3", initial_volume_ml=50.0, volume_ml=10.0),
        titrant=Titrant(
            name="sodium hydroxide", concentration_mol_l=0.1, standard_uncertainty_mol_l=0.0002, acid=False
        ),
        chemistry=Chemistry(
            temperature_c=25.0,
            pkw=13.995,
            debye_huckel_a=0.509,
            analyte=WeakAcid(name="malic acid", pka=(3.4, 5.1), charge=0),
            expected_equivalence_volume_ml=5.0,
        ),
        probe=Probe(
            identity=PROBE_IDENTITY.key,
            signal="ph",
            calibration=ProbeCalibration(
                slope_fraction=0.99,
                isopotential_ph=7.0,
                isopotential_mv=2.0,
                slope_fraction_standard_uncertainty=0.003,
                offset_standard_uncertainty_mv=1.0,
            ),
            response=ProbeResponse(bulk_s=1.0, film_s=2.0, slow_s=30.0, slow_share=0.01, dead_time_s=0.3),
            resolution_mv=0.1,
            reading_interval_s=0.5,
        ),
        pump=Pump(
            identity=PUMP_IDENTITY.key,
            start_count=1,
            last_dose_number=0,
            step_ml=STEP_ML,
            rate_ml_min=5.0,
            syringe_ml=10.0,
            contents_ml=10.0,
            reservoir_ml=100.0,
            refill="valve",
            position_sd_ml=0.0009,
            position_correlation_ml=0.05,
            dose_sd_ml=0.00045,
            gain_standard_uncertainty=0.001,
        ),
        dosing=Dosing(
            policy="slope-adaptive",
            smallest_ml=0.005,
            largest_ml=0.5,
            largest_past_equivalence_ml=0.1,
            model_step_mv=20.0,
            slope_step_mv=8.0,
            growth_limit=2.0,
            equal_volume_ml=0.1,
            first_dose_ml=0.1,
        ),
        settling=Settling(
            rule="stability-limit",
            shortest_s=4.0,
            longest_s=60.0,
            stability_limit_mv_min=3.0,
            stability_readings=10,
            fixed_wait_s=10.0,
        ),
        end_points=EndPoints(expected=1, smallest_rise_mv=60.0, stop_at_last=True),
        limits=Limits(titrant_ml=12.0, run_time_s=3600.0, overrun_ml=1.0),
        vessel=Vessel(
            capacity_ml=100.0,
            displaced_ml=10.0,
            margin_ml=10.0,
            tray_ml=500.0,
            waste_ml=20.0,
            largest_dose_ml=1.0,
            highest_rate_ml_min=10.0,
            longest_run_s=7200.0,
            lowest_temperature_c=10.0,
            highest_temperature_c=40.0,
        ),
        questions=(Question(key="goggles", text="Goggles on?", choices=("yes", "no"), must_be="yes"),),
        report_as=ReportAs(
            quantity="analyte",
            substance="malic acid",
            molar_mass_g_mol=134.087,
            molar_mass_standard_uncertainty_g_mol=0.002,
            end_point=1,
            equivalents=2,
            unit="g/L",
        ),
        seed=7,
    )


@pytest.fixture
def plan() -> RunPlan:
    return _plan()


@pytest.fixture(scope="session")
def make_plan() -> Callable[..., RunPlan]:
    """Build the small plan with sections changed: make_plan(vessel={"capacity_ml": 60.0}, seed=3)."""

    def build(**changes: Any) -> RunPlan:
        made = _plan()
        for name, change in changes.items():
            value = replace(getattr(made, name), **change) if isinstance(change, dict) else change
            made = replace(made, **{name: value})
        return made

    return build


class FakePump:
    """A pump that keeps its word; `trouble` is called at each dose and may raise or change what is delivered."""

    step_ml, syringe_ml, refill = STEP_ML, 10.0, "valve"

    def __init__(self, clock: ManualClock, log: list[str], stop: threading.Event) -> None:
        self._clock, self._log, self._stop = clock, log, stop
        self.start_count, self.last_number, self.steps, self.contents_ml = 1, 0, 0, 10.0
        self.last = (0, 0, "none")
        self.stops = True
        self.trouble: Callable[[FakePump, int, int], int] | None = None
        self.waste_steps = 0

    def identify(self) -> Identity:
        return PUMP_IDENTITY

    def status(self) -> PumpStatus:
        return PumpStatus(
            start_count=self.start_count, last_dose_number=self.last_number, delivered_ml=self.delivered_ml(),
            contents_ml=self.contents_ml, reservoir_ml=100.0, moving=False, fault=None,
        )  # fmt: skip

    def dose(self, number: int, volume_ml: float) -> Delivered:
        self._log.append(f"pump dose {number}")
        steps, begun_s = round(volume_ml / STEP_ML), self._clock.now_s()
        if self.trouble is not None:
            steps = self.trouble(self, number, steps)
        stopped = self._clock.wait(steps * STEP_ML * 12.0, self._stop)
        if stopped:
            steps = round((self._clock.now_s() - begun_s) / 12.0 / STEP_ML)
        self.moved(number, steps, "stopped" if stopped else "done")
        done = Delivered(
            number=number, volume_ml=steps * STEP_ML, steps=steps, started_at_s=begun_s, at_s=self._clock.now_s()
        )
        if stopped:
            raise StoppedError("stopped", where="pump", remedy="Go on", delivered=done, confirmed=self.stops)
        return done

    def moved(self, number: int, steps: int, state: str) -> None:
        self.last_number, self.last = number, (number, steps, state)
        self.steps += steps
        self.contents_ml -= steps * STEP_ML

    def last_dose(self) -> LastDose:
        number, steps, state = self.last
        return LastDose(
            number=number, volume_ml=steps * STEP_ML, steps=steps, state=state, start_count=self.start_count,
            remaining_s=0.0,
        )  # fmt: skip

    def delivered_ml(self) -> float:
        return (self.steps + self.waste_steps) * STEP_ML

    def fill(self) -> PumpStatus:
        self._log.append("pump fill")
        self.contents_ml = 10.0
        return self.status()

    def prime(self, volume_ml: float) -> float:
        self._log.append("pump prime")
        self.waste_steps += round(volume_ml / STEP_ML)
        self.contents_ml -= volume_ml
        return round(volume_ml / STEP_ML) * STEP_ML

    def stop(self) -> bool:
        self._log.append("pump stop")
        return self.stops


class FakeProbe:
    """A probe whose potential falls by 1 mV a reading; `trouble` may raise."""

    def __init__(self, clock: ManualClock, log: list[str]) -> None:
        self._clock, self._log = clock, log
        self.count, self.temperature_c = 0, 25.0
        self.trouble: Callable[[], None] | None = None
        self.potential_mv: float | None = None

    def identify(self) -> Identity:
        return PROBE_IDENTITY

    def read(self) -> ProbeReading:
        self._log.append("probe read")
        if self.trouble is not None:
            self.trouble()
        self.count += 1
        potential_mv = 200.0 - self.count if self.potential_mv is None else self.potential_mv
        return ProbeReading(
            potential_mv=potential_mv, temperature_c=self.temperature_c, status="ok", sequence=self.count,
            at_s=self._clock.now_s(),
        )  # fmt: skip


class FakeOperator:
    """Answers "yes" unless told otherwise."""

    def __init__(self, log: list[str]) -> None:
        self._log = log
        self.answers: dict[str, str] = {}
        self.trouble: Callable[[str], None] | None = None

    def ask(self, key: str, text: str, choices: tuple[str, ...]) -> str:
        self._log.append(f"ask {key}")
        if self.trouble is not None:
            self.trouble(key)
        return self.answers.get(key, "yes")

    def tell(self, text: str) -> None:
        self._log.append("tell")


class LoggingSink:
    """Keeps lines in memory and notes every write and sync in the common log; `full_at` fails that write."""

    def __init__(self, log: list[str]) -> None:
        self._log = log
        self.lines: list[bytes] = []
        self.error: OSError | None = None
        self.closed = False

    def write(self, line: bytes) -> None:
        if self.error is not None:
            raise self.error
        self._log.append(f"line {len(self.lines) + 1}")
        self.lines.append(line)

    def sync(self) -> None:
        self._log.append(f"sync {len(self.lines)}")

    def give_back_reserve(self) -> None:
        self._log.append("reserve")
        self.error = None

    def close(self) -> None:
        self.closed = True

    @property
    def data(self) -> bytes:
        return b"".join(self.lines)


class FakeBench:
    """Clock, devices and record sink that share one log of calls."""

    def __init__(self) -> None:
        from controller.journal import Journal
        from controller.running.devices import Devices
        from controller.running.stopping import StopSwitch

        self.log: list[str] = []
        self.clock = ManualClock(start_s=100.0)
        self.stop = StopSwitch()
        self.pump = FakePump(self.clock, self.log, self.stop.event)
        self.probe = FakeProbe(self.clock, self.log)
        self.operator = FakeOperator(self.log)
        self.sink = LoggingSink(self.log)
        self.devices = Devices(pump=self.pump, probe=self.probe, operator=self.operator)
        self.journal = Journal(self.sink, self.clock, name="runs/fake.jsonl")


@pytest.fixture
def fake_bench() -> FakeBench:
    return FakeBench()
