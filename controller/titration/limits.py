"""Limits that end a run, whichever comes first, and the dose that still fits under them."""

from __future__ import annotations

from collections.abc import Sequence

from controller.titration.endpoint import FoundEndPoint
from controller.titration.exchange import EndOfRunError, Exchange
from controller.titration.plan import RunPlan
from controller.titration.points import Point


def check_limits(plan: RunPlan, world: Exchange, point: Point, found: Sequence[FoundEndPoint]) -> None:
    """End the run where a limit is reached.

    Raises:
        EndOfRunError: which limit; completed where all expected end points were found before.
    """
    reached = _limit_reached(plan, world, point, found)
    if reached is None:
        return
    if len(found) >= plan.end_points.expected:
        raise EndOfRunError("completed", reached)
    at_ph = plan.end_points.at_ph
    unmet = "no end point found" if at_ph is None else f"pH {at_ph:.2f} was not reached"
    missing = unmet if not found else f"{len(found)} of {plan.end_points.expected} end points found"
    raise EndOfRunError("stopped", f"{reached}; {missing}")


def _limit_reached(plan: RunPlan, world: Exchange, point: Point, found: Sequence[FoundEndPoint]) -> str | None:
    limits = plan.limits
    if room_ml(plan, world) < plan.dosing.smallest_ml - 1e-9:
        return f"titrant limit reached after {world.delivered_ml:.3f} mL"
    if world.elapsed_s > limits.run_time_s:
        return f"run time limit of {limits.run_time_s:.0f} s reached"
    if len(found) >= plan.end_points.expected and world.delivered_ml > found[-1].volume_ml + limits.overrun_ml:
        return f"{limits.overrun_ml:.3f} mL beyond the last end point"
    if point.number == 0:
        return None
    for value, low, high, what in (
        (point.ph, limits.lowest_ph, limits.highest_ph, "pH"),
        (point.potential_mv, limits.lowest_mv, limits.highest_mv, "mV"),
    ):
        if value is None:
            continue
        if low is not None and value < low:
            return f"{what} {value:.2f} below the limit of {low:g}"
        if high is not None and value > high:
            return f"{what} {value:.2f} above the limit of {high:g}"
    return None


def room_ml(plan: RunPlan, world: Exchange) -> float:
    """Titrant that may still be delivered: method's limit, vessel, and the syringe where it cannot be refilled."""
    vessel = plan.vessel
    room = min(
        plan.limits.titrant_ml - world.delivered_ml,
        vessel.capacity_ml
        - vessel.displaced_ml
        - vessel.margin_ml
        - plan.sample.initial_volume_ml
        - world.delivered_ml,
    )
    if plan.pump.refill == "none":
        room = min(room, world.contents_ml)
    return room


def largest_dose_ml(plan: RunPlan, world: Exchange, wanted_ml: float) -> float:
    """The wanted dose, cut to what may still be delivered, in whole steps (rounded down when cut)."""
    step = plan.pump.step_ml
    most = min(room_ml(plan, world), plan.vessel.largest_dose_ml, plan.pump.syringe_ml)
    steps = min(max(1, round(wanted_ml / step)), int(most / step + 1e-6))
    return round(max(steps, 1) * step, 9)
