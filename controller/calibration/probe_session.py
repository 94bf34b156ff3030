"""Calibration of the probe, step by step: buffer after buffer, the line, the check buffer, the verdict.

Pure: actions out, observations in. A buffer is recognised within the bench's set; what is asked for and what is found
may differ, which is told.
"""

from __future__ import annotations

from collections.abc import Generator
from dataclasses import dataclass, field
from typing import Any

from configs.buffers import buffer
from configs.errors import HalfdropError
from controller.calibration.acceptance import (
    CheckResult,
    ProbeLimits,
    calibration_warnings,
    check_buffer,
    judge_probe,
)
from controller.calibration.acceptance_dialogue import ask_questions, finish, stopped
from controller.calibration.buffers import (
    EXPECTED_SLOPE_FRACTION,
    BufferLot,
    DeclaredReading,
    misplaced,
    recognise,
)
from controller.calibration.electrode import (
    BufferPoint,
    CalibrationError,
    CalibrationLine,
    Isopotential,
    PriorSlope,
    Residual,
    fit_line,
)
from controller.calibration.isopotential import LEAST_TEMPERATURE_SPAN_C, fit_isopotential
from controller.calibration.obeying import obeying
from controller.calibration.plans import PlannedBuffer, PlannedLimits, ProbePlan
from controller.calibration.stability import NotStable, Stable, read_until_stable
from controller.titration.actions import Action, Answered, Ask, Decisions, Observation, Report

#: tries for one buffer
MOST_TRIES = 3
#: standard uncertainty of a slope taken over from the calibration before (common practice)
_PRIOR_SLOPE_UNCERTAINTY = 0.02
_NONE_OF_THEM = "none of them"


class _StopError(Exception):
    """The calibration ends here."""

    def __init__(self, reason: str, outcome: str = "stopped") -> None:
        super().__init__(reason)
        self.reason, self.outcome = reason, outcome


@dataclass(frozen=True, slots=True, kw_only=True)
class _Measured:
    """A stable reading in a bottle of buffer; `asked` is the lot that was asked for."""

    asked: str
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


def calibrate_probe(plan: ProbePlan) -> Decisions:
    """Return the core that carries out a plan."""
    return obeying(_calibrated(plan))


def _calibrated(plan: ProbePlan) -> Decisions:
    session = _Session(plan)
    try:
        result = yield from session.whole()
    except _StopError as end:
        result = stopped(plan, end.reason, outcome=end.outcome)
    return result


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
class _Session:
    plan: ProbePlan
    warnings: list[str] = field(default_factory=list)
    measured: list[_Measured] = field(default_factory=list)

    def whole(self) -> Generator[Action, Observation | None, dict[str, Any]]:
        plan = self.plan
        refused = yield from ask_questions(plan)
        if refused is not None:
            raise _StopError(refused)
        for number, planned in enumerate(self._of_role("calibration"), start=1):
            self.warnings += planned.warnings
            self.measured.append((yield from self._buffer(f"buffer-{number}", planned)))
        self._look_for_swaps()
        try:
            line = self._line()
        except HalfdropError as error:
            yield Report(what="warning", text=str(error))
            raise _StopError(str(error), "completed") from error
        check = yield from self._check(line)
        verdict = judge_probe(line, [_limits(one) for one in plan.limits], check=check)
        self.warnings += calibration_warnings([one.point for one in self.measured])
        pairs = zip(self.measured, line.residuals, strict=True)
        details: dict[str, Any] = {
            "line": line_to_json(line),
            "buffers": [_to_json(one, residual) for one, residual in pairs],
        }
        details["check"] = None if check is None else {
            "buffer": check.buffer, "ph": check.ph, "error_ph": check.error_ph,
            "standard_uncertainty_ph": check.standard_uncertainty_ph,
        }  # fmt: skip
        details["response_s"] = max(one.stable.response_s for one in self.measured)
        return (yield from finish(plan, verdict, details, self.warnings))

    def _of_role(self, role: str) -> list[PlannedBuffer]:
        return [one for one in self.plan.buffers if one.role == role]

    def _lots(self) -> list[BufferLot]:
        """The set without repeats: one bottle may be measured at two temperatures."""
        return [lot_of(one) for one in {one.lot_id: one for one in self._of_role("calibration")}.values()]

    def _isopotential(self) -> Isopotential:
        """As stated; as measured where buffers at temperatures 10 °C apart tell it better."""
        iso = Isopotential(
            ph=self.plan.isopotential_ph, standard_uncertainty=self.plan.isopotential_standard_uncertainty
        )
        try:
            found = fit_isopotential([one.point for one in self.measured]).isopotential
        except CalibrationError:
            return iso
        if found.standard_uncertainty >= iso.standard_uncertainty:
            return iso
        self.warnings.append(
            f"isopotential pH {found.ph:.2f} +- {found.standard_uncertainty:.2f} from buffers at two temperatures"
        )
        return found

    def _line(self) -> CalibrationLine:
        plan = self.plan
        prior = PriorSlope(
            fraction=plan.last_slope_fraction or EXPECTED_SLOPE_FRACTION, standard_uncertainty=_PRIOR_SLOPE_UNCERTAINTY
        )
        iso = self._isopotential()
        one = len(self.measured) == 1
        return fit_line([one.point for one in self.measured], isopotential=iso, prior_slope=prior if one else None)

    def _check(self, line: CalibrationLine) -> Generator[Action, Observation | None, CheckResult | None]:
        found: list[CheckResult] = []
        for number, planned in enumerate(self._of_role("check"), start=1):
            self.warnings += planned.warnings
            seen = yield from self._buffer(f"check-{number}", planned)
            found.append(check_buffer(line, seen.point))
            yield Report(
                what="note",
                text=f"check buffer {found[-1].buffer}: reads {found[-1].ph + found[-1].error_ph:.3f}, stated "
                f"{found[-1].ph:.3f}, error {found[-1].error_ph:+.3f}",
            )
        return max(found, key=lambda one: abs(one.error_ph), default=None)

    # --- one buffer ----------------------------------------------------------------------------------------------

    def _buffer(self, key: str, planned: PlannedBuffer) -> Generator[Action, Observation | None, _Measured]:
        """Have the probe put into a buffer, and return its accepted reading."""
        why = ""
        for attempt in range(1, MOST_TRIES + 1):
            yield from self._put_in(key, planned, attempt, why)
            found = yield from read_until_stable(
                self.plan.stability, self.plan.probe.reading_interval_s, self.plan.probe.resolution_mv
            )
            if isinstance(found, NotStable):
                if found.stopped:
                    raise _StopError(found.reason)
                why = found.reason
            else:
                seen, why = yield from self._taken(key, planned, found)
                if seen is not None:
                    yield Report(what="note", text=self._accepted_text(seen))
                    return seen
            yield Report(what="warning", text=f"{planned.buffer}: {why}")
        raise _StopError(f"{planned.buffer}: {why}; given up after {MOST_TRIES} tries", "completed")

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
            raise _StopError(f"ended at {planned.buffer}" + (f": {why}" if why else ""))

    def _taken(
        self, key: str, planned: PlannedBuffer, stable: Stable
    ) -> Generator[Action, Observation | None, tuple[_Measured | None, str]]:
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
        lot = yield from self._recognised(key, planned, stable, temperature_c)
        if lot is None:
            return None, f"{stable.potential_mv:.1f} mV fits no buffer of the set"
        again = [one for one in self.measured if one.lot.lot_id == lot.lot_id]
        if any(abs(one.temperature_c - temperature_c) < LEAST_TEMPERATURE_SPAN_C for one in again):
            return None, f"{lot.buffer.name}, lot {lot.lot_id}, was measured already"
        return _Measured(asked=planned.lot_id, lot=lot, stable=stable, temperature_c=temperature_c), ""

    def _recognised(
        self, key: str, planned: PlannedBuffer, stable: Stable, temperature_c: float
    ) -> Generator[Action, Observation | None, BufferLot | None]:
        if planned.role == "check":
            return lot_of(planned)  # what it is judged by must not be chosen by its reading
        lots = self._lots()
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

    def _look_for_swaps(self) -> None:
        lots = self._lots()
        declared = [
            DeclaredReading(lot_id=one.asked, potential_mv=one.stable.potential_mv, temperature_c=one.temperature_c)
            for one in self.measured
        ]
        self.warnings += [f"{swap.text}; each was taken for what it reads" for swap in misplaced(declared, lots)]

    @staticmethod
    def _accepted_text(seen: _Measured) -> str:
        point, stable = seen.point, seen.stable
        return (
            f"{point.buffer}: {point.potential_mv:.2f} mV at {point.temperature_c:.1f} °C, pH {point.ph:.3f}; stable "
            f"after {stable.waited_s:.0f} s ({stable.drift_mv_min:+.2f} mV/min), answered within "
            f"{stable.response_s:.0f} s"
        )


