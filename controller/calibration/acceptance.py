"""Verdict on a probe calibration: slope, offset, residuals and check buffer against stated limits."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from controller.calibration.electrode import BufferPoint, CalibrationLine, ph_from
from controller.calibration.findings import Finding, Verdict, verdict


@dataclass(frozen=True, slots=True, kw_only=True)
class ProbeLimits:
    """Limits of one rule; None: the rule says nothing about it.

    `check_between`: the check buffer must lie between the calibration buffers. `source` says where the figures come
    from and which of them a laboratory must enter from its own edition.
    """

    name: str
    slope_percent: tuple[float, float] | None = None
    offset_mv: tuple[float, float] | None = None
    residual_ph: float | None = None
    check_ph: float | None = None
    check_between: bool = False
    source: str = ""


USP_791 = ProbeLimits(
    name="USP <791>",
    slope_percent=(90.0, 105.0),
    offset_mv=(-30.0, 30.0),
    check_ph=0.05,
    check_between=True,
    source="slope, offset and place of the check buffer: USP <791>; 0.05 pH from memory: enter your edition's limits",
)
HOUSE_LIMITS = ProbeLimits(
    name="house limits",
    slope_percent=(95.0, 102.0),
    offset_mv=(-30.0, 30.0),
    residual_ph=0.05,
    check_ph=0.05,
    source="common practice, from memory: enter your laboratory's limits",
)
#: buffers of one calibration farther apart than this are warned about (common practice)
BUFFER_TEMPERATURE_SPREAD_C = 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class CheckResult:
    """Check buffer read with the new calibration: error = pH read - pH stated, with its standard uncertainty."""

    buffer: str
    ph: float
    error_ph: float
    standard_uncertainty_ph: float


def check_buffer(line: CalibrationLine, point: BufferPoint) -> CheckResult:
    """Read a buffer that was not used for the line."""
    read = ph_from(line, point.potential_mv, point.temperature_c, standard_uncertainty_mv=point.standard_uncertainty_mv)
    return CheckResult(
        buffer=point.buffer,
        ph=point.ph,
        error_ph=read.ph - point.ph,
        standard_uncertainty_ph=math.hypot(read.standard_uncertainty, point.standard_uncertainty_ph),
    )


def judge_probe(line: CalibrationLine, limits: Sequence[ProbeLimits], *, check: CheckResult | None = None) -> Verdict:
    """Hold a calibration against the limits of every rule.

    One buffer adjusts the offset and is never a pass; nor is a calibration whose rule asks for a check buffer that was
    not measured.
    """
    findings = [finding for rule in limits for finding in _findings(line, rule, check)]
    incomplete = None
    if line.offset_only:
        incomplete = "one buffer adjusts the offset only; measure two or more to calibrate"
    elif check is None and any(rule.check_ph is not None for rule in limits):
        incomplete = "no check buffer was measured"
    return verdict(findings, incomplete)


def _findings(line: CalibrationLine, rule: ProbeLimits, check: CheckResult | None) -> list[Finding]:
    found = []
    if rule.slope_percent is not None and not line.offset_only:
        found.append(
            Finding(
                limits=rule.name,
                quantity="slope",
                value=line.slope_percent,
                standard_uncertainty=line.slope_standard_uncertainty_percent,
                low=rule.slope_percent[0],
                high=rule.slope_percent[1],
                unit="% of the ideal slope",
            )
        )
    if rule.offset_mv is not None:
        found.append(
            Finding(
                limits=rule.name,
                quantity="offset at pH 7",
                value=line.offset_mv,
                standard_uncertainty=line.offset_standard_uncertainty_mv,
                low=rule.offset_mv[0],
                high=rule.offset_mv[1],
                unit="mV",
            )
        )
    if rule.residual_ph is not None and line.degrees_of_freedom > 0:
        worst = max(line.residuals, key=lambda residual: abs(residual.ph))
        found.append(_within(rule, f"residual in {worst.buffer}", worst.ph, rule.residual_ph))
    if check is not None and rule.check_ph is not None:
        name = f"error in check buffer {check.buffer}"
        found.append(_within(rule, name, check.error_ph, rule.check_ph, check.standard_uncertainty_ph))
    if check is not None and rule.check_between and not line.offset_only:
        found.append(
            Finding(
                limits=rule.name,
                quantity="pH of the check buffer",
                value=check.ph,
                low=line.lowest_ph,
                high=line.highest_ph,
                unit="",
                condition=True,
            )
        )
    return found


def _within(rule: ProbeLimits, quantity: str, value: float, limit: float, u: float | None = None) -> Finding:
    return Finding(
        limits=rule.name, quantity=quantity, value=value, low=-limit, high=limit, unit="pH", standard_uncertainty=u
    )


def calibration_warnings(points: Sequence[BufferPoint]) -> tuple[str, ...]:
    """What is doubtful about the buffers of a calibration, in words."""
    temperatures = [point.temperature_c for point in points]
    spread = max(temperatures) - min(temperatures)
    if spread <= BUFFER_TEMPERATURE_SPREAD_C:
        return ()
    return (f"the buffers' temperatures differ by {spread:.1f} °C: let them stand together before calibrating",)


def temperature_warning(temperature_c: float, *, buffers_c: float, largest_difference_c: float) -> str | None:
    """What is doubtful about a sample's temperature against that of the buffers, in words; None: nothing."""
    difference = temperature_c - buffers_c
    if abs(difference) <= largest_difference_c:
        return None
    return (
        f"the sample is {abs(difference):.1f} °C {'warmer' if difference > 0 else 'colder'} than the buffers were, "
        f"allowed: {largest_difference_c:g} °C"
    )


def ph_outside(ph: float, *, lowest_ph: float, highest_ph: float, largest_beyond: float) -> str | None:
    """How far a pH lies outside the buffers of a calibration, in words; None where it is near enough.

    Args:
        ph: read with the calibration.
        lowest_ph: of the buffers.
        highest_ph: of the buffers.
        largest_beyond: distance from the nearest buffer that needs no remark.
    """
    beyond = max(lowest_ph - ph, ph - highest_ph)
    if beyond <= largest_beyond:
        return None
    span = f"pH {lowest_ph:.2f} to {highest_ph:.2f}" if highest_ph > lowest_ph else f"pH {lowest_ph:.2f} alone"
    return f"pH {ph:.2f} lies {beyond:.2f} outside the buffers ({span})"
