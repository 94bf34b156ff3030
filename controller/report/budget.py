"""The uncertainty budget of a report: one row a quantity, and what checks it."""

from __future__ import annotations

import math
from typing import Any

from controller.commands.budgetlines import comparison_words, difference_words
from controller.commands.output import decimals
from controller.report.tables import Table
from controller.report.wording import DASH, number, with_uncertainty

#: more degrees of freedom than this are as good as infinitely many
_MANY_DEGREES = 1000.0


def budget_table(amount: dict[str, Any] | None) -> Table | None:
    """Return the full table where the result has one, else the contributions; None without an amount.

    Args:
        amount: the result's "result".
    """
    if not amount:
        return None
    whole = amount.get("budget")
    rows = whole.get("rows") if isinstance(whole, dict) else None
    if isinstance(whole, dict) and isinstance(rows, list) and rows:
        return _whole(whole, rows, amount)
    contributions = amount.get("contributions")
    if not isinstance(contributions, dict) or not contributions:
        return None
    total = math.fsum(float(c) ** 2 for c in contributions.values())
    ordered = sorted(contributions.items(), key=lambda item: -abs(item[1]))
    made = [(str(name), number(abs(float(c)), _places(amount)), _percent(float(c) ** 2, total)) for name, c in ordered]
    made.append(("combined standard uncertainty", number(amount.get("standard_uncertainty"), _places(amount)), "100 %"))
    heads = ("Quantity", f"Contribution / {amount.get('unit')}", "Share of variance")
    return Table(
        caption="Uncertainty budget", heads=heads, rows=tuple(made), numeric=(1, 2), note=_coverage(amount, amount)
    )


def _whole(whole: dict[str, Any], rows: list[dict[str, Any]], amount: dict[str, Any]) -> Table:
    unit = str(amount.get("unit"))
    made = [_row(row, amount) for row in rows if not _exact(row)]
    total = number(amount.get("standard_uncertainty"), _places(amount))
    made.append(("combined standard uncertainty", "", "", unit, "", "", "", total, "100 %"))
    heads = ("Quantity", "Value", "u", "Unit", "Distribution", "ν", "Sensitivity", f"Contribution / {unit}", "Share")
    parts = (_coverage(amount, whole), _monte_carlo(whole, amount), _shared(rows), _taken_as_exact(rows))
    note = " ".join(filter(None, parts))
    return Table(caption="Uncertainty budget", heads=heads, rows=tuple(made), numeric=(1, 2, 5, 6, 7, 8), note=note)


def _row(row: dict[str, Any], amount: dict[str, Any]) -> tuple[str, ...]:
    value, u = with_uncertainty(row.get("value"), row.get("standard_uncertainty"))
    freedom, sensitivity = row.get("degrees_of_freedom"), row.get("sensitivity")
    return (
        str(row.get("quantity") or row.get("name")),
        value,
        u,
        DASH if sensitivity is None else str(row.get("unit") or ""),  # one cause of several quantities has no unit
        str(row.get("distribution") or DASH),
        "∞" if freedom is None or freedom >= _MANY_DEGREES else f"{freedom:.3g}",
        DASH if sensitivity is None else number(float(f"{sensitivity:.3g}")),
        number(abs(float(row.get("contribution") or 0.0)), _places(amount)),
        DASH if row.get("share") is None else _percent(row["share"], 1.0),
    )


def _places(amount: dict[str, Any]) -> int:
    return min(9, decimals(float(amount.get("standard_uncertainty") or 0.0)) + 1)


def _percent(part: float, total: float) -> str:
    return f"{number(100.0 * part / total, 1)} %" if total > 0.0 else DASH


def coverage_factor(amount: dict[str, Any]) -> str:
    """Return k as it is printed: 2 for 2.0, 1.96 for 1.95996."""
    factor = amount.get("coverage_factor")
    return DASH if factor is None else f"{factor:.3g}"


def _coverage(amount: dict[str, Any], whole: dict[str, Any]) -> str:
    if amount.get("coverage_factor") is None:
        return ""
    probability, freedom = whole.get("coverage_probability"), whole.get("degrees_of_freedom")
    covers = "about 95 %" if probability is None else f"{100.0 * probability:.3g} %"
    few = freedom is not None and freedom < _MANY_DEGREES
    effective = f" ({freedom:.3g} effective degrees of freedom)" if few else ""
    return (
        f"The expanded uncertainty is the combined one times the coverage factor k = {coverage_factor(amount)}, for "
        f"{covers} coverage{effective}."
    )


def _monte_carlo(whole: dict[str, Any], amount: dict[str, Any]) -> str:
    """Monte Carlo (GUM Supplement 1) beside the law of propagation, in a sentence."""
    found = whole.get("monte_carlo")
    if not isinstance(found, dict):
        return ""
    places = _places(amount)
    value, u = number(found.get("value"), places), found.get("standard_uncertainty")
    low, high = [number(end, places) for end in found.get("interval") or (None, None)]
    given = [number(end, places) for end in found.get("given_interval") or ()]
    probability = found.get("coverage_probability")
    covers = "" if probability is None else f"{100.0 * float(probability):.3g} % "
    head = (
        f"Monte Carlo (GUM Supplement 1, {found.get('trials')} trials): {value}"
        + ("" if u is None else f", u = {number(u, places)}")
        + f", {covers}interval {low} to {high}"
    )
    if found.get("agrees") is None:
        return head + "; not compared."
    beside = f" ({given[0]} to {given[1]})" if given else ""
    words = [f"{head}; {comparison_words(found)}{beside}.", *difference_words(found)]
    return " ".join(words)


def _exact(row: dict[str, Any]) -> bool:
    return row.get("standard_uncertainty") == 0.0 and not row.get("shared_id")


def _taken_as_exact(rows: list[dict[str, Any]]) -> str:
    named = [f"{row.get('quantity')} {number(row.get('value'))} {row.get('unit')}" for row in rows if _exact(row)]
    return f"Without uncertainty of their own here: {', '.join(named)}." if named else ""


def _shared(rows: list[dict[str, Any]]) -> str:
    named = [f"{row.get('quantity')} ({row['shared_id']})" for row in rows if row.get("shared_id")]
    return f"Shared causes enter once: {', '.join(named)}." if named else ""
