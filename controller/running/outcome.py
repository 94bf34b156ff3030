"""How a run ended: the whole result, the amount, the check of the pump's account, the exit status."""

from __future__ import annotations

import traceback
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import PurePath
from typing import Any

from configs.errors import HalfdropError
from controller.calibration.plans import AnyPlan
from controller.running.execution import Execution
from controller.running.stopping import STOP_EXIT_STATUS, StopSwitch
from controller.titration.plan import RunPlan
from drivers.errors import DeviceError, StoppedError
from drivers.pump import Pump

#: (plan, result) -> the result's amount, None where there is none
AmountOf = Callable[[RunPlan, dict[str, Any]], dict[str, Any] | None]
NOT_CONFIRMED = "NOT CONFIRMED STOPPED: the pump did not confirm that it stands. Switch it off by hand and look at it"
DONE, NOT_TRUSTED, STOPPED_FOR_SAFETY = 0, 1, 3
INNERMOST_FRAMES = 6


class RunFailedError(HalfdropError):
    """The run ended by an error of the program, or with a pump that did not confirm its stop."""

    exit_status = STOPPED_FOR_SAFETY


@dataclass(frozen=True, slots=True, kw_only=True)
class RunResult:
    """How a run ended.

    Attributes:
        outcome: "completed", "stopped" or "failed".
        reason: why, where it is not completed.
        result: the JSON of `halfdrop run`.
        exit_status: as the command line returns it.
        record: the record's name.
        steps: pump steps of all doses and primes, as journalled.
        stop_confirmed: whether the pump confirmed that it stands; None where nobody had to stop it.
    """

    outcome: str
    reason: str | None
    result: dict[str, Any]
    exit_status: int
    record: str
    steps: int
    stop_confirmed: bool | None


def whole_result(
    found: Mapping[str, Any], *, plan: AnyPlan, execution: Execution, record: str, why_stopped: str | None
) -> dict[str, Any]:
    """Return every promised key of a run's result.

    Args:
        found: what the core finished with; may be short where the core was cut off.
        plan: the run's plan.
        execution: the sums of the run.
        record: the record's name.
        why_stopped: the runner's own reason for the stop, which says more than the core knows.
    """
    outcome = str(found.get("outcome", "failed"))
    reason = None if outcome == "completed" else (why_stopped or found.get("reason") or "the core gave no reason")
    return {
        "end_points": [],
        "half_equivalence": [],
        "estimators": {},
        "result": None,
        "doses": execution.doses,
        "duration_s": execution.at_s(),
        "titrant_ml": round(execution.delivered_ml, 9),
        "warnings": [],
        **found,
        "outcome": outcome,
        "reason": reason,
        "run": record,
        "seed": plan.seed,
    }


def add_amount(result: dict[str, Any], plan: AnyPlan, amount_of: AmountOf | None) -> None:
    """Put the amount into the result of a completed run; the end points stand where it cannot be computed."""
    if amount_of is None or result["outcome"] != "completed" or not isinstance(plan, RunPlan):
        return
    try:
        result["result"] = amount_of(plan, result)
    except (HalfdropError, ArithmeticError, ValueError) as error:
        result["warnings"].append(f"the amount could not be computed: {error}")
        result["trusted"] = False


def account_of(pump: Pump, before_ml: float, execution: Execution) -> tuple[dict[str, float] | None, str | None]:
    """Hold the record's sum against the pump's own.

    Returns:
        Both sums for the record, and a warning: each None where there is none.
    """
    if execution.in_doubt:
        numbers = ", ".join(str(number) for number in execution.in_doubt)
        return None, f"how much was delivered is not known exactly (dose {numbers})"
    try:
        told_ml = pump.delivered_ml() - before_ml
    except (DeviceError, StoppedError) as error:
        return None, f"the pump's account could not be compared with the record: {error}"
    counted_ml = execution.delivered_ml + execution.primed_ml
    sums = {"pump_ml": round(told_ml, 9), "record_ml": round(counted_ml, 9)}
    if abs(told_ml - counted_ml) <= 0.5 * pump.step_ml:
        return sums, None
    return sums, f"the pump delivered {told_ml:.6g} mL by its own account, the record holds {counted_ml:.6g} mL"


def came_from(error: BaseException) -> list[str]:
    """Return the innermost places that the error passed, for whoever has to find it."""
    frames = traceback.extract_tb(error.__traceback__)[-INNERMOST_FRAMES:]
    return [f"{PurePath(frame.filename).name}:{frame.lineno} {frame.name}" for frame in frames]


def exit_status(result: Mapping[str, Any], *, stop: StopSwitch, stop_confirmed: bool | None, safety: bool) -> int:
    """Return the command's exit status.

    Args:
        result: the whole result.
        stop: who stopped the run, if anybody did.
        stop_confirmed: False: the pump may still be moving.
        safety: a limit was reached or a device failed in this run.
    """
    if stop_confirmed is False:
        return STOPPED_FOR_SAFETY
    if stop.request is not None and (status := STOP_EXIT_STATUS[stop.request.kind]) is not None:
        return status
    if result["outcome"] == "completed":
        return DONE if result["end_points"] and result.get("trusted", True) else NOT_TRUSTED
    return STOPPED_FOR_SAFETY if safety or result["outcome"] == "failed" else NOT_TRUSTED
