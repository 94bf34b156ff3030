"""The last line of a record: of a run that came to its end, or of one that an error ended, its pump stopped first."""

from __future__ import annotations

import contextlib
from collections.abc import Mapping
from typing import Any

from configs.errors import HalfdropError
from controller.journal import Journal, RecordError
from controller.running.execution import Execution
from controller.running.outcome import NOT_CONFIRMED, RunFailedError, RunResult, came_from, exit_status
from controller.running.stopping import StopSwitch
from drivers.errors import StoppedError


def close_record(
    result: dict[str, Any],
    details: Mapping[str, Any],
    *,
    journal: Journal,
    execution: Execution,
    stop: StopSwitch,
    safety: bool,
) -> RunResult:
    """Write the closing line of a run that came to its end; `details` are keys more for it.

    Args:
        safety: a limit, a device or a refused answer ended it.
    """
    confirmed = execution.stop_confirmed
    reason = result["reason"]
    if confirmed is False:
        result["warnings"].append(NOT_CONFIRMED)
        result["reason"] = reason = f"{reason}. {NOT_CONFIRMED}" if reason else NOT_CONFIRMED
    # a record does not say where it lies: it may be moved, and two equal runs give equal bytes
    kept = {key: value for key, value in result.items() if key != "run"}
    journal.close(
        result["outcome"],
        reason=reason,
        stop_confirmed=confirmed,
        steps=execution.steps,
        result=kept,
        **details,
    )
    return RunResult(
        outcome=result["outcome"],
        reason=reason,
        result=result,
        exit_status=exit_status(
            result,
            stop=stop,
            stop_confirmed=confirmed,
            safety=safety,
        ),
        record=journal.name,
        steps=execution.steps,
        stop_confirmed=confirmed,
    )


def close_failed(error: BaseException, *, journal: Journal, execution: Execution) -> None:
    """Stop the pump, then close the record with what went wrong.

    Raises:
        RunFailedError: in place of `error` where that is none of ours, or the pump did not confirm its stop.
    """
    if journal.closed:
        return
    confirmed = False
    with contextlib.suppress(RecordError):  # the pump was stopped before its line failed
        execution.halt(f"{type(error).__name__}: {error}")
    confirmed = execution.stop_confirmed is True
    by_hand = isinstance(error, KeyboardInterrupt | StoppedError)
    told = error.what if isinstance(error, HalfdropError) else f"{type(error).__name__}: {error}"
    reason = "interrupted" if by_hand else told
    try:
        journal.close(
            "stopped" if by_hand else "failed",
            reason=reason if confirmed else f"{reason}. {NOT_CONFIRMED}",
            stop_confirmed=confirmed,
            steps=execution.steps,
            came_from=came_from(error),
        )
    except RecordError as second:
        reason = f"{reason}; its closing line could not be written either: {second}"
    if confirmed and isinstance(error, HalfdropError | KeyboardInterrupt | SystemExit | GeneratorExit):
        return
    raise RunFailedError(
        f"the run ended by an error ({reason})",
        where=journal.name,
        remedy="The record up to there is kept; evaluate it, and report the error" if confirmed else NOT_CONFIRMED,
    ) from error
