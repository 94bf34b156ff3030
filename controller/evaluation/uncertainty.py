"""Uncertainty budget of a measurement model by the GUM's law of propagation (JCGM 100:2008).

A model is a plain function of named values: `model({"m": ..., "V": ...})`. The values are arrays of shape (n,) and the
result has the same shape, so that one function serves the budget (a few points) and the Monte Carlo (many). Functions
that know scalars only are adapted by `elementwise`.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from controller.evaluation.grouping import Correlation, SharedGroup, blocks_of, correlation_matrix, shared_groups
from controller.evaluation.quantity import Distribution, Quantity, QuantityError

Array = npt.NDArray[np.float64]
Values = Mapping[str, Array]
Model = Callable[[Values], Array]

#: the model is differenced at this fraction of each standard uncertainty, and at half of it (Richardson)
_STEP_OF_UNCERTAINTY = 0.25
#: step relative to the value where a quantity has no uncertainty
_STEP_OF_VALUE = 1e-4
#: differences below this many rounding errors of the result are no sensitivity but rounding
_ROUNDING_ERRORS = 32.0


@dataclass(frozen=True, slots=True, kw_only=True)
class BudgetRow:
    """One row of the table; quantities that share a cause make one row.

    `value`, `standard_uncertainty` and `sensitivity` are None where the members of a shared row differ. `contribution`
    is signed (sensitivity times standard uncertainty), in the result's unit; `share` is the part of the variance, its
    correlations included: the shares sum to 1, one alone may be negative.
    """

    name: str
    members: tuple[str, ...]
    value: float | None
    standard_uncertainty: float | None
    unit: str
    distribution: Distribution
    degrees_of_freedom: float
    sensitivity: float | None
    contribution: float
    share: float
    shared_id: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Budget:
    """Result of a model with its uncertainty; value, uncertainties and contributions in `unit`."""

    value: float
    unit: str
    standard_uncertainty: float
    degrees_of_freedom: float
    coverage_probability: float
    coverage_factor: float
    expanded_uncertainty: float
    rows: tuple[BudgetRow, ...]

    @property
    def relative_standard_uncertainty(self) -> float | None:
        """Standard uncertainty / |value|; None for a value of 0."""
        return self.standard_uncertainty / abs(self.value) if self.value != 0.0 else None

    def row(self, name: str) -> BudgetRow:
        """Return the row of this name or with this member.

        Raises:
            KeyError: no such row.
        """
        for row in self.rows:
            if row.name == name or name in row.members:
                return row
        raise KeyError(name)


def elementwise(function: Callable[[Mapping[str, float]], float]) -> Model:
    """Return a model from a function of plain numbers (slower: one call per point)."""

    def model(values: Values) -> Array:
        names = list(values)
        rows = zip(*(values[name] for name in names), strict=True)
        return np.array([function(dict(zip(names, map(float, row), strict=True))) for row in rows], dtype=np.float64)

    return model


def evaluate_model(model: Model, values: Values) -> Array:
    """Return the model's results, shape (n,).

    Raises:
        QuantityError: the model returned another shape or a number that is not finite.
    """
    count = next(iter(values.values())).shape[0]
    result = np.asarray(model(values), dtype=np.float64)
    if result.ndim == 0:
        result = np.full(count, float(result))
    if result.shape != (count,):
        what = f"the model returned shape {result.shape} for {count} points"
        raise QuantityError(what, where="measurement model", remedy="Let it work point by point on arrays")
    if not bool(np.isfinite(result).all()):
        what = "the model gives no finite number within the uncertainty of its inputs"
        raise QuantityError(what, where="measurement model", remedy="Look for a divisor or logarithm near 0")
    return result


def _step(quantity: Quantity) -> float:
    if quantity.standard_uncertainty > 0.0:
        return _STEP_OF_UNCERTAINTY * quantity.standard_uncertainty
    return _STEP_OF_VALUE * (abs(quantity.value) or 1.0)


def _contributions(
    model: Model, quantities: Sequence[Quantity], groups: Sequence[SharedGroup]
) -> tuple[float, Array, Array]:
    """Value, contribution of each group, and change per unit step (sensitivity of the first member).

    Central differences at a quarter and an eighth of the standard uncertainty with one Richardson step: exact for a
    model of the fourth degree; rounding stays below 1e-11 of the value for relative uncertainties down to 1e-5.
    """
    multiples = (1.0, -1.0, 0.5, -0.5)
    count = 1 + len(multiples) * len(groups)
    values = {quantity.name: np.full(count, quantity.value) for quantity in quantities}
    for index, group in enumerate(groups):
        for offset, multiple in enumerate(multiples):
            for member in group.members:
                values[member.name][1 + 4 * index + offset] += multiple * _step(member)
    results = evaluate_model(model, values)
    value = float(results[0])
    differenced = results[1:].reshape(len(groups), 4)
    wide = _difference(differenced[:, 0], differenced[:, 1]) / 2.0
    narrow = _difference(differenced[:, 2], differenced[:, 3])
    per_step = (4.0 * narrow - wide) / 3.0
    steps = np.array([_step(group.members[0]) for group in groups])
    uncertainties = np.array([group.members[0].standard_uncertainty for group in groups])
    sensitivity = per_step / steps
    return value, sensitivity * uncertainties, sensitivity


def _difference(above: Array, below: Array) -> Array:
    difference = above - below
    rounding = _ROUNDING_ERRORS * np.finfo(np.float64).eps * np.maximum(np.abs(above), np.abs(below))
    return np.where(np.abs(difference) <= rounding, 0.0, difference)


def effective_degrees_of_freedom(contributions: Sequence[float], degrees_of_freedom: Sequence[float]) -> float:
    """Effective degrees of freedom of a sum of independent contributions; infinite where all are.

    Source: Welch-Satterthwaite formula, GUM G.4.1.
    """
    variance = math.fsum(contribution**2 for contribution in contributions)
    denominator = math.fsum(c**4 / nu for c, nu in zip(contributions, degrees_of_freedom, strict=True))
    return variance**2 / denominator if denominator > 0.0 else math.inf


def coverage_factor(degrees_of_freedom: float, coverage_probability: float = 0.95) -> float:
    """Coverage factor of Student's t for a two-sided probability; degrees of freedom are cut to a whole number.

    Below 1 degree of freedom there is no useful t: 1 is taken.

    Raises:
        QuantityError: probability outside 0 to 1.

    Source: GUM G.4.1 and table G.2.
    """
    from scipy.special import ndtri, stdtrit

    if not 0.0 < coverage_probability < 1.0:
        what = f"coverage probability is {coverage_probability}, allowed: between 0 and 1"
        raise QuantityError(what, where="coverage factor", remedy="Usual is 0.95")
    upper = 0.5 + coverage_probability / 2.0
    if degrees_of_freedom > 1e6:
        return float(ndtri(upper))
    # the formula rounds: 9.9999999 degrees of freedom are 10
    return float(stdtrit(max(1.0, math.floor(degrees_of_freedom * (1.0 + 1e-9))), upper))


def budget(
    model: Model,
    quantities: Sequence[Quantity],
    *,
    unit: str,
    correlations: Sequence[Correlation] = (),
    coverage_probability: float = 0.95,
) -> Budget:
    """Return value, standard and expanded uncertainty of a model, with the table of contributions.

    Degrees of freedom of correlated quantities: the GUM has no rule; a block of them counts as one contribution with
    the smallest of its degrees of freedom.

    Raises:
        QuantityError: names twice, contradicting shares or correlations, or a model that fails near its inputs.

    Source: JCGM 100:2008, 5.1.2, 5.2.2, annex G.
    """
    groups = shared_groups(quantities)
    matrix = correlation_matrix(groups, correlations)
    value, contributions, sensitivities = _contributions(model, quantities, groups)
    parts = contributions * (matrix @ contributions)
    # fsum: cancelling parts must leave an exact zero
    variance = max(0.0, math.fsum(map(float, parts)))
    blocks = blocks_of(matrix)
    block_contributions = [math.sqrt(max(0.0, math.fsum(float(parts[i]) for i in block))) for block in blocks]
    block_freedom = [min(groups[i].degrees_of_freedom for i in block) for block in blocks]
    freedom = effective_degrees_of_freedom(block_contributions, block_freedom)
    factor = coverage_factor(freedom, coverage_probability)
    rows = tuple(
        _row(group, float(contribution), float(sensitivity), float(part) / variance if variance > 0.0 else 0.0)
        for group, contribution, sensitivity, part in zip(groups, contributions, sensitivities, parts, strict=True)
    )
    return Budget(
        value=value,
        unit=unit,
        standard_uncertainty=math.sqrt(variance),
        degrees_of_freedom=freedom,
        coverage_probability=coverage_probability,
        coverage_factor=factor,
        expanded_uncertainty=factor * math.sqrt(variance),
        rows=rows,
    )


def _row(group: SharedGroup, contribution: float, sensitivity: float, share: float) -> BudgetRow:
    first = group.members[0]
    same_value = all(member.value == first.value for member in group.members)
    same_uncertainty = all(member.standard_uncertainty == first.standard_uncertainty for member in group.members)
    return BudgetRow(
        name=group.name,
        members=tuple(member.name for member in group.members),
        value=first.value if same_value else None,
        standard_uncertainty=first.standard_uncertainty if same_uncertainty else None,
        unit=first.unit,
        distribution=first.distribution,
        degrees_of_freedom=group.degrees_of_freedom,
        sensitivity=sensitivity if same_uncertainty else None,
        contribution=contribution,
        share=share,
        shared_id=first.shared_id,
    )