def _limits(one: PlannedLimits) -> ProbeLimits:
    slope = None
    if one.lowest_slope_percent is not None and one.highest_slope_percent is not None:
        slope = (one.lowest_slope_percent, one.highest_slope_percent)
    offset = None if one.largest_offset_mv is None else (-one.largest_offset_mv, one.largest_offset_mv)
    return ProbeLimits(
        name=one.name,
        slope_percent=slope,
        offset_mv=offset,
        residual_ph=one.largest_residual_ph,
        check_ph=one.largest_check_error_ph,
        check_between=one.check_between,
        source=one.source,
    )


def line_to_json(line: CalibrationLine) -> dict[str, Any]:
    """Return a line as plain data: what later runs use, and what people look at."""
    return {
        "slope_percent": line.slope_percent,
        "slope_percent_standard_uncertainty": line.slope_standard_uncertainty_percent,
        "offset_mv": line.offset_mv,
        "offset_standard_uncertainty_mv": line.offset_standard_uncertainty_mv,
        "slope_fraction": line.slope_fraction,
        "slope_fraction_standard_uncertainty": line.covariance[1][1] ** 0.5,
        "isopotential_ph": line.isopotential.ph,
        "isopotential_ph_standard_uncertainty": line.isopotential.standard_uncertainty,
        "isopotential_mv": line.isopotential_mv,
        "isopotential_standard_uncertainty_mv": line.covariance[0][0] ** 0.5,
        "slope_offset_covariance_mv": line.covariance[0][1],
        "temperature_c": line.temperature_c,
        "lowest_ph": line.lowest_ph,
        "highest_ph": line.highest_ph,
        "chi_square": line.chi_square,
        "degrees_of_freedom": line.degrees_of_freedom,
        "offset_only": line.offset_only,
    }


def _to_json(one: _Measured, residual: Residual) -> dict[str, Any]:
    point = one.point
    return {
        "buffer": one.lot.buffer.name,
        "lot_id": one.lot.lot_id,
        "ph": point.ph,
        "standard_uncertainty_ph": point.standard_uncertainty_ph,
        "temperature_c": point.temperature_c,
        "potential_mv": point.potential_mv,
        "standard_uncertainty_mv": point.standard_uncertainty_mv,
        "drift_mv_min": one.stable.drift_mv_min,
        "response_s": one.stable.response_s,
        "residual_ph": residual.ph,
    }
