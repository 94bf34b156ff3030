"""From a run's plan and result to the amount: plain arguments for the evaluation, which knows nothing of plans."""

from __future__ import annotations

from typing import Any

from controller.titration.plan import RunPlan


def amount_of_plan(plan: RunPlan, result: dict[str, Any]) -> dict[str, Any] | None:
    return None
