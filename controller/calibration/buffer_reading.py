"""One buffer of a probe calibration: the probe put into it, a stable reading, and which buffer of the set it is.

What is asked for and what is found may differ: a buffer is recognised by its potential, or asked about.
"""

from __future__ import annotations

from collections.abc import Generator
from dataclasses import dataclass, field

from configs.buffers import buffer
from configs.errors import HalfdropError
from controller.calibration.buffers import EXPECTED_SLOPE_FRACTION, BufferLot, recognise
from controller.calibration.electrode import BufferPoint
from controller.calibration.isopotential import LEAST_TEMPERATURE_SPAN_C
from controller.calibration.plans import PlannedBuffer, ProbePlan
from controller.calibration.stability import NotStable, Stable, read_until_stable
from controller.titration.actions import Action, Answered, Ask, Observation, Report

#: tries for one buffer
MOST_TRIES = 3
_NONE_OF_THEM = "none of them"
#: two bottles that read nearer to one another than this are alike, mV
_ALIKE_MV = 6.0


class StopError(Exception):
    """The calibration ends here."""

    def __init__(self, reason: str, outcome: str = "stopped") -> None:
        super().__init__(reason)
        self.reason, self.outcome = reason, outcome


@dataclass(frozen=True, slots=True, kw_only=True)
class Measured:
    """A stable reading in a bottle of buffer; `planned` is the one that was asked for."""

    planned: PlannedBuffer
    lot: BufferLot
    stable: Stable
    temperature_c: float

    @property
    def point(self) -> BufferPoint:
        """The reading as a point of the line."""
        return BufferPoint(
            buffer=f"{self.lot.buffer.name}, lot {self.lot.lot_id}",
            ph=self.lot.ph_at(self.temperature_c),
            standard_uncertainty_ph=self.lot.standard_uncertainty_ph,
            temperature_c=self.temperature_c,
            potential_mv=self.stable.potential_mv,
            standard_uncertainty_mv=self.stable.standard_uncertainty_mv,
        )


def lot_of(planned: PlannedBuffer) -> BufferLot:
    """Return a planned bottle as a lot with its table."""
    return BufferLot(
        buffer=buffer(planned.buffer),
        lot_id=planned.lot_id,
        certificate_ph=planned.certificate_ph,
        certificate_standard_uncertainty_ph=planned.standard_uncertainty_ph,
        certificate_temperature_c=planned.certificate_temperature_c,
    )


