"""The uncertainty budget of a result as lines of a table."""

from __future__ import annotations

from typing import Any

HEADS = ("quantity", "value", "u", "unit", "distribution", "sensitivity", "contribution", "share")


def budget_rows(budget: dict[str, Any]) -> list[tuple[str, ...]]:
    """Return the cells of each row of a budget, below `HEADS`; contributions are in the result's unit."""
    return [
        (
            str(row["quantity"]),
            _figure(row["value"], 7),
            _figure(row["standard_uncertainty"], 3),
            str(row["unit"]),
            _distribution(row),
            _figure(row["sensitivity"], 4),
            _figure(row["contribution"] + 0.0, 3),
            f"{100.0 * row['share'] + 0.0:.1f} %",
        )
        for row in budget["rows"]
    ]


def closing_lines(budget: dict[str, Any]) -> list[str]:
    """Return what stands below the table: the whole, and what Monte Carlo says of it."""
    freedom = budget["degrees_of_freedom"]
    lines = [
        f"u = {budget['standard_uncertainty']:.3g} {budget['unit']}, effective degrees of freedom "
        f"{'infinite' if freedom is None else f'{freedom:.0f}'}, U = {budget['expanded_uncertainty']:.3g} "
        f"{budget['unit']} (k = {budget['coverage_factor']:.3g}, {100 * budget['coverage_probability']:.0f} %)"
    ]
    found = budget.get("monte_carlo")
    if found is not None:
        low, high = found["interval"]
        word = "agrees" if found["agrees"] else "differs beyond its numerical tolerance"
        lines.append(
            f"Monte Carlo ({found['trials']} trials): u = {found['standard_uncertainty']:.3g}, "
            f"{100 * found['coverage_probability']:.0f} % interval {low:.6g} to {high:.6g} {budget['unit']}: {word}"
        )
    return lines


def _figure(value: float | None, digits: int) -> str:
    return "" if value is None else f"{value:.{digits}g}"


def _distribution(row: dict[str, Any]) -> str:
    freedom = row["degrees_of_freedom"]
    return str(row["distribution"]) if freedom is None else f"{row['distribution']}, {freedom:.0f} d.f."
