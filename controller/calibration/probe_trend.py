"""From a probe's record: the fast lag that the next run starts from, and whether the probe is getting slower.

Bulk and film time of one run are hard to tell apart; their sum, the fast lag, is not, and is what a trend is held
against. Both belong to one method: how quickly a vessel mixes is no matter of the probe.
"""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations
from statistics import median

from controller.calibration.probe_record import FEWEST_TRANSIENTS, LearnedTimes

#: runs that a later one starts from: not fewer, and the newest of more
FEWEST_RUNS, MOST_RUNS = 3, 8
#: a run farther than this from the median of the runs is left out, robust standard deviations
OUTLYING = 3.0
#: relative standard deviation that a run's fast lag has at least
_LEAST_SD = 0.03
#: a run counts so much against the one after it: a probe that changes is followed
_RECENCY = 0.75
#: how many times as slow a probe may get before it is named, over some runs and in one alone; from 1.35 times its
#: record's on a run gives its result with a wider uncertainty, so that a person is told before
SLOWING, SUDDENLY = 1.2, 1.35
#: runs in the best state on record that the newest ones are held against, and how many of those there are
_REFERENCE, _NEWEST = 5, 3
#: a run can learn a lag up to this many times its record's
FOLLOWED_UP_TO = 3.0
#: newest runs whose pace is looked at
_PACE = 30


