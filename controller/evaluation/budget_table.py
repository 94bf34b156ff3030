"""The budget as plain data: one row a quantity, largest share first, with Monte Carlo beside it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np

from controller.evaluation.montecarlo import compare, meaningful_digits, propagate
from controller.evaluation.quantity import Quantity
from controller.evaluation.uncertainty import Array, Budget, BudgetRow, Model, Values

#: trials of the Monte Carlo at most
LARGEST_TRIALS = 500_000
#: density of the normal distribution at the ends of its 95 % interval, per standard deviation
_DENSITY_AT_END = 0.0584
#: Student's t has no variance with so few degrees of freedom
_NO_VARIANCE = 2.0


def budget_to_json(budget: Budget, *, model: Model, quantities: Sequence[Quantity], seed: int = 1) -> dict[str, Any]:
    """Return a budget as plain data, with the propagation of distributions of the same model and inputs.

    Args:
        budget: by the GUM's law of propagation.
        model: of the budget.
        quantities: of the budget.
        seed: of the Monte Carlo.
    """
    rows = [row for row in budget.rows if not _trivial(row)]
    rows.sort(key=lambda row: -abs(row.share))
    return {
        "value": budget.value,
        "unit": budget.unit,
        "standard_uncertainty": budget.standard_uncertainty,
        "degrees_of_freedom": _finite(budget.degrees_of_freedom),
        "coverage_probability": budget.coverage_probability,
        "coverage_factor": budget.coverage_factor,
        "expanded_uncertainty": budget.expanded_uncertainty,
        "rows": [_row(row) for row in rows],
        "monte_carlo": _monte_carlo(budget, model, quantities, seed),
    }


def _trivial(row: BudgetRow) -> bool:
    """A factor of exactly 1 or a term of exactly 0 that nothing is known against."""
    return not row.standard_uncertainty and row.contribution == 0.0 and row.value in (0.0, 1.0)


def _row(row: BudgetRow) -> dict[str, Any]:
    return {
        "quantity": row.name,
        "value": row.value,
        "unit": row.unit,
        "standard_uncertainty": row.standard_uncertainty,
        "distribution": row.distribution if row.standard_uncertainty != 0.0 else "exact",
        "degrees_of_freedom": _finite(row.degrees_of_freedom),
        "sensitivity": row.sensitivity,
        "contribution": row.contribution + 0.0,
        "share": row.share + 0.0,
        "shared_id": row.shared_id,
        "members": list(row.members),
    }


def _monte_carlo(budget: Budget, model: Model, quantities: Sequence[Quantity], seed: int) -> dict[str, Any] | None:
    if budget.standard_uncertainty <= 0.0:
        return None
    exact = {q.name: q.value for q in quantities if q.standard_uncertainty == 0.0}

    def of_uncertain(v: Values) -> Array:
        count = next(iter(v.values())).shape
        return model({**{name: np.full(count, value) for name, value in exact.items()}, **v})

    found = propagate(
        of_uncertain,
        [q for q in quantities if q.name not in exact],
        unit=budget.unit,
        seed=seed,
        largest_trials=LARGEST_TRIALS,
    )
    digits = meaningful_digits(budget.degrees_of_freedom)
    checked = compare(budget, found, significant_digits=digits)
    # the ends of the interval are known to within the noise of so many trials
    noise = budget.standard_uncertainty * math.sqrt(0.025 * 0.975 / found.trials) / _DENSITY_AT_END
    worst = max(checked.difference_low, checked.difference_high)
    low, high = found.symmetric_interval
    given = (budget.value - budget.expanded_uncertainty, budget.value + budget.expanded_uncertainty)
    few = min((row.degrees_of_freedom for row in budget.rows if abs(row.share) > 0.0), default=math.inf)
    return {
        "value": found.value,
        # Student's t with 2 degrees of freedom or fewer has no standard deviation
        "standard_uncertainty": found.standard_uncertainty if few > _NO_VARIANCE else None,
        "coverage_probability": found.coverage_probability,
        "interval": [low, high],
        "given_interval": list(given),
        "width_ratio": (high - low) / (2.0 * budget.expanded_uncertainty),
        "fewest_degrees_of_freedom": _finite(few),
        "trials": found.trials,
        "seed": seed,
        "significant_digits": digits,
        "tolerance": checked.tolerance,
        "noise": noise,
        "agrees": worst <= checked.tolerance + 3.0 * noise,
    }


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None
