"""From a bench file to the plans of its calibrations."""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Sequence
from typing import Any

from configs.benchfile import BenchSettings
from configs.buffers import buffer
from configs.calibrating import BufferLotSettings, ProbeRules
from configs.errors import HalfdropError
from configs.version import __version__
from controller.calibration.acceptance import USP_791
from controller.calibration.buffers import BufferLot, days_after_opening
from controller.calibration.plans import (
    CALIBRATION_PLAN_VERSION,
    PlannedBuffer,
    PlannedLimits,
    ProbePlan,
    Stability,
)
from controller.calibration.slowing import first_response_s
from controller.calibration.store import Calibration
from controller.calibration.validity import Validity
from controller.titration.plan import Probe, Pump, Question, Sample, Vessel

NO_PUMP = "none not used -"
PROBE_QUESTIONS = (
    Question(
        key="probe-ready",
        text="Probe out of its storage solution, filling hole open, electrolyte full, buffers at room temperature, a "
        "beaker of each poured fresh?",
        choices=("yes", "no"),
        must_be="yes",
    ),
)


def vessel_of(bench: BenchSettings, *, capacity_ml: float | None = None) -> Vessel:
    """Return the bench's limits; `capacity_ml`: of another vessel that stands in the place of the titration vessel."""
    settings = bench.vessel
    other = capacity_ml is not None
    return Vessel(
        capacity_ml=settings.capacity_ml if capacity_ml is None else capacity_ml,
        displaced_ml=0.0 if other else settings.displaced_ml,
        margin_ml=0.0 if other else settings.margin_ml,
        tray_ml=settings.tray_ml,
        waste_ml=settings.waste_ml,
        largest_dose_ml=settings.largest_dose_ml,
        highest_rate_ml_min=bench.pump.highest_rate_ml_min,
        longest_run_s=settings.longest_run_s,
        lowest_temperature_c=min(settings.lowest_temperature_c, -50.0),
        highest_temperature_c=max(settings.highest_temperature_c, 150.0),
    )


def no_pump() -> Pump:
    """Return the pump of a calibration that uses none."""
    return Pump(
        identity=NO_PUMP,
        start_count=0,
        last_dose_number=0,
        step_ml=1e-6,
        rate_ml_min=1.0,
        syringe_ml=0.0,
        contents_ml=0.0,
        reservoir_ml=0.0,
        refill="none",
        position_sd_ml=0.0,
        position_correlation_ml=1.0,
        dose_sd_ml=0.0,
        gain_standard_uncertainty=0.0,
    )


def probe_of(bench: BenchSettings, identity: str) -> Probe:
    """Return the probe as a calibration uses it: by its potential."""
    return Probe(
        identity=identity,
        signal="potential",
        calibration=None,
        response=None,
        resolution_mv=bench.probe.resolution_mv,
        reading_interval_s=bench.probe.reading_interval_s,
    )


def common(
    kind: str, subject: str, *, bench: BenchSettings, today: dt.date, replaces: Calibration | None
) -> dict[str, Any]:
    """Return what every calibration's plan holds, as keyword arguments."""
    return {
        "kind": kind,
        "schema_version": CALIBRATION_PLAN_VERSION,
        "program_version": __version__,
        "method_name": f"calibrate-{kind}",
        "subject": subject,
        "on": today.isoformat(),
        "may_accept_failed": bench.calibration_rules.failed == "warn",
        "sample": Sample(sample_id=subject, initial_volume_ml=0.0),
        "replaces_sha256": None if replaces is None else replaces.sha256,
    }


