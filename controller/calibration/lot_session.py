"""Titrant lots and blanks from figures that are there: what they say is told, and taken into force or not.

Pure: the computing was done by the caller from closed records; here it meets the operator and the record.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from controller.calibration.acceptance_dialogue import ask_questions, finish, stopped
from controller.calibration.findings import Verdict
from controller.calibration.obeying import obeying
from controller.calibration.plans import CalibrationPlan
from controller.titration.actions import Decisions, Report


def settle_lot(
    plan: CalibrationPlan, *, verdict: Verdict, notes: Sequence[str], details: dict[str, Any], warnings: Sequence[str]
) -> Decisions:
    """Return the core that tells the figures and asks for acceptance."""
    return obeying(_settled(plan, verdict=verdict, notes=notes, details=details, warnings=warnings))


def _settled(
    plan: CalibrationPlan, *, verdict: Verdict, notes: Sequence[str], details: dict[str, Any], warnings: Sequence[str]
) -> Decisions:
    refused = yield from ask_questions(plan)
    if refused is not None:
        return stopped(plan, refused)
    for text in notes:
        yield Report(what="note", text=text)
    return (yield from finish(plan, verdict, details, warnings))
