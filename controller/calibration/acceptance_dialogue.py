"""The end of every calibration: its verdict is told, and the operator takes it into force or not."""

from __future__ import annotations

from collections.abc import Generator, Sequence
from typing import Any

from controller.calibration.findings import Finding, Verdict
from controller.calibration.plans import CalibrationPlan
from controller.titration.actions import Action, Answered, Ask, Observation, Report

ACCEPT = "accept-calibration"
ACCEPT_FAILED = "accept-failed-calibration"


def ask_questions(plan: CalibrationPlan) -> Generator[Action, Observation | None, str | None]:
    """Ask the questions before anything else; return why the calibration must not begin, or None."""
    for question in plan.questions:
        answer = yield Ask(key=question.key, text=question.text, choices=question.choices)
        if not isinstance(answer, Answered):
            return f"the question {question.key!r} was not answered"
        if question.must_be is not None and answer.answer != question.must_be:
            return f"{question.key}: the answer was {answer.answer!r}, needed is {question.must_be!r}"
    return None


def finish(
    plan: CalibrationPlan, verdict: Verdict, details: dict[str, Any], warnings: Sequence[str]
) -> Generator[Action, Observation | None, dict[str, Any]]:
    """Tell the verdict, ask whether the calibration comes into force, and return the run's result.

    One that failed is only asked about where the plan allows it; the one before stays in force until a new one is
    accepted.
    """
    for text in warnings:
        yield Report(what="warning", text=text)
    yield Report(what="note", text=f"verdict: {verdict.text}")
    accepted = False
    if verdict.passed or plan.may_accept_failed:
        passed = verdict.passed
        text = (
            "Take this calibration into force from now on?"
            if passed
            else f"It is no pass ({verdict.text}). Take it into force all the same?"
        )
        answer = yield Ask(key=ACCEPT if passed else ACCEPT_FAILED, text=text, choices=("yes", "no"))
        accepted = isinstance(answer, Answered) and answer.answer == "yes"
    calibration = {
        "kind": plan.kind,
        "subject": plan.subject,
        "on": plan.on,
        "due_days": plan.due_days,
        "passed": verdict.passed,
        "accepted": accepted,
        "verdict": verdict.text,
        "findings": [finding_to_json(finding) for finding in verdict.findings],
        "replaces_sha256": plan.replaces_sha256,
        **details,
    }
    return {"outcome": "completed", "reason": None, "calibration": calibration, "warnings": list(warnings)}


def stopped(plan: CalibrationPlan, reason: str, *, outcome: str = "stopped") -> dict[str, Any]:
    """Return the result of a calibration that came to nothing; what was in force stays so."""
    calibration = {
        "kind": plan.kind, "subject": plan.subject, "on": plan.on, "passed": False, "accepted": False,
        "verdict": f"no calibration: {reason}", "findings": [],
    }  # fmt: skip
    return {"outcome": outcome, "reason": reason, "calibration": calibration, "warnings": []}


def finding_to_json(finding: Finding) -> dict[str, Any]:
    """Return a finding as plain data."""
    return {
        "limits": finding.limits,
        "quantity": finding.quantity,
        "value": finding.value,
        "standard_uncertainty": finding.standard_uncertainty,
        "low": finding.low,
        "high": finding.high,
        "unit": finding.unit,
        "passed": finding.passed,
        "text": finding.text,
    }
