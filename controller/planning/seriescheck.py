"""The check buffer between the samples of a series: does the probe still read what the bottle says?"""

from __future__ import annotations

from collections.abc import Generator
from dataclasses import dataclass
from typing import Any

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from controller.assembly import Opening
from controller.benchwork.calibrationbench import open_probe
from controller.calibration.buffer_reading import lot_of
from controller.calibration.planning import plan_probe
from controller.calibration.plans import ProbePlan
from controller.calibration.stability import NotStable, Stable, read_until_stable
from controller.guard import Guard
from controller.journal import Journal
from controller.lock import lock_device
from controller.planning.inforce import utc_day
from controller.records.recordfile import MemorySink
from controller.running.execution import Execution
from controller.running.stopping import StopSwitch
from controller.titration.actions import Action, Answered, Ask, Observation, Report
from controller.titration.plan import ProbeCalibration
from simulators.constants import ideal_slope_mv

#: as the virtual chemist knows the first check buffer of a bench
KEY = "check-1"


@dataclass(frozen=True, slots=True, kw_only=True)
class BufferCheck:
    """A check buffer as read with the calibration of the runs: stated pH, error, and the limit that it is held to."""

    lot_id: str
    ph: float
    error_ph: float
    limit_ph: float

    @property
    def passed(self) -> bool:
        """True where the error lies within the limit."""
        return abs(self.error_ph) <= self.limit_ph

    def to_json(self) -> dict[str, Any]:
        """Return the check as plain data."""
        return {
            "lot_id": self.lot_id,
            "ph": round(self.ph, 4),
            "error_ph": round(self.error_ph, 4),
            "limit_ph": self.limit_ph,
            "passed": self.passed,
        }

    def says(self) -> str:
        """Return the check for people."""
        verdict = "passed" if self.passed else "FAILED"
        return (
            f"check buffer, lot {self.lot_id}: reads {self.ph + self.error_ph:.3f}, stated {self.ph:.3f}, error "
            f"{self.error_ph:+.3f} (limit {self.limit_ph:g}): {verdict}"
        )


def require_check_buffer(bench: BenchSettings) -> None:
    """Refuse a bench that keeps no check buffer.

    Raises:
        HalfdropError: it keeps none.
    """
    if not any(one.role == "check" for one in bench.buffers):
        raise HalfdropError(
            "this bench keeps no check buffer",
            where=f"bench {bench.name}: buffers",
            remedy="Add a bottle with role: check, or leave --check-buffer-every out",
        )


def check_in_buffer(
    bench: BenchSettings, calibration: ProbeCalibration, *, opening: Opening, stop: StopSwitch
) -> BufferCheck:
    """Have the probe put into the bench's check buffer, and hold the reading against the bottle.

    Args:
        bench: keeps the buffer and the limit.
        calibration: that the runs are read with.
        opening: how the bench is opened.
        stop: stops waits.

    Raises:
        DeviceError: the probe does not answer.
        HalfdropError: no stable reading, or the operator ends it.
    """
    require_check_buffer(bench)
    with open_probe(bench, opening=opening, stop=stop) as opened, lock_device(opened.probe_identity, {}):
        plan = plan_probe(
            bench,
            probe_identity=opened.probe_identity,
            today=utc_day(opened.clock.utc_s()),
            last=None,
            seed=opened.seed,
        )
        journal = Journal(MemorySink(), opened.clock)
        journal.begin({})
        execution = Execution(plan, opened.devices, journal, Guard(plan), clock=opened.clock, stop=stop)
        stable = _carried_out(_in_buffer(plan), execution)
    planned = next(one for one in plan.buffers if one.role == "check")
    if isinstance(stable, NotStable) or stable.temperature_c is None:
        reason = stable.reason if isinstance(stable, NotStable) else "no temperature: connect the sensor"
        raise HalfdropError(
            reason, where=f"check buffer, lot {planned.lot_id}", remedy="Look at the probe, then resume"
        )
    slope_mv = calibration.slope_fraction * ideal_slope_mv(stable.temperature_c)
    read_ph = calibration.isopotential_ph - (stable.potential_mv - calibration.isopotential_mv) / slope_mv
    stated_ph = lot_of(planned).ph_at(stable.temperature_c)
    return BufferCheck(
        lot_id=planned.lot_id,
        ph=stated_ph,
        error_ph=read_ph - stated_ph,
        limit_ph=bench.calibration_rules.probe.largest_check_error_ph,
    )


_Dialogue = Generator[Action, Observation | None, Stable | NotStable]


def _in_buffer(plan: ProbePlan) -> _Dialogue:
    planned = next(one for one in plan.buffers if one.role == "check")
    answer = yield Ask(
        key=KEY,
        text="Rinse the probe, blot it, and put it with the temperature sensor into a fresh portion of "
        f"{planned.buffer}, lot {planned.lot_id}, stirring gently.",
        choices=("ready", "stop"),
    )
    if not isinstance(answer, Answered) or answer.answer != "ready":
        return NotStable(reason="ended by the operator", stopped=True)
    return (yield from read_until_stable(plan.stability, plan.probe.reading_interval_s, plan.probe.resolution_mv))


def _carried_out(dialogue: _Dialogue, execution: Execution) -> Stable | NotStable:
    try:
        action = next(dialogue)
        while True:
            action = dialogue.send(None if isinstance(action, Report) else execution.carry_out(action))
    except StopIteration as end:
        found: Stable | NotStable = end.value
        return found
