"""Control of a figure over time: control chart of a check sample or a lot, and the trend of a calibration.

Times are days (any origin), values in their own unit.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from controller.evaluation.statistics import StatisticsError, mean_of, standard_deviation_of


@dataclass(frozen=True, slots=True, kw_only=True)
class ControlLimits:
    """Centre and standard deviation that a chart is held against; warning at 2, action at 3 standard deviations."""

    centre: float
    standard_deviation: float

    @property
    def warning(self) -> tuple[float, float]:
        """Lower and upper warning limit."""
        return self.centre - 2.0 * self.standard_deviation, self.centre + 2.0 * self.standard_deviation

    @property
    def action(self) -> tuple[float, float]:
        """Lower and upper action limit."""
        return self.centre - 3.0 * self.standard_deviation, self.centre + 3.0 * self.standard_deviation


@dataclass(frozen=True, slots=True, kw_only=True)
class Signal:
    """One sign of an assignable cause: which values (indices, oldest first), whether to act, and the words for it."""

    indices: tuple[int, ...]
    act: bool
    text: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Trend:
    """Straight line through a history: value at the last time, change per day, both with standard uncertainty.

    `significant` when the change differs from 0 at 95 % (Student's t, n - 2 degrees of freedom).
    """

    count: int
    latest: float
    latest_standard_uncertainty: float
    change_per_day: float
    change_standard_uncertainty_per_day: float
    significant: bool

    def days_until(self, limit: float) -> float | None:
        """Days from the last entry until the line meets a limit; None where it does not move, or moves away."""
        if not self.significant:
            return None
        days = (limit - self.latest) / self.change_per_day
        return days if days >= 0.0 else None


def limits_from(history: Sequence[float]) -> ControlLimits:
    """Return limits from a history in control; 10 values give them with a quarter's uncertainty, 20 are usual.

    Raises:
        StatisticsError: fewer than 5 values, or all equal.

    Source: ISO 7870-2 (Shewhart charts), the number 20 as common practice.
    """
    if len(history) < 5:
        what = f"{len(history)} values, allowed: 5 or more"
        raise StatisticsError(what, where="control limits", remedy="Measure the check sample on more days")
    deviation = standard_deviation_of(history)
    if deviation <= 0.0:
        raise StatisticsError("all values are equal", where="control limits", remedy="Enter unrounded values")
    return ControlLimits(centre=mean_of(history), standard_deviation=deviation)


def signals(values: Sequence[float], limits: ControlLimits) -> tuple[Signal, ...]:
    """Return the signs of an assignable cause that concern the last value.

    Rules (Nelson, J. Qual. Technol. 16 (1984) 237, the first, second, third and fifth): one beyond 3 standard
    deviations; nine in a row on one side; six in a row rising or falling; two of three beyond 2 on one side. One
    value beyond 2 is a warning.

    Raises:
        StatisticsError: no value, or one that is not finite.
    """
    mean_of(values)  # refuses what is empty or not finite
    last = len(values) - 1
    scaled = [(value - limits.centre) / limits.standard_deviation for value in values]
    found = []
    if abs(scaled[last]) > 3.0:
        found.append(Signal(indices=(last,), act=True, text="beyond the action limit (3 standard deviations)"))
    elif abs(scaled[last]) > 2.0:
        found.append(Signal(indices=(last,), act=False, text="beyond the warning limit (2 standard deviations)"))
    for sign, side in ((1.0, "above"), (-1.0, "below")):
        beyond = tuple(i for i in range(max(0, last - 2), last + 1) if sign * scaled[i] > 2.0)
        if len(beyond) >= 2 and last in beyond:
            found.append(Signal(indices=beyond, act=True, text=f"two of three {side} the same warning limit"))
        if last >= 8 and all(sign * scaled[i] > 0.0 for i in range(last - 8, last + 1)):
            run = tuple(range(last - 8, last + 1))
            found.append(Signal(indices=run, act=True, text=f"nine in a row {side} the centre"))
    for sign, word in ((1.0, "rising"), (-1.0, "falling")):
        if last >= 5 and all(sign * (scaled[i + 1] - scaled[i]) > 0.0 for i in range(last - 5, last)):
            found.append(Signal(indices=tuple(range(last - 5, last + 1)), act=True, text=f"six in a row {word}"))
    return tuple(found)


def trend(times_days: Sequence[float], values: Sequence[float]) -> Trend:
    """Return the straight line through a history by least squares.

    Raises:
        StatisticsError: fewer than 3 entries, counts that differ, or all at one time.
    """
    from scipy.special import stdtrit

    if len(times_days) != len(values) or len(values) < 3:
        what = f"{len(times_days)} times and {len(values)} values, allowed: 3 or more of each"
        raise StatisticsError(what, where="trend", remedy="Wait for more entries")
    mean_time, mean_value = mean_of(times_days), mean_of(values)
    spread = math.fsum((time - mean_time) ** 2 for time in times_days)
    if spread <= 0.0:
        raise StatisticsError("all entries are of one time", where="trend", remedy="Wait for more entries")
    slope = math.fsum((t - mean_time) * (v - mean_value) for t, v in zip(times_days, values, strict=True)) / spread
    residuals = [v - mean_value - slope * (t - mean_time) for t, v in zip(times_days, values, strict=True)]
    freedom = len(values) - 2
    variance = math.fsum(residual**2 for residual in residuals) / freedom
    slope_uncertainty = math.sqrt(variance / spread)
    since_mean = max(times_days) - mean_time
    return Trend(
        count=len(values),
        latest=mean_value + slope * since_mean,
        latest_standard_uncertainty=math.sqrt(variance * (1.0 / len(values) + since_mean**2 / spread)),
        change_per_day=slope,
        change_standard_uncertainty_per_day=slope_uncertainty,
        # a change lost in the rounding of the values is none
        significant=abs(slope) > float(stdtrit(freedom, 0.975)) * slope_uncertainty
        and abs(slope) * math.sqrt(spread) > 1e-12 * max(abs(value) for value in values),
    )
