"""A plan held against the limits of its bench before anything moves: refused with every reason, or warned about."""

from __future__ import annotations

from configs.errors import HalfdropError
from controller.calibration.plans import AnyPlan
from controller.guard import ROUNDING_ML, room_ml, room_text
from controller.titration.plan import RunPlan


class StartRefusedError(HalfdropError):
    """The plan does not fit vessel, pump or bench; nothing has moved. `problems` lists every reason."""

    def __init__(self, problems: list[str], *, where: str) -> None:
        super().__init__(
            "; ".join(problems), where=where, remedy="Change the method, the sample or the vessel and start again"
        )
        self.problems = problems


def titrant_at_hand_ml(plan: RunPlan) -> float:
    """Return the titrant that this run can deliver, mL: the syringe, and the reservoir where it can be filled again."""
    return plan.pump.contents_ml + (0.0 if plan.pump.refill == "none" else plan.pump.reservoir_ml)


def check_start(plan: RunPlan) -> None:
    """Refuse a plan that could not be carried out within the bench's limits.

    Raises:
        StartRefusedError: with every reason, its numbers and a remedy.
    """
    vessel, pump, limits = plan.vessel, plan.pump, plan.limits
    initial_ml, room, at_hand = plan.sample.initial_volume_ml, room_ml(plan), titrant_at_hand_ml(plan)
    problems: list[str] = []
    if initial_ml >= room:
        problems.append(
            f"the sample's {initial_ml:g} mL do not fit: the vessel takes less than {room:g} mL ({room_text(plan)})"
        )
    elif initial_ml + limits.titrant_ml >= room:
        problems.append(
            f"the titrant limit of {limits.titrant_ml:g} mL on {initial_ml:g} mL of sample exceeds the vessel's "
            f"{room:g} mL ({room_text(plan)}); set it below {room - initial_ml:g} mL or take a larger vessel"
        )
    if limits.titrant_ml > at_hand + ROUNDING_ML:
        source = "the syringe holds" if pump.refill == "none" else "syringe and reservoir hold"
        problems.append(
            f"the titrant limit of {limits.titrant_ml:g} mL exceeds the titrant at hand: {source} {at_hand:g} mL; "
            "fill up, or lower the limit"
        )
    expected_ml = plan.chemistry.expected_equivalence_volume_ml
    if expected_ml is not None and expected_ml > limits.titrant_ml:
        problems.append(
            f"the last end point is expected at {expected_ml:.4g} mL, beyond the titrant limit of "
            f"{limits.titrant_ml:g} mL; take at most {0.9 * limits.titrant_ml / expected_ml:.2g} of the sample, or "
            "raise the limit"
        )
    for what, wanted, allowed, unit in (
        ("largest dose", plan.dosing.largest_ml, vessel.largest_dose_ml, "mL"),
        ("largest dose", plan.dosing.largest_ml, pump.syringe_ml, "mL, the whole syringe"),
        ("pump rate", pump.rate_ml_min, vessel.highest_rate_ml_min, "mL/min"),
        ("run time limit", limits.run_time_s, vessel.longest_run_s, "s"),
    ):
        if wanted > allowed + ROUNDING_ML:
            problems.append(f"the {what} is {wanted:g}; this bench allows up to {allowed:g} {unit}")
    if problems:
        raise StartRefusedError(problems, where=f"method {plan.method_name}")


def start_warnings(plan: AnyPlan) -> list[str]:
    """Return what a person should know before leaving the run alone."""
    vessel, pump = plan.vessel, plan.pump
    reservoir_ml = pump.reservoir_ml if pump.refill == "valve" else 0.0
    worst_ml = plan.sample.initial_volume_ml + pump.syringe_ml + reservoir_ml
    holds_ml = vessel.capacity_ml - vessel.displaced_ml + vessel.tray_ml
    doubts = list(plan.traceability.warnings) if isinstance(plan, RunPlan) and plan.traceability is not None else []
    expected_ml = plan.chemistry.expected_equivalence_volume_ml if isinstance(plan, RunPlan) else None
    if isinstance(plan, RunPlan) and expected_ml is not None:
        limit_ml = plan.limits.titrant_ml
        if expected_ml <= limit_ml < 1.05 * expected_ml:
            doubts.append(
                f"the end point expected at {expected_ml:.4g} mL is close to the titrant limit {limit_ml:g} mL"
            )
    if worst_ml <= holds_ml:
        return doubts
    return [
        *doubts,
        f"a pump that runs away could deliver the syringe ({pump.syringe_ml:g} mL) and the reservoir "
        f"({reservoir_ml:g} mL) onto {plan.sample.initial_volume_ml:g} mL of sample; vessel and tray hold "
        f"{holds_ml:g} mL. Put in a larger tray or less titrant, or stay with the run",
    ]
