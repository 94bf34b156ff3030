"""How a run gets on, for whoever watches: each entry as it is written, and about how long it still takes."""

from __future__ import annotations

from dataclasses import dataclass, field
from statistics import median

from controller.calibration.plans import AnyPlan
from controller.titration.actions import Action, Dosed, Observation, Report
from controller.titration.plan import RunPlan

#: share of the remaining volume that a dose far from the end point takes
_FAR_SHARE = 0.4
#: points settle longer from here on, as a share of the end point's volume
_NEAR_SHARE = 0.05
#: how much longer they settle there, as long as this run has not shown it, and how many points that guess is worth
_NEAR_TIMES_LONGER, _GUESS_POINTS = 1.8, 6
#: smallest doses at an end point, those that show the excess behind it among them
_DOSES_AT_END_POINT = 5
#: points far from an end point whose time to settle is kept
_RECENT_POINTS = 5
#: the end that is shown follows the estimate by this share, moves by no more than that share of itself, and once so
#: many points are known the time left grows no more than by the last share
_FOLLOWS, _LARGEST_MOVE, _KNOWN_POINTS, _LARGEST_GROWTH = 0.5, 0.15, 5, 0.05


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
    """Estimates when the run ends: the doses left up to the forecast end point, and how long points settle in this run.

    The estimate is made anew at every point; in between the time left runs down, as long as a point usually takes.
    """

    plan: AnyPlan
    _target_ml: float | None = None
    _end_points_after: int = 0
    _doses_behind: int = 0
    _dosed_ml: float = 0.0  # since the last point
    _point_at_s: float | None = None
    _points: int = 0
    _far_s: list[float] = field(default_factory=list)
    _near_s: list[float] = field(default_factory=list)
    _left_s: float | None = None  # at the last point

    def __post_init__(self) -> None:
        if isinstance(self.plan, RunPlan):
            self._target_ml = self.plan.chemistry.expected_equivalence_volume_ml

    def saw(self, item: Action | Observation, at_s: float, delivered_ml: float) -> None:
        """Take in an entry."""
        if not isinstance(self.plan, RunPlan):
            return
        if isinstance(item, Dosed):
            self._dosed_ml += item.volume_ml
            self._doses_behind += self._target_ml is not None and delivered_ml > self._target_ml
        elif isinstance(item, Report):
            if item.what == "forecast" and item.volume_ml is not None:
                self._forecast(self.plan, item.volume_ml, item.end_point or 1)
            elif item.what == "point":
                self._point(self.plan, at_s, delivered_ml)

    def time_left_s(self, at_s: float, delivered_ml: float) -> float | None:
        """Return about how long the run still takes, s; never beyond the method's run time."""
        if self._left_s is None or self._point_at_s is None or not isinstance(self.plan, RunPlan):
            return None
        passed_s = min(at_s - self._point_at_s, self._near())  # a point that takes longer than others holds it
        least_s = 0.5 * self._far()  # it goes on, so there is something left
        return max(0.0, min(max(self._left_s - passed_s, least_s), self.plan.limits.run_time_s - at_s))

    def progress(self, item: Action | Observation, at_s: float, delivered_ml: float, doses: int) -> Progress:
        """Take in an entry and return what a watcher is told of it."""
        self.saw(item, at_s, delivered_ml)
        left_s = self.time_left_s(at_s, delivered_ml)
        return Progress(item=item, at_s=at_s, delivered_ml=delivered_ml, doses=doses, time_left_s=left_s)

    def _forecast(self, plan: RunPlan, volume_ml: float, end_point: int) -> None:
        """Take over where an end point is predicted; of those after it only the plan's expectation is known."""
        self._end_points_after = max(0, plan.end_points.expected - end_point)
        if not self._end_points_after:
            self._target_ml = volume_ml
        else:
            planned_ml = plan.chemistry.expected_equivalence_volume_ml
            others_ml = volume_ml * plan.end_points.expected / end_point if planned_ml is None else planned_ml
            self._target_ml = max(volume_ml, others_ml)

    def _point(self, plan: RunPlan, at_s: float, delivered_ml: float) -> None:
        shown_s = self.time_left_s(at_s, delivered_ml)
        if self._point_at_s is not None:
            settled_s = max(0.0, at_s - self._point_at_s - self._dosed_ml * 60.0 / plan.pump.rate_ml_min)
            target_ml = self._target_ml
            near = target_ml is not None and abs(target_ml - delivered_ml) < _NEAR_SHARE * target_ml
            (self._near_s if near else self._far_s).append(settled_s)
        self._point_at_s, self._dosed_ml = at_s, 0.0
        self._points += 1
        if self._target_ml is not None and (self._far_s or self._near_s):
            estimate_s = self._estimate_s(plan, self._target_ml, delivered_ml)
            self._left_s = estimate_s if shown_s is None else self._smoothed_s(at_s, shown_s, estimate_s)

    def _far(self) -> float:
        return median((self._far_s or self._near_s)[-_RECENT_POINTS:])

    def _near(self) -> float:
        guess_s = _NEAR_TIMES_LONGER * self._far()
        return (_GUESS_POINTS * guess_s + sum(self._near_s)) / (_GUESS_POINTS + len(self._near_s))

    def _estimate_s(self, plan: RunPlan, target_ml: float, delivered_ml: float) -> float:
        """Go through the doses that are left: a share of what remains each, down to the smallest."""
        dosing, far_s, near_s = plan.dosing, self._far(), self._near()
        largest_ml = min(dosing.largest_ml, plan.vessel.largest_dose_ml)
        remaining_ml, left_s = target_ml - delivered_ml, 0.0
        pushed_ml = max(0.0, remaining_ml)
        while remaining_ml > dosing.smallest_ml:
            left_s += near_s if remaining_ml < _NEAR_SHARE * target_ml else far_s
            remaining_ml -= max(dosing.smallest_ml, min(largest_ml, _FAR_SHARE * remaining_ml))
        left_s += far_s * max(1, _DOSES_AT_END_POINT - self._doses_behind)
        left_s += near_s * 2 * _DOSES_AT_END_POINT * self._end_points_after
        if not plan.end_points.stop_at_last:
            left_s += far_s * plan.limits.overrun_ml / dosing.largest_past_equivalence_ml
        return left_s + pushed_ml * 60.0 / plan.pump.rate_ml_min

    def _smoothed_s(self, at_s: float, shown_s: float, estimate_s: float) -> float:
        """Return the time left that is shown next: it follows the estimate without jumps of the end."""
        most_s = _LARGEST_MOVE * (at_s + shown_s)
        left_s = shown_s + max(-most_s, min(most_s, _FOLLOWS * (estimate_s - shown_s)))
        return left_s if self._points <= _KNOWN_POINTS else min(left_s, shown_s * (1.0 + _LARGEST_GROWTH))
