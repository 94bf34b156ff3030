"""Calibration of the probe, step by step: buffer after buffer, the line, the check buffer, the verdict.

Pure: actions out, observations in. A buffer is recognised within the bench's set; what is asked for and what is found
may differ, which is told.
"""

from __future__ import annotations

from collections.abc import Generator
from dataclasses import dataclass, field
from typing import Any

from configs.errors import HalfdropError
from controller.calibration.acceptance import (
    CheckResult,
    calibration_warnings,
    check_buffer,
    judge_probe,
)
from controller.calibration.acceptance_dialogue import ACCEPT, ACCEPT_FAILED, ask_questions, finish, stopped
from controller.calibration.buffer_reading import BufferReader, Measured, StopError
from controller.calibration.buffers import (
    EXPECTED_SLOPE_FRACTION,
    DeclaredReading,
    misplaced,
)
from controller.calibration.electrode import (
    CalibrationError,
    CalibrationLine,
    Isopotential,
    PriorSlope,
    fit_line,
)
from controller.calibration.isopotential import fit_isopotential
from controller.calibration.obeying import obeying
from controller.calibration.plans import ProbePlan
from controller.calibration.probe_result import buffer_to_json, limits_of, line_to_json
from controller.calibration.slowing import SLOWER_IN_BUFFERS, slow_in_buffers_text
from controller.titration.actions import Action, Decisions, Observation, Report

#: standard uncertainty of a slope taken over from the calibration before (common practice)
_PRIOR_SLOPE_UNCERTAINTY = 0.02


def probe_keys(plan: ProbePlan) -> list[str]:
    """Return the keys of the questions that a plan's calibration may ask, for a file of answers."""
    keys = [question.key for question in plan.questions]
    for role, name in (("calibration", "buffer"), ("check", "check")):
        count = sum(one.role == role for one in plan.buffers)
        keys += [f"{name}-{n}{end}" for n in range(1, count + 1) for end in ("", "-again", "-is")]
    return [*keys, ACCEPT, ACCEPT_FAILED]


def calibrate_probe(plan: ProbePlan) -> Decisions:
    """Return the core that carries out a plan."""
    return obeying(_calibrated(plan))


def _calibrated(plan: ProbePlan) -> Decisions:
    session = _Session(plan)
    try:
        result = yield from session.whole()
    except StopError as end:
        result = stopped(plan, end.reason, outcome=end.outcome)
    return result


@dataclass(slots=True)
class _Session:
    plan: ProbePlan
    warnings: list[str] = field(default_factory=list)
    buffers: BufferReader = field(init=False)

    def __post_init__(self) -> None:
        self.buffers = BufferReader(self.plan)

    @property
    def measured(self) -> list[Measured]:
        """Accepted for the line so far."""
        return self.buffers.measured

    def whole(self) -> Generator[Action, Observation | None, dict[str, Any]]:
        plan = self.plan
        self.warnings += plan.warnings
        refused = yield from ask_questions(plan)
        if refused is not None:
            raise StopError(refused)
        for number, planned in enumerate(self.buffers.of_role("calibration"), start=1):
            self.warnings += planned.warnings
            self.measured.append((yield from self.buffers.read(f"buffer-{number}", planned)))
        self._look_for_swaps()
        try:
            line = self._line()
        except HalfdropError as error:
            yield Report(what="warning", text=str(error))
            raise StopError(str(error), "completed") from error
        check = yield from self._check(line)
        verdict = judge_probe(line, [limits_of(one) for one in plan.limits], check=check)
        self.warnings += calibration_warnings([one.point for one in self.measured])
        pairs = zip(self.measured, line.residuals, strict=True)
        details: dict[str, Any] = {
            "line": line_to_json(line),
            "buffers": [buffer_to_json(one, residual) for one, residual in pairs],
        }
        details["check"] = None if check is None else {
            "buffer": check.buffer, "ph": check.ph, "error_ph": check.error_ph,
            "standard_uncertainty_ph": check.standard_uncertainty_ph,
        }  # fmt: skip
        details["response_s"] = response_s = max(one.stable.response_s for one in self.measured)
        if plan.first_response_s is not None and response_s > SLOWER_IN_BUFFERS * plan.first_response_s:
            self.warnings.append(slow_in_buffers_text(response_s, plan.first_response_s))
        return (yield from finish(plan, verdict, details, self.warnings))

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
            f"isopotential pH {found.ph:.2f} (u = {found.standard_uncertainty:.2f}) from buffers at two temperatures"
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
        for number, planned in enumerate(self.buffers.of_role("check"), start=1):
            self.warnings += planned.warnings
            seen = yield from self.buffers.read(f"check-{number}", planned)
            found.append(check_buffer(line, seen.point))
            yield Report(
                what="note",
                text=f"check buffer {found[-1].buffer}: reads {found[-1].ph + found[-1].error_ph:.3f}, stated "
                f"{found[-1].ph:.3f}, error {found[-1].error_ph:+.3f}",
            )
        return max(found, key=lambda one: abs(one.error_ph), default=None)

    def _look_for_swaps(self) -> None:
        lots = self.buffers.lots()
        declared = [
            DeclaredReading(
                lot_id=one.planned.lot_id, potential_mv=one.stable.potential_mv, temperature_c=one.temperature_c
            )
            for one in self.measured
        ]
        self.warnings += [f"{swap.text}; each was taken for what it reads" for swap in misplaced(declared, lots)]
