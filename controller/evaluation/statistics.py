"""Statistics of replicates: mean and spread, outlier test, pooled spread, weighted mean.

An outlier is reported and never dropped: that is the analyst's decision, with a reason on record.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

from configs.errors import HalfdropError

Side = Literal["highest", "lowest", "either"]


class StatisticsError(HalfdropError):
    """Too few values, values that are not finite, or an uncertainty that is not above 0."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Summary:
    """Replicates in a few numbers, in their own unit; what one value cannot give is None.

    `rsd_percent` is 100 s / |mean|; the confidence interval of the mean is that of Student's t.
    """

    count: int
    mean: float
    standard_deviation: float | None
    rsd_percent: float | None
    standard_error: float | None
    confidence: float
    confidence_low: float | None
    confidence_high: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class GrubbsTest:
    """Grubbs' test of the most distant value: `index` of that value, statistic against critical value."""

    index: int
    value: float
    side: Side
    significance: float
    statistic: float
    critical: float

    @property
    def outlier(self) -> bool:
        """Whether the value is one at the stated significance."""
        return self.statistic > self.critical


@dataclass(frozen=True, slots=True, kw_only=True)
class PooledDeviation:
    """Standard deviation within groups, with its degrees of freedom."""

    standard_deviation: float
    degrees_of_freedom: int


@dataclass(frozen=True, slots=True, kw_only=True)
class WeightedMean:
    """Mean weighted by 1 / u².

    `internal_standard_uncertainty` follows from the stated uncertainties alone, `birge_ratio` = sqrt(chi² / (n - 1))
    tells whether the values scatter as stated (about 1); `standard_uncertainty` is the internal one times the ratio
    where that is above 1, so that unexplained scatter is never hidden.
    """

    count: int
    mean: float
    internal_standard_uncertainty: float
    standard_uncertainty: float
    chi_square: float
    birge_ratio: float | None


def _checked(values: Sequence[float], at_least: int, where: str) -> None:
    if len(values) < at_least:
        what = f"{len(values)} value(s), allowed: {at_least} or more"
        raise StatisticsError(what, where=where, remedy="Measure more replicates")
    for number, value in enumerate(values, start=1):
        if not math.isfinite(value):
            raise StatisticsError(f"value {number} is {value}", where=where, remedy="Give finite numbers")


def mean_of(values: Sequence[float]) -> float:
    """Return the arithmetic mean.

    Raises:
        StatisticsError: no value, or one that is not finite.
    """
    _checked(values, 1, "mean")
    return math.fsum(values) / len(values)


def standard_deviation_of(values: Sequence[float]) -> float:
    """Return the standard deviation of a sample (divisor n - 1).

    Raises:
        StatisticsError: fewer than two values, or one that is not finite.
    """
    _checked(values, 2, "standard deviation")
    mean = mean_of(values)
    return math.sqrt(math.fsum((value - mean) ** 2 for value in values) / (len(values) - 1))


def summarise(values: Sequence[float], *, confidence: float = 0.95) -> Summary:
    """Return mean, standard deviation, relative standard deviation and confidence interval of replicates.

    Args:
        values: one or more results.
        confidence: of the interval, between 0 and 1.

    Raises:
        StatisticsError: no value, one that is not finite, or a confidence outside 0 to 1.
    """
    from scipy.special import stdtrit

    mean, count = mean_of(values), len(values)
    if not 0.0 < confidence < 1.0:
        what = f"confidence is {confidence}, allowed: between 0 and 1"
        raise StatisticsError(what, where="confidence interval", remedy="Usual is 0.95")
    deviation = standard_deviation_of(values) if count > 1 else None
    error = deviation / math.sqrt(count) if deviation is not None else None
    half = float(stdtrit(count - 1, 0.5 + confidence / 2.0)) * error if error is not None else None
    return Summary(
        count=count,
        mean=mean,
        standard_deviation=deviation,
        rsd_percent=100.0 * deviation / abs(mean) if deviation is not None and mean != 0.0 else None,
        standard_error=error,
        confidence=confidence,
        confidence_low=mean - half if half is not None else None,
        confidence_high=mean + half if half is not None else None,
    )