@dataclass(frozen=True, slots=True, kw_only=True)
class FastLag:
    """Bulk and film time over several runs, s, with standard uncertainties, and the runs that they come from."""

    bulk_s: float
    bulk_standard_uncertainty_s: float
    film_s: float
    film_standard_uncertainty_s: float
    entries: tuple[LearnedTimes, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Slowing:
    """A probe that got slower: fast lag now and in its best state, s, and when a run could follow it no more.

    `suddenly`: the last run alone shows it.
    """

    method: str
    suddenly: bool
    now_s: float
    best_s: float
    best_from: str
    best_to: str
    followed_until: str | None

    @property
    def ratio(self) -> float:
        """How many times as slow it is."""
        return self.now_s / self.best_s

    @property
    def text(self) -> str:
        """The warning in words, with what to do."""
        until = f"; at this pace no run can follow it after {self.followed_until}" if self.followed_until else ""
        when = self.best_from if self.best_from == self.best_to else f"{self.best_from} to {self.best_to}"
        runs = "run" if self.suddenly else "runs"
        return (
            f"the probe is slowing: in the last {runs} of {self.method} its fast lag was {self.now_s:.1f} s, "
            f"{self.ratio:.1f} times the {self.best_s:.1f} s of {when}{until}; check the stirring; clean the probe as "
            "its maker says and repeat the response check, or replace it"
        )


def fast_lag(entries: Sequence[LearnedTimes], *, method: str, since_utc: str | None = None) -> FastLag | None:
    """Return the weighted mean of a method's newest runs; None where there are too few that nothing speaks against.

    Weights are 1/(u^2 + s^2) in logarithms, s the scatter between the runs (DerSimonian and Laird 1986), times a factor
    that falls with age.

    Args:
        entries: of the probe's record.
        method: of the run to come.
        since_utc: runs before this are left out (the response was measured anew).
    """
    sound = [
        one
        for one in sorted(entries, key=lambda one: (one.utc, one.run))
        if one.method == method and one.doubt is None and (since_utc is None or one.utc > since_utc)
    ][-MOST_RUNS:]
    sound = _together(sound)
    if len(sound) < FEWEST_RUNS:
        return None
    bulk_s, bulk_u = _mean([one.bulk_s for one in sound], [one.bulk_standard_uncertainty_s for one in sound])
    film_s, film_u = _mean([one.film_s for one in sound], [one.film_standard_uncertainty_s for one in sound])
    return FastLag(
        bulk_s=round(bulk_s, 4),
        bulk_standard_uncertainty_s=round(bulk_u, 4),
        film_s=round(film_s, 4),
        film_standard_uncertainty_s=round(film_u, 4),
        entries=tuple(sound),
    )


def slowing(entries: Sequence[LearnedTimes]) -> Slowing | None:
    """Return the worst case of a probe that got slower, by method; None where none did.

    The median of the newest three runs, and the newest by itself with a wider limit, is held against the lowest median
    of five before them; a newest run that is as quick as ever speaks for a probe that was cleaned. Runs in doubt count
    here: a probe that got slow all at once is to be named too.
    """
    usable = [one for one in entries if one.holds and one.transients >= FEWEST_TRANSIENTS and one.sum_s > 0.0]
    found = [
        case
        for method in sorted({one.method for one in usable})
        if (case := _slowing([one for one in usable if one.method == method])) is not None
    ]
    return max(found, key=lambda case: case.ratio, default=None)


def _slowing(entries: list[LearnedTimes]) -> Slowing | None:
    entries = sorted(entries, key=lambda one: (one.utc, one.run))
    before, newest = entries[:-_NEWEST], entries[-_NEWEST:]
    if len(before) < _REFERENCE:
        return None
    stretches = [before[at : at + _REFERENCE] for at in range(len(before) - _REFERENCE + 1)]
    best = min(stretches, key=lambda some: median(one.sum_s for one in some))
    best_s = median(one.sum_s for one in best)
    middle_s, last_s = median(one.sum_s for one in newest), newest[-1].sum_s
    scatter = max(_LEAST_SD, _robust_sd([math.log(one.sum_s) for one in best]))
    for_good = math.log(middle_s / best_s) > max(math.log(SLOWING), OUTLYING * scatter / math.sqrt(_NEWEST))
    suddenly = math.log(last_s / best_s) > max(math.log(SUDDENLY), OUTLYING * scatter)
    if last_s < SLOWING * best_s or not (for_good or suddenly):
        return None
    now_s = middle_s if for_good else last_s
    return Slowing(
        method=newest[-1].method,
        suddenly=not for_good,
        now_s=now_s,
        best_s=best_s,
        best_from=best[0].utc[:10],
        best_to=best[-1].utc[:10],
        followed_until=_followed_until(entries[-_PACE:], now_s=now_s, best_s=best_s),
    )


def _followed_until(entries: Sequence[LearnedTimes], *, now_s: float, best_s: float) -> str | None:
    """The day on which the lag reaches what a run can follow, by the median of slopes (Theil 1950, Sen 1968)."""
    days = [_day(one.utc) for one in entries]
    if any(day is None for day in days):
        return None
    logs = [math.log(one.sum_s) for one in entries]
    dated = [(day, log) for day, log in zip(days, logs, strict=True) if day is not None]
    slopes = [(later[1] - first[1]) / (later[0] - first[0]) for first, later in combinations(dated, 2)
              if later[0] - first[0] >= 1.0]  # fmt: skip
    if len(slopes) < FEWEST_RUNS or (pace := median(slopes)) <= 0.0:
        return None
    left = math.log(FOLLOWED_UP_TO * best_s / now_s) / pace
    if not 0.0 <= left <= 366.0:
        return None
    return dt.date.fromordinal(int(dated[-1][0] + left)).isoformat()


def _day(utc: str) -> float | None:
    try:
        when = dt.datetime.fromisoformat(utc.replace("Z", "+00:00"))
    except ValueError:
        return None
    return when.toordinal() + (when.hour + when.minute / 60.0) / 24.0


def _together(entries: list[LearnedTimes]) -> list[LearnedTimes]:
    """Without those that lie off the others."""
    if len(entries) < FEWEST_RUNS:
        return entries
    logs = [math.log(one.sum_s) for one in entries]
    middle, sd = median(logs), max(_LEAST_SD, _robust_sd(logs))
    return [one for one, log in zip(entries, logs, strict=True) if abs(log - middle) <= OUTLYING * sd]


def _robust_sd(values: Sequence[float]) -> float:
    middle = median(values)
    return 1.4826 * median(abs(value - middle) for value in values)


def _mean(values_s: Sequence[float], uncertainties_s: Sequence[float]) -> tuple[float, float]:
    """Weighted mean and its standard uncertainty, s."""
    logs = [math.log(value) for value in values_s]
    variances = [max(u / value, _LEAST_SD) ** 2 for value, u in zip(values_s, uncertainties_s, strict=True)]
    weights = [1.0 / variance for variance in variances]
    total = math.fsum(weights)
    mean = math.fsum(w * x for w, x in zip(weights, logs, strict=True)) / total
    excess = math.fsum(w * (x - mean) ** 2 for w, x in zip(weights, logs, strict=True)) - (len(logs) - 1)
    between = max(0.0, excess / (total - math.fsum(w * w for w in weights) / total))
    weights = [_RECENCY**age / (variance + between) for age, variance in enumerate(reversed(variances))][::-1]
    total = math.fsum(weights)
    mean = math.fsum(w * x for w, x in zip(weights, logs, strict=True)) / total
    variance = math.fsum(w * w * (one + between) for w, one in zip(weights, variances, strict=True)) / total**2
    return math.exp(mean), math.exp(mean) * math.sqrt(variance)