def plan_probe(
    bench: BenchSettings,
    *,
    probe_identity: str,
    today: dt.date,
    last: Calibration | None,
    lots: Sequence[str] = (),
    check: bool = True,
    seed: int | None = None,
    earlier: Sequence[Calibration] = (),
    warnings: Sequence[str] = (),
) -> ProbePlan:
    """Return the plan of a probe calibration.

    Args:
        bench: its bottles of buffer and its rules.
        probe_identity: as the probe told it.
        today: UTC day.
        last: the calibration in force.
        lots: bottles to use, in this order; none: all calibration buffers of the bench.
        check: whether the check buffers are measured afterwards.
        seed: of a simulated bench.
        earlier: accepted calibrations of this probe, oldest first.
        warnings: what is known of the probe beforehand, in words.

    Raises:
        HalfdropError: no buffers, a lot that the bench does not keep, or one past its date where the rules refuse it.
    """
    rules = bench.calibration_rules
    chosen = _chosen(bench, lots, check)
    refuse = rules.expired == "refuse"
    probe = rules.probe
    line = last.result.get("line", {}) if last is not None else {}
    return ProbePlan(
        **common("probe", probe_identity, bench=bench, today=today, replaces=last),
        method_title="Calibration of the probe with buffers",
        due_days=probe.days,
        probe=probe_of(bench, probe_identity),
        pump=no_pump(),
        vessel=vessel_of(bench),
        questions=PROBE_QUESTIONS,
        seed=seed,
        buffers=tuple(_planned(one, today, refuse=refuse) for one in chosen),
        stability=Stability(
            window_s=probe.stability_window_s,
            limit_mv_min=probe.stability_limit_mv_min,
            longest_s=probe.longest_wait_s,
            largest_scatter_mv=probe.stability_scatter_mv,
            lowest_temperature_c=probe.lowest_buffer_temperature_c,
            highest_temperature_c=probe.highest_buffer_temperature_c,
        ),
        limits=_limits(probe),
        isopotential_ph=probe.isopotential_ph,
        isopotential_standard_uncertainty=probe.isopotential_standard_uncertainty,
        last_slope_fraction=line.get("slope_fraction"),
        last_offset_mv=line.get("offset_mv"),
        first_response_s=first_response_s(earlier),
        warnings=tuple(warnings),
    )


def _chosen(bench: BenchSettings, lots: Sequence[str], check: bool) -> list[BufferLotSettings]:
    kept = {one.lot_id: one for one in bench.buffers}
    where = "buffers of the bench"
    for lot in lots:
        if lot not in kept:
            known = ", ".join(kept) or "none: enter them as buffers in the bench file"
            raise HalfdropError(f"no lot {lot!r}", where=where, remedy=f"Use one of: {known}")
    made = [kept[lot] for lot in lots] or [one for one in bench.buffers if one.role == "calibration"]
    if not made:
        raise HalfdropError(
            "no bottle of buffer is entered", where=where, remedy="Enter buffer, lot_id and dates in the bench file"
        )
    made = [one.model_copy(update={"role": "calibration"}) for one in made]
    used = {one.lot_id for one in made}
    return [*made, *(one for one in bench.buffers if check and one.role == "check" and one.lot_id not in used)]


def _planned(one: BufferLotSettings, today: dt.date, *, refuse: bool) -> PlannedBuffer:
    known = buffer(one.buffer)
    lot = BufferLot(
        buffer=known,
        lot_id=one.lot_id,
        certificate_ph=one.certificate_ph,
        certificate_standard_uncertainty_ph=one.certificate_standard_uncertainty_ph,
        certificate_temperature_c=one.certificate_temperature_c,
    )
    middle = min(max(25.0, known.temperatures_c[0]), known.temperatures_c[-1])
    days = one.days_after_opening or days_after_opening(lot.ph_at(middle))
    validity = Validity(
        start=dt.date.fromisoformat(one.opened) if one.opened else None,
        days_from_start=days if one.opened else None,
        expires=dt.date.fromisoformat(one.expires) if one.expires else None,
    )
    problems = [f"{known.name}, lot {one.lot_id}: {text}" for text in validity.problems_on(today)]
    if problems and refuse:
        raise HalfdropError(
            "; ".join(problems), where="buffers of the bench", remedy="Open a fresh bottle and enter it"
        )
    return PlannedBuffer(
        buffer=known.name,
        lot_id=one.lot_id,
        role=one.role,
        certificate_ph=one.certificate_ph,
        standard_uncertainty_ph=lot.standard_uncertainty_ph,
        certificate_temperature_c=one.certificate_temperature_c,
        warnings=tuple(problems),
        certificate=one.certificate,
        expires=one.expires,
        opened=one.opened,
        days_after_opening=days if one.opened else None,
    )


def _limits(rules: ProbeRules) -> tuple[PlannedLimits, ...]:
    house = PlannedLimits(
        name="house limits",
        lowest_slope_percent=rules.lowest_slope_percent,
        highest_slope_percent=rules.highest_slope_percent,
        largest_offset_mv=rules.largest_offset_mv,
        largest_residual_ph=rules.largest_residual_ph,
        largest_check_error_ph=rules.largest_check_error_ph,
        check_between=False,
        source="bench file",
    )
    if not rules.compendial:
        return (house,)
    slope, offset = USP_791.slope_percent or (-math.inf, math.inf), USP_791.offset_mv or (-math.inf, math.inf)
    return (
        PlannedLimits(
            name=USP_791.name,
            lowest_slope_percent=slope[0],
            highest_slope_percent=slope[1],
            largest_offset_mv=offset[1],
            largest_residual_ph=USP_791.residual_ph,
            largest_check_error_ph=USP_791.check_ph,
            check_between=USP_791.check_between,
            source=USP_791.source,
        ),
        house,
    )