@dataclass(slots=True)
class BufferReader:
    """Takes one buffer after the other; `measured` are those accepted for the line."""

    plan: ProbePlan
    measured: list[Measured] = field(default_factory=list)

    def of_role(self, role: str) -> list[PlannedBuffer]:
        """Return the planned bottles for the line, or for the check."""
        return [one for one in self.plan.buffers if one.role == role]

    def lots(self) -> list[BufferLot]:
        """Return the set without repeats: one bottle may be measured at two temperatures."""
        return [lot_of(one) for one in {one.lot_id: one for one in self.of_role("calibration")}.values()]

    def read(self, key: str, planned: PlannedBuffer) -> Generator[Action, Observation | None, Measured]:
        """Have the probe put into a buffer, and return its accepted reading."""
        why = ""
        for attempt in range(1, MOST_TRIES + 1):
            yield from self._put_in(key, planned, attempt, why)
            found = yield from read_until_stable(
                self.plan.stability, self.plan.probe.reading_interval_s, self.plan.probe.resolution_mv
            )
            if isinstance(found, NotStable):
                if found.stopped:
                    raise StopError(found.reason)
                why = found.reason
            else:
                seen, why = yield from self._taken(key, planned, found)
                if seen is not None:
                    yield Report(what="note", text=_accepted_text(seen))
                    return seen
            yield Report(what="warning", text=f"{planned.buffer}: {why}")
        raise StopError(f"{planned.buffer}: {why}; given up after {MOST_TRIES} tries", "completed")

    def _put_in(
        self, key: str, planned: PlannedBuffer, attempt: int, why: str
    ) -> Generator[Action, Observation | None, None]:
        again = "" if attempt == 1 else f"Not accepted: {why}. Once more. "
        answer = yield Ask(
            key=key if attempt == 1 else f"{key}-again",
            text=f"{again}Rinse the probe with water, blot it (do not rub), and put it with the temperature sensor "
            f"into a fresh portion of {planned.buffer}, lot {planned.lot_id}, stirring gently. Never pour it back "
            "into the bottle.",
            choices=("ready", "stop"),
        )
        if not isinstance(answer, Answered) or answer.answer != "ready":
            raise StopError(f"ended at {planned.buffer}" + (f": {why}" if why else ""))

    def _taken(
        self, key: str, planned: PlannedBuffer, stable: Stable
    ) -> Generator[Action, Observation | None, tuple[Measured | None, str]]:
        """Return the reading with the lot that it is of; or None and why it is not accepted."""
        temperature_c = stable.temperature_c
        if temperature_c is None:
            return None, "no temperature: connect the sensor"
        rule = self.plan.stability
        if not rule.lowest_temperature_c <= temperature_c <= rule.highest_temperature_c:
            return None, (
                f"it is {temperature_c:.1f} °C, allowed: {rule.lowest_temperature_c:g} to "
                f"{rule.highest_temperature_c:g} °C; let it stand with the others"
            )
        try:
            lot = yield from self._recognised(key, planned, stable, temperature_c)
        except HalfdropError as error:  # outside a buffer's table
            return None, error.what
        if lot is None:
            return None, f"{stable.potential_mv:.1f} mV fits no buffer of the set"
        for one in self.measured:
            if one.lot.lot_id == lot.lot_id and abs(one.temperature_c - temperature_c) < LEAST_TEMPERATURE_SPAN_C:
                return None, _measured_already(one, stable)
        return Measured(planned=planned, lot=lot, stable=stable, temperature_c=temperature_c), ""

    def _recognised(
        self, key: str, planned: PlannedBuffer, stable: Stable, temperature_c: float
    ) -> Generator[Action, Observation | None, BufferLot | None]:
        if planned.role == "check":
            return lot_of(planned)  # what it is judged by must not be chosen by its reading
        lots = self.lots()
        found = recognise(
            stable.potential_mv,
            temperature_c,
            lots,
            slope_fraction=self.plan.last_slope_fraction or EXPECTED_SLOPE_FRACTION,
            offset_mv=self.plan.last_offset_mv or 0.0,
        )
        if found.lot_id is not None:
            return next(lot for lot in lots if lot.lot_id == found.lot_id)
        yield Report(what="note", text=found.reason)
        answer = yield Ask(
            key=f"{key}-is",
            text=f"{found.reason}. Which buffer is it?",
            choices=(*found.candidates, _NONE_OF_THEM),
        )
        named = answer.answer if isinstance(answer, Answered) else _NONE_OF_THEM
        return next((lot for lot in lots if lot.lot_id == named), None)


def _accepted_text(seen: Measured) -> str:
    point, stable = seen.point, seen.stable
    return (
        f"{point.buffer}: {point.potential_mv:.2f} mV at {point.temperature_c:.1f} °C, pH {point.ph:.3f}; stable "
        f"after {stable.waited_s:.0f} s ({stable.drift_mv_min:+.2f} mV/min), answered within "
        f"{stable.response_s:.0f} s"
    )


def _measured_already(before: Measured, now: Stable) -> str:
    """Why a buffer is not taken twice; a probe that reads alike in two bottles may be dead."""
    text = f"{before.lot.buffer.name}, lot {before.lot.lot_id}, was measured already"
    if abs(before.stable.potential_mv - now.potential_mv) > _ALIKE_MV:
        return text
    return (
        f"{text} (it read {before.stable.potential_mv:.1f} mV, this reads {now.potential_mv:.1f} mV): the same bottle "
        "again, or the probe does not answer to pH (membrane broken, plug loose, cap still on)"
    )
