"""The uncertainty budget of a result as lines of a table."""

from __future__ import annotations

from typing import Any

#: a difference of widths below this is none, percent
_SAME_WIDTH_PERCENT = 1.0
#: with more degrees of freedom Student's t is close to normal
_FEW_DEGREES = 50.0
#: coverage of a sum of one such quantity and normal ones, simulated: 93 % at worst with this many, 88 % with one
_TWO = 2.0
HEADS = ("quantity", "value", "u", "unit", "distribution", "sensitivity", "contribution", "share")


def budget_rows(budget: dict[str, Any]) -> list[tuple[str, ...]]:
    """Return the cells of each row of a budget, below `HEADS`; contributions are in the result's unit."""
    return [
        (
            str(row["quantity"]),
            _figure(row["value"], 7),
            _figure(row["standard_uncertainty"], 3),
            "" if row["sensitivity"] is None else str(row["unit"]),  # one cause of several quantities has no unit
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
        u = "" if found["standard_uncertainty"] is None else f"u = {found['standard_uncertainty']:.3g}, "
        covers = f"{100 * found['coverage_probability']:.0f} % interval"
        lines.append(
            f"Monte Carlo ({found['trials']} trials): {u}{covers} {low:.6g} to {high:.6g} {budget['unit']}: "
            f"{comparison_words(found)}"
        )
        lines += difference_words(found)
    return lines


def comparison_words(monte_carlo: dict[str, Any]) -> str:
    """Say how Monte Carlo's interval stands to the one given (value +- U)."""
    if monte_carlo["agrees"]:
        return "agrees with the given one"
    ratio = monte_carlo.get("width_ratio")
    if ratio is None:  # an early record
        return "differs from the given one beyond the numerical tolerance"
    change = 100.0 * (ratio - 1.0)
    if abs(change) < _SAME_WIDTH_PERCENT:
        return "lies beside the given one, by more than the numerical tolerance"
    return f"{abs(change):.0f} % {'wider' if change > 0.0 else 'narrower'} than the given one"


def difference_words(monte_carlo: dict[str, Any]) -> list[str]:
    """Say what a difference means and which interval to use; nothing where both agree."""
    if monte_carlo["agrees"] or "fewest_degrees_of_freedom" not in monte_carlo:
        return []
    few = monte_carlo["fewest_degrees_of_freedom"]
    if few is not None and few < _FEW_DEGREES:
        return [
            f"A quantity has only {few:.3g} degrees of freedom. Monte Carlo draws it from Student's t, with its long "
            "tails, and adds the other quantities; the law of propagation takes one t for the whole. Given is the "
            f"latter's interval, which holds the truth in {93 if few >= _TWO else 88} to 95 of 100 such cases; where a "
            "decision hangs on it take Monte Carlo's, or make more replicates."
        ]
    return [
        "The model bends within its uncertainties, or a quantity whose distribution is not normal governs. Given is "
        "the interval of the law of propagation; Monte Carlo's is the sounder one here."
    ]


def _figure(value: float | None, digits: int) -> str:
    return "" if value is None else f"{value:.{digits}g}"


def _distribution(row: dict[str, Any]) -> str:
    freedom = row["degrees_of_freedom"]
    return str(row["distribution"]) if freedom is None else f"{row['distribution']}, {freedom:.0f} d.f."
