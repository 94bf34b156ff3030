"""The amount at the head of a page: value, uncertainty, unit, and as what it is reported."""

from __future__ import annotations

from typing import Any

from controller.commands.output import NAMES_ITS_SUBSTANCE, decimals
from controller.report.budget import coverage_factor
from controller.report.wording import number


def headline(amount: dict[str, Any] | None) -> dict[str, str] | None:
    """The amount in parts: value, expanded uncertainty, unit, substance, coverage factor."""
    if not amount:
        return None
    expanded = amount.get("expanded_uncertainty")
    places = decimals(expanded) if expanded else None
    return {
        "value": number(amount.get("value"), places),
        "expanded": number(expanded, places) if expanded else "",
        "unit": str(amount.get("unit")),
        "of": _reported_as(amount),
        "k": coverage_factor(amount),
    }


def _reported_as(amount: dict[str, Any]) -> str:
    """Say as which substance, and to which end point."""
    substance, end_point = amount.get("substance"), str(amount.get("end_point") or "")
    if not substance:
        return ""
    to = f"to {end_point}" if end_point else ""
    if amount.get("unit") == NAMES_ITS_SUBSTANCE:
        return to
    named = f"{'' if amount.get('quantity') == 'titrant' else 'as '}{substance}"
    return ", ".join(filter(None, (named, to)))
