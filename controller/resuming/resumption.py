"""Where a broken-off run goes on: what the core waits for, what became of a dose in doubt, and the accounts so far."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from controller.guard import Guard
from controller.running.execution import Execution
from controller.titration.actions import (
    Action,
    Answered,
    Ask,
    Dose,
    Dosed,
    Failed,
    Observation,
    Prime,
    Primed,
    Refill,
    Refilled,
    Resumed,
)  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Resumption:
    """What the runner needs to go on.

    Attributes:
        pending: the action that the core waits for; None where it had finished.
        written: that action stands in the record already.
        settled: what became of a dose in doubt; None where there was none, or where it never began.
        gap: what the core is told of the time between.
        exchanges: everything that was carried out before.
        pump_before_ml: the pump's total at the start of the run, mL.
        finished: the result of a core that had finished.
    """

    pending: Action | None
    written: bool
    settled: Observation | None
    gap: Resumed
    exchanges: Sequence[tuple[Action, Observation]]
    pump_before_ml: float
    finished: dict[str, Any] | None = None


def take_up(
    exchanges: Sequence[tuple[Action, Observation]], execution: Execution, guard: Guard, step_ml: float
) -> None:
    """Bring the accounts of execution and guard to where they were."""
    for action, answer in exchanges:
        match action, answer:
            case Ask(), Answered():
                guard.answered(answer.key, answer.answer)
            case Refill(), Refilled():
                guard.filled(answer.contents_ml, answer.reservoir_ml)
            case Prime(), Primed():
                guard.intend(action)
                guard.settle(action, answer.volume_ml)
                execution.primed_ml += answer.volume_ml
                execution.steps += round(answer.volume_ml / step_ml)
            case Dose(), Dosed() | Failed():
                _take_up_dose(action, answer, execution, guard, step_ml)
            case _:
                pass


def _take_up_dose(action: Dose, answer: Dosed | Failed, execution: Execution, guard: Guard, step_ml: float) -> None:
    if isinstance(answer, Dosed):
        lowest_ml = highest_ml = answer.volume_ml
    else:
        lowest_ml = 0.0 if answer.lowest_ml is None else answer.lowest_ml
        highest_ml = action.volume_ml if answer.highest_ml is None else answer.highest_ml
    guard.intend(action)
    guard.settle(action, highest_ml)
    execution.last_number = action.number
    execution.delivered_ml += (lowest_ml + highest_ml) / 2.0
    execution.doses += highest_ml > 0
    if lowest_ml == highest_ml:
        execution.steps += answer.steps if answer.steps is not None else round(lowest_ml / step_ml)
    else:
        execution.in_doubt.append(action.number)