def grubbs_critical(count: int, *, side: Side = "either", significance: float = 0.05) -> float:
    """Return the critical value of Grubbs' statistic |x - mean| / s, from Student's t.

    Args:
        count: number of values, 3 or more.
        side: "highest" or "lowest" where the suspect's side was stated beforehand, "either" otherwise.
        significance: chance of calling a good value an outlier.

    Raises:
        StatisticsError: fewer than 3 values, or a significance outside 0 to 0.5.

    Source: Grubbs, Technometrics 11 (1969) 1; NIST/SEMATECH e-Handbook 1.3.5.17.1.
    """
    from scipy.special import stdtrit

    if count < 3 or not 0.0 < significance < 0.5:
        what = f"{count} values at significance {significance}, allowed: 3 or more, 0 to 0.5"
        raise StatisticsError(what, where="Grubbs' test", remedy="Measure more replicates")
    tail = significance / (2.0 * count if side == "either" else count)
    t_square = float(stdtrit(count - 2, 1.0 - tail)) ** 2
    return (count - 1) / math.sqrt(count) * math.sqrt(t_square / (count - 2 + t_square))


def grubbs(values: Sequence[float], *, side: Side = "either", significance: float = 0.05) -> GrubbsTest | None:
    """Test the most distant value; None where all values are equal.

    Raises:
        StatisticsError: fewer than 3 values, or one that is not finite.
    """
    _checked(values, 3, "Grubbs' test")
    mean, deviation = mean_of(values), standard_deviation_of(values)
    # equal values leave rounding, not a spread
    if deviation <= 1e-14 * max(abs(value) for value in values):
        return None
    sign = {"highest": 1.0, "lowest": -1.0}
    distances = [sign[side] * (x - mean) if side in sign else abs(x - mean) for x in values]
    index = max(range(len(values)), key=distances.__getitem__)
    return GrubbsTest(
        index=index,
        value=values[index],
        side=side,
        significance=significance,
        statistic=distances[index] / deviation,
        critical=grubbs_critical(len(values), side=side, significance=significance),
    )


def pooled_deviation(groups: Sequence[Sequence[float]]) -> PooledDeviation:
    """Return the standard deviation within groups of replicates; groups of one value add nothing.

    Raises:
        StatisticsError: no group of two or more values, or a value that is not finite.
    """
    usable = [group for group in groups if len(group) > 1]
    freedom = sum(len(group) - 1 for group in usable)
    if freedom == 0:
        what = "no group with two or more values"
        raise StatisticsError(what, where="pooled standard deviation", remedy="Measure replicates")
    squares = math.fsum((len(group) - 1) * standard_deviation_of(group) ** 2 for group in usable)
    return PooledDeviation(standard_deviation=math.sqrt(squares / freedom), degrees_of_freedom=freedom)


def weighted_mean(values: Sequence[float], standard_uncertainties: Sequence[float]) -> WeightedMean:
    """Return the mean weighted by 1 / u² of values whose errors are independent.

    Raises:
        StatisticsError: no value, counts that differ, or an uncertainty that is not above 0.

    Source: Birge, Phys. Rev. 40 (1932) 207.
    """
    _checked(values, 1, "weighted mean")
    if len(values) != len(standard_uncertainties):
        what = f"{len(values)} values, {len(standard_uncertainties)} uncertainties"
        raise StatisticsError(what, where="weighted mean", remedy="Give one uncertainty for each value")
    for number, u in enumerate(standard_uncertainties, start=1):
        if not (math.isfinite(u) and u > 0.0):
            what = f"standard uncertainty {number} is {u}, allowed: above 0"
            raise StatisticsError(what, where="weighted mean", remedy="State it")
    weights = [1.0 / u**2 for u in standard_uncertainties]
    total = math.fsum(weights)
    mean = math.fsum(w * x for w, x in zip(weights, values, strict=True)) / total
    chi_square = math.fsum(w * (x - mean) ** 2 for w, x in zip(weights, values, strict=True))
    birge = math.sqrt(chi_square / (len(values) - 1)) if len(values) > 1 else None
    internal = math.sqrt(1.0 / total)
    return WeightedMean(
        count=len(values),
        mean=mean,
        internal_standard_uncertainty=internal,
        standard_uncertainty=internal * max(1.0, birge or 0.0),
        chi_square=chi_square,
        birge_ratio=birge,
    )
