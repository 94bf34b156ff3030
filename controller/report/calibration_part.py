"""What a report says of a calibration: verdict, findings against their limits, and everything that was found."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from controller.commands.output import decimals
from controller.report.budget import budget_table
from controller.report.tables import Table
from controller.report.wording import DASH, Facts, cell, facts_of, number, with_uncertainty, words_of

_SHOWN_APART = (
    "kind",
    "subject",
    "on",
    "due_days",
    "passed",
    "accepted",
    "verdict",
    "findings",
    "replaces_sha256",
    "expires",
)
#: parts of a calibration's plan that say how it was made
_PLAN_LEFT_OUT = ("sample", "probe", "pump", "vessel", "questions", "kind", "schema_version", "program_version",
                  "method_name", "method_title", "seed")  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class CalibrationPart:
    """Headline in words, what it means, the findings, and further parts: (title, facts) and tables."""

    headline: str
    meaning: str
    findings: Table
    facts: tuple[tuple[str, Facts], ...]
    tables: tuple[Table, ...]


def calibration_part(plan: Mapping[str, Any], result: Mapping[str, Any], offset: Any) -> CalibrationPart | None:
    """Return the part of a calibration's record; None for a titration.

    Args:
        plan: of the record's header.
        result: of its closing line.
        offset: the lab's offset from UTC.
    """
    found = result.get("calibration")
    if not isinstance(found, dict):
        return None
    facts: list[tuple[str, Facts]] = [
        ("Calibration", [("subject", str(found.get("subject"))), ("verdict", str(found.get("verdict") or DASH))])
    ]
    tables: list[Table] = []
    _gather(found, "", facts, tables, offset, leave_out=_SHOWN_APART)
    planned: list[Table] = []
    _gather({key: plan[key] for key in plan if key not in _PLAN_LEFT_OUT}, "plan", facts, planned, offset)
    return CalibrationPart(
        headline=_headline(found),
        meaning=_meaning(found),
        findings=_findings(found),
        facts=tuple(facts),
        tables=(*tables, *planned),
    )


def _headline(found: Mapping[str, Any]) -> str:
    """Return the verdict, after the concentration where a titrant was standardised."""
    verdict, lot = "passed" if found.get("passed") else "did not pass", found.get("lot")
    if not isinstance(lot, dict):
        return verdict
    places = decimals(lot["expanded_uncertainty_mol_l"])
    value, expanded = number(lot["concentration_mol_l"], places), number(lot["expanded_uncertainty_mol_l"], places)
    return f"{value} ± {expanded} mol/L, {verdict}"


def _meaning(found: Mapping[str, Any]) -> str:
    if not found.get("accepted"):
        return "not accepted: what was in force before stays in force"
    due, expires = found.get("due_days"), found.get("expires")
    days = "" if due is None else f", due again after {due} days"
    return f"in force from {found.get('on')}{days}" + (f", expires on {expires}" if expires else "")


def _findings(found: Mapping[str, Any]) -> Table:
    rows = []
    for one in found.get("findings") or []:
        value, u = with_uncertainty(one.get("value"), one.get("standard_uncertainty"))
        if u == DASH and isinstance(one.get("value"), float):
            value = number(float(f"{one['value']:.4g}"))
        low, high = one.get("low"), one.get("high")
        allowed = f"{number(low)} to {number(high)}" if low is not None and high is not None else (
            f"up to {number(high)}" if high is not None else f"from {number(low)}"
        )  # fmt: skip
        verdict = {True: "passed", False: "FAILED"}.get(one.get("passed"), "not judged")
        names = str(one.get("quantity")), value, u, allowed, str(one.get("unit") or "")
        rows.append((*names, verdict, str(one.get("limits") or "")))
    heads = ("Quantity", "Value", "u", "Allowed", "Unit", "Verdict", "Limits of")
    return Table(caption="Findings", heads=heads, rows=tuple(rows), numeric=(1, 2))


def _gather(
    data: Mapping[str, Any],
    title: str,
    facts: list[tuple[str, Facts]],
    tables: list[Table],
    offset: Any,
    *,
    leave_out: tuple[str, ...] = (),
) -> None:
    """Sort an object into facts (its plain values) and tables (its lists of objects), one level after the other."""
    plain = {key: value for key, value in data.items() if key not in leave_out and not _nested(value)}
    name = title or "found"
    if found := facts_of(plain, offset):
        facts.append((name[0].upper() + name[1:], found))
    for key, value in data.items():
        words = words_of(key)[0]
        inner = f"{title}: {words}" if title else words
        if key in leave_out or not _nested(value):
            continue
        if key == "budget" and isinstance(value, dict):
            budget = budget_table({**value, "budget": value})
            tables += [] if budget is None else [budget]
        elif isinstance(value, dict):
            _gather(value, inner, facts, tables, offset)
        else:
            tables.append(_listed(inner, [one for one in value if isinstance(one, dict)], offset))


def _nested(value: Any) -> bool:
    return isinstance(value, dict) or (isinstance(value, list) and any(isinstance(one, dict) for one in value))


def _listed(title: str, rows: list[dict[str, Any]], offset: Any) -> Table:
    keys = list(dict.fromkeys(key for row in rows for key, value in row.items() if not _nested(value)))
    keys = [key for key in keys if any(row.get(key) not in (None, [], "") for row in rows)]
    heads = tuple(" / ".join(part for part in words_of(key) if part) for key in keys)
    made = tuple(tuple(cell(key, row.get(key), offset) for key in keys) for row in rows)
    numeric = tuple(
        index
        for index, key in enumerate(keys)
        if all(isinstance(row.get(key), int | float | None) and not isinstance(row.get(key), bool) for row in rows)
    )
    return Table(caption=title[0].upper() + title[1:], heads=heads, rows=made, numeric=numeric)
