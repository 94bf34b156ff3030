"""Propagation of distributions by Monte Carlo, and the check of the GUM's budget against it.

Source: JCGM 101:2008 (GUM Supplement 1). The generator is numpy's, seeded: one seed gives one result.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from controller.evaluation.grouping import Correlation, SharedGroup, blocks_of, correlation_matrix, shared_groups
from controller.evaluation.quantity import Quantity, QuantityError
from controller.evaluation.uncertainty import Budget, Model, evaluate_model

Array = npt.NDArray[np.float64]
#: batches before the spread of their results is believed; two, as in the text of 7.9.4, stop too early by chance
_FEWEST_BATCHES = 10
#: fewer degrees of freedom leave a standard uncertainty known to 10 % or worse
_FREEDOM_FOR_TWO_DIGITS = 50.0
IntervalKind = Literal["shortest", "symmetric"]


@dataclass(frozen=True, slots=True, kw_only=True)
class MonteCarlo:
    """Result of a propagation of distributions, in the unit of the model's result.

    `tolerance` is the numerical tolerance that was asked of it; `converged` is False where the trials ran out first.
    Both coverage intervals hold `coverage_probability` of the trials.
    """

    value: float
    standard_uncertainty: float
    unit: str
    coverage_probability: float
    shortest_interval: tuple[float, float]
    symmetric_interval: tuple[float, float]
    trials: int
    tolerance: float
    converged: bool
    seed: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Comparison:
    """Ends of the GUM's interval against Monte Carlo's; `agrees` when both lie within the numerical tolerance."""

    difference_low: float
    difference_high: float
    tolerance: float
    agrees: bool


def numerical_tolerance(standard_uncertainty: float, significant_digits: int = 2) -> float:
    """Half a unit of the last of the significant digits of a standard uncertainty.

    Raises:
        QuantityError: uncertainty not above 0 or fewer than one digit.

    Source: JCGM 101:2008 7.9.2.
    """
    if not (standard_uncertainty > 0.0 and math.isfinite(standard_uncertainty)) or significant_digits < 1:
        what = f"uncertainty {standard_uncertainty}, {significant_digits} digits"
        raise QuantityError(what, where="numerical tolerance", remedy="Both must be above 0")
    # through the printed form, so that 9.96e-5 with two digits is 1.0e-4
    exponent = int(f"{standard_uncertainty:.{significant_digits - 1}e}".partition("e")[2])
    return 0.5 * math.pow(10.0, exponent - significant_digits + 1)


def propagate(
    model: Model,
    quantities: Sequence[Quantity],
    *,
    unit: str,
    seed: int,
    correlations: Sequence[Correlation] = (),
    coverage_probability: float = 0.95,
    significant_digits: int = 2,
    tolerance_fraction: float = 1.0,
    largest_trials: int = 2_000_000,
) -> MonteCarlo:
    """Propagate distributions in batches until value, uncertainty and interval ends are stable.

    Args:
        model: works on arrays, see `controller.evaluation.uncertainty`.
        quantities: inputs; those of one `shared_id` are drawn together.
        unit: unit of the result.
        seed: of the generator.
        correlations: between normal quantities only (JCGM 101 6.4.8).
        coverage_probability: of the intervals.
        significant_digits: of the standard uncertainty that must be stable.
        tolerance_fraction: 1 for a result; 0.2 where a budget is to be validated strictly (JCGM 101 8.2).
        largest_trials: stop there, `converged` False.

    Raises:
        QuantityError: contradicting inputs, correlated quantities that are not normal, a model that fails.

    Source: JCGM 101:2008 7.9.4 (adaptive procedure), 5.3.4 and 7.7 (coverage intervals), 6.4 (distributions).
    """
    groups = shared_groups(quantities)
    sampler = _Sampler(groups, correlation_matrix(groups, correlations), np.random.default_rng(seed))
    batch = max(math.ceil(100.0 / (1.0 - coverage_probability)), 10_000)
    results: list[Array] = []
    summaries: list[tuple[float, float, float, float]] = []
    variances: list[float] = []
    tolerance, converged = 0.0, False
    while not converged and (len(results) < 2 or batch * (len(results) + 1) <= largest_trials):
        values = evaluate_model(model, sampler.draw(batch))
        results.append(values)
        variances.append(float(np.var(values, ddof=1)))
        summaries.append(
            (float(values.mean()), math.sqrt(variances[-1]), *_symmetric_ends(values, coverage_probability))
        )
        if len(results) < _FEWEST_BATCHES:
            continue
        spread = math.sqrt(math.fsum(variances) / len(variances))
        if spread <= 0.0:
            converged = True
            continue
        tolerance = tolerance_fraction * numerical_tolerance(spread, significant_digits)
        standard_errors = np.std(np.array(summaries), axis=0, ddof=1) / math.sqrt(len(results))
        converged = bool((2.0 * standard_errors <= tolerance).all())
    return _result(
        np.concatenate(results),
        unit=unit,
        probability=coverage_probability,
        tolerance=tolerance,
        converged=converged,
        seed=seed,
    )


def _result(
    values: Array, *, unit: str, probability: float, tolerance: float, converged: bool, seed: int
) -> MonteCarlo:
    ordered = _tails_sorted(values, values.size - _held(values.size, probability))
    return MonteCarlo(
        value=float(values.mean()),
        standard_uncertainty=float(values.std(ddof=1)),
        unit=unit,
        coverage_probability=probability,
        shortest_interval=shortest_interval(ordered, probability),
        symmetric_interval=symmetric_interval(ordered, probability),
        trials=int(values.size),
        tolerance=tolerance,
        converged=converged,
        seed=seed,
    )


def _tails_sorted(values: Array, tail: int) -> Array:
    """Return the values with the `tail` lowest and highest in order: the ends of either interval are among them."""
    if 2 * tail >= values.size:
        return np.sort(values)
    ordered = np.partition(values, (tail - 1, values.size - tail))
    ordered[:tail].sort()
    ordered[-tail:].sort()
    return ordered


def _symmetric_ends(values: Array, probability: float) -> tuple[float, float]:
    """Return the symmetric interval of values in any order; see `symmetric_interval`."""
    held = _held(values.size, probability)
    low = (values.size - held) // 2
    placed = np.partition(values, (low, low + held))
    return float(placed[low]), float(placed[low + held])


def symmetric_interval(ordered: Array, probability: float) -> tuple[float, float]:
    """Return the probabilistically symmetric coverage interval of values with sorted tails, shape (n,).

    Source: JCGM 101:2008 7.7.2.
    """
    held = _held(ordered.size, probability)
    low = (ordered.size - held) // 2
    return float(ordered[low]), float(ordered[low + held])


def shortest_interval(ordered: Array, probability: float) -> tuple[float, float]:
    """Return the shortest coverage interval of values with sorted tails, shape (n,).

    Source: JCGM 101:2008 7.7.3.
    """
    held = _held(ordered.size, probability)
    low = int(np.argmin(ordered[held:] - ordered[: ordered.size - held]))
    return float(ordered[low]), float(ordered[low + held])


def _held(count: int, probability: float) -> int:
    return min(count - 1, math.floor(probability * count + 0.5))


def meaningful_digits(degrees_of_freedom: float) -> int:
    """Return how many digits of a standard uncertainty mean something: 2, or 1 where it is known to 10 % or worse.

    From n observations it is known to 1/sqrt(2 (n - 1)) of itself: 50 % with 2 degrees of freedom, 10 % with 50.

    Source: GUM E.4.3 and table E.1; what counts as meaningful is left to the user by JCGM 101:2008 7.9.2.
    """
    return 2 if degrees_of_freedom >= _FREEDOM_FOR_TWO_DIGITS else 1


def compare(
    gum: Budget, monte_carlo: MonteCarlo, *, interval: IntervalKind = "symmetric", significant_digits: int = 2
) -> Comparison:
    """Compare the GUM's interval, value +- t(effective degrees of freedom) u, with Monte Carlo's, end by end.

    The symmetric interval is the sound one of the two: the shortest one of a nearly symmetric result may lie anywhere
    along a flat minimum and needs ten times the trials for the same numerical tolerance.

    Raises:
        QuantityError: the two have other coverage probabilities.

    Source: JCGM 101:2008 8.1 and 8.2.
    """
    if gum.coverage_probability != monte_carlo.coverage_probability:
        what = f"coverage {gum.coverage_probability} against {monte_carlo.coverage_probability}"
        raise QuantityError(what, where="comparison of budget and Monte Carlo", remedy="Use one probability")
    low, high = monte_carlo.shortest_interval if interval == "shortest" else monte_carlo.symmetric_interval
    tolerance = numerical_tolerance(gum.standard_uncertainty, significant_digits)
    difference_low = abs(gum.value - gum.expanded_uncertainty - low)
    difference_high = abs(gum.value + gum.expanded_uncertainty - high)
    return Comparison(
        difference_low=difference_low,
        difference_high=difference_high,
        tolerance=tolerance,
        agrees=difference_low <= tolerance and difference_high <= tolerance,
    )


class _Sampler:
    """Draws every quantity; correlated blocks as multivariate normal."""

    def __init__(self, groups: Sequence[SharedGroup], matrix: Array, generator: np.random.Generator) -> None:
        self._groups, self._generator = groups, generator
        self._blocks = []
        for block in blocks_of(matrix):
            if len(block) > 1 and any(groups[i].members[0].distribution != "normal" for i in block):
                names = ", ".join(groups[i].name for i in block)
                what = "correlated quantities must be normal for Monte Carlo"
                raise QuantityError(
                    what, where=names, remedy="State a normal distribution, or take the correlation out"
                )
            self._blocks.append((block, _square_root(matrix[np.ix_(block, block)])))

    def draw(self, count: int) -> dict[str, Array]:
        values: dict[str, Array] = {}
        for block, root in self._blocks:
            if len(block) > 1:
                deviates = root @ self._generator.standard_normal((len(block), count))
            else:
                deviates = self._deviates(self._groups[block[0]], count)[np.newaxis, :]
            for index, deviate in zip(block, deviates, strict=True):
                for member in self._groups[index].members:
                    values[member.name] = member.value + member.standard_uncertainty * deviate
        return values

    def _deviates(self, group: SharedGroup, count: int) -> Array:
        """Deviates in units of the standard uncertainty."""
        draw = self._generator
        match group.members[0].distribution:
            case "rectangular":
                return draw.uniform(-math.sqrt(3.0), math.sqrt(3.0), count)
            case "triangular":
                return draw.triangular(-math.sqrt(6.0), 0.0, math.sqrt(6.0), count)
            case "normal" | "student-t":
                # a normal error of which the size is known from few observations (6.4.9.2 and 6.4.9.7)
                freedom = group.degrees_of_freedom
                return draw.standard_t(freedom, count) if math.isfinite(freedom) else draw.standard_normal(count)


def _square_root(matrix: Array) -> Array:
    eigenvalues, vectors = np.linalg.eigh(matrix)
    return np.asarray(vectors * np.sqrt(np.clip(eigenvalues, 0.0, None)), dtype=np.float64)
