"""How a run gets on, for whoever watches: each entry as it is written, and about how long it still takes."""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass, field
from itertools import pairwise
from statistics import median

from controller.calibration.plans import AnyPlan
from controller.titration.actions import Action, Dosed, Observation, Report
from controller.titration.plan import RunPlan

#: points whose durations the estimate rests on
_RECENT_POINTS = 3
#: share of the remaining volume that a dose far from the end point takes
_FAR_SHARE = 0.4
#: doses of the fine approach and behind the end point, common for a jump
_NEAR_DOSES = 10
_NEAR_ML = 0.3


@dataclass(frozen=True, slots=True, kw_only=True)
class Progress:
    """One entry of the record as it was written.

    `item` is the action or observation, `at_s` run time, `delivered_ml` everything delivered so far, `time_left_s`
    about how long the run still takes (None: no telling yet).
    """

    item: Action | Observation
    at_s: float
    delivered_ml: float
    doses: int
    time_left_s: float | None


@dataclass(slots=True)
class Pace:
    """Estimates the time left from the forecast end point and the time that the last points took."""

    plan: AnyPlan
    _point_at_s: deque[float] = field(default_factory=lambda: deque(maxlen=_RECENT_POINTS + 1))
    _forecast_ml: float | None = None
    _doses_behind: int = 0

    def __post_init__(self) -> None:
        if isinstance(self.plan, RunPlan):
            self._forecast_ml = self.plan.chemistry.expected_equivalence_volume_ml

    def saw(self, item: Action | Observation, at_s: float, delivered_ml: float) -> None:
        """Take in an entry."""
        if isinstance(item, Report):
            if item.what == "point":
                self._point_at_s.append(at_s)
            elif item.what == "forecast" and item.volume_ml is not None:
                self._forecast_ml = item.volume_ml
        elif isinstance(item, Dosed) and self._forecast_ml is not None and delivered_ml > self._forecast_ml:
            self._doses_behind += 1

    def time_left_s(self, at_s: float, delivered_ml: float) -> float | None:
        """Return about how long the run still takes, s; never beyond the method's run time."""
        if self._forecast_ml is None or len(self._point_at_s) < 2:
            return None
        ends_s = list(self._point_at_s)
        each_s = median(later - earlier for earlier, later in pairwise(ends_s))
        ahead_ml = self._forecast_ml - delivered_ml
        far = math.log(ahead_ml / _NEAR_ML) / -math.log(1.0 - _FAR_SHARE) if ahead_ml > _NEAR_ML else 0.0
        near = _NEAR_DOSES * min(1.0, 0.5 + 0.5 * max(0.0, ahead_ml) / _NEAR_ML) - self._doses_behind
        left_s = each_s * (far + max(1.0, near))
        longest_s = self.plan.limits.run_time_s if isinstance(self.plan, RunPlan) else self.plan.vessel.longest_run_s
        return max(0.0, min(left_s, longest_s - at_s))

    def progress(self, item: Action | Observation, at_s: float, delivered_ml: float, doses: int) -> Progress:
        """Take in an entry and return what a watcher is told of it."""
        self.saw(item, at_s, delivered_ml)
        left_s = self.time_left_s(at_s, delivered_ml)
        return Progress(item=item, at_s=at_s, delivered_ml=delivered_ml, doses=doses, time_left_s=left_s)
