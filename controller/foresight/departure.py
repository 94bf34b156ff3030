"""The curve of a running titration held against what its plan expects; departures are named while it still helps.

The limits are wide: a sample is only expected, not known, and a false alarm costs trust. One departure of a kind is
told once.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from controller.foresight.expectation import expected_volume_ml, vessel_of_plan
from controller.titration.actions import Action, Observation, Report
from controller.titration.plan import RunPlan
from simulators.solution import titration_curve

#: the first pH may be this far from the expected one, pH: salts of the acid shift it by up to one
_START_LIMIT_PH = 1.5
#: between these shares of the predicted volume pH may be this far from the expected one
_MIDDLE_FROM, _MIDDLE_TO, _MIDDLE_LIMIT_PH = 0.4, 0.6, 1.0
_JUMP_SHARE = 0.1
#: the predicted end point may lie between these shares of the expected volume
_LEAST_SHARE, _MOST_SHARE = 0.5, 1.7
#: after this share of the expected volume pH must have moved by this much, and in the titrant's direction
_MOVED_SHARE, _MOVED_PH = 0.3, 0.05
_WRONG_WAY_PH = 0.3
#: no aqueous sample lies outside
_LOWEST_PH, _HIGHEST_PH = -0.5, 14.5
_GRID = 201


@dataclass(slots=True)
class DepartureWatch:
    """Looks at every report of a run.

    Args:
        plan: of the run; without an expected substance and volume, or without calibration, nothing can be told.
    """

    plan: RunPlan
    expected_ml: float = field(init=False, default=0.0)
    _shares: np.ndarray[tuple[int], np.dtype[np.float64]] = field(init=False)
    _expected_ph: np.ndarray[tuple[int], np.dtype[np.float64]] = field(init=False)
    _end_share: float = 1.0  # of the expected volume, at the end point
    _first_ph: float | None = None
    _predicted_ml: float | None = None
    _told: set[str] = field(default_factory=set)

    @classmethod
    def of(cls, plan: RunPlan) -> DepartureWatch | None:
        """Return a watch, None where the plan expects nothing in particular."""
        chemistry = plan.chemistry
        if plan.probe.calibration is None or chemistry.analyte is None:
            return None
        if chemistry.expected_equivalence_volume_ml is None:
            return None
        return cls(plan)

    def __post_init__(self) -> None:
        plan = self.plan
        self.expected_ml = expected_volume_ml(plan)
        vessel = vessel_of_plan(plan, equivalence_ml=self.expected_ml)
        self._shares = np.linspace(0.0, 1.2, _GRID)
        volumes = (self._shares * self.expected_ml).tolist()
        curve = titration_curve(vessel.sample, vessel.titrant, plan.sample.initial_volume_ml, volumes, vessel.medium)
        self._expected_ph = np.asarray(curve)
        if plan.end_points.at_ph is not None:
            self._end_share = _share_at(self._shares, self._expected_ph, plan.end_points.at_ph)

    def saw(self, item: Action | Observation) -> str | None:
        """Take in an entry; return a departure in words, None where there is none or it was told."""
        if not isinstance(item, Report) or item.volume_ml is None:
            return None
        if item.what == "forecast":
            self._predicted_ml = item.volume_ml
            return self._once("amount", self._amount(item.volume_ml)) if item.end_point == self._last() else None
        if item.what != "point" or item.ph is None:
            return None
        return self._point(item.volume_ml, item.ph)

    def _last(self) -> int:
        return self.plan.end_points.expected

    def _point(self, volume_ml: float, ph: float) -> str | None:
        if self._first_ph is None:
            self._first_ph = ph
        return (
            self._once("probe", self._impossible(ph))
            or self._once("start", self._start(volume_ml, ph))
            or self._once("way", self._way(volume_ml, ph))
            or self._once("middle", self._middle(volume_ml, ph))
        )

    def _once(self, kind: str, text: str | None) -> str | None:
        if text is None or kind in self._told:
            return None
        self._told.add(kind)
        return text

    def _impossible(self, ph: float) -> str | None:
        if _LOWEST_PH <= ph <= _HIGHEST_PH:
            return None
        return f"pH {ph:.1f} is outside anything that water can have: look at the probe, its cable and its calibration"

    def _start(self, volume_ml: float, ph: float) -> str | None:
        expected = float(self._expected_ph[0])
        if volume_ml > 0.0 or abs(ph - expected) <= _START_LIMIT_PH:
            return None
        return (
            f"the sample begins at pH {ph:.2f}, expected was about {expected:.2f}: another sample, or a probe at fault"
        )

    def _way(self, volume_ml: float, ph: float) -> str | None:
        """Which way, and whether at all, pH has moved."""
        assert self._first_ph is not None
        sign = -1.0 if self.plan.titrant.acid else 1.0
        moved = sign * (ph - self._first_ph)
        if moved < -_WRONG_WAY_PH:
            wanted = "fall" if self.plan.titrant.acid else "rise"
            return f"pH should {wanted} and has moved the other way by {-moved:.2f}: another titrant than planned"
        if volume_ml > _MOVED_SHARE * self.expected_ml and abs(moved) < _MOVED_PH:
            return (
                f"{volume_ml:.2f} mL have moved pH by only {moved:.2f}: no titrant in the syringe or none reaching the "
                "vessel, or a probe at fault"
            )
        return None

    def _middle(self, volume_ml: float, ph: float) -> str | None:
        if self._predicted_ml is None or self._predicted_ml <= 0.0:
            return None
        share = volume_ml * self._end_share / self._predicted_ml
        if self._last() != 1 or not _MIDDLE_FROM <= share <= _MIDDLE_TO:
            return None
        expected = float(np.interp(share, self._shares, self._expected_ph))
        if self.plan.end_points.at_ph is not None:  # an earlier jump may lie there, and its place is not known so well
            near = np.interp([share - _JUMP_SHARE, share + _JUMP_SHARE], self._shares, self._expected_ph)
            expected = float(np.clip(ph, near.min(), near.max()))
        if abs(ph - expected) <= _MIDDLE_LIMIT_PH:
            return None
        analyte = self.plan.chemistry.analyte
        return (
            f"half-way pH is {ph:.2f}, {analyte.name if analyte else 'the analyte'} would have about {expected:.2f}: "
            "another substance, or a probe at fault"
        )

    def _amount(self, predicted_ml: float) -> str | None:
        expected_ml = self.expected_ml * self._end_share
        share = predicted_ml / expected_ml
        if _LEAST_SHARE <= share <= _MOST_SHARE:
            return None
        return (
            f"the end point is predicted at {predicted_ml:.2f} mL, expected was about {expected_ml:.2f} mL: "
            "another amount of sample, or a titrant of another strength"
        )


def _share_at(
    shares: np.ndarray[tuple[int], np.dtype[np.float64]], ph: np.ndarray[tuple[int], np.dtype[np.float64]], at_ph: float
) -> float:
    """The share of the expected volume at which the expected curve crosses a pH; 1 where it does not."""
    rising = ph if ph[-1] > ph[0] else -ph
    wanted = at_ph if ph[-1] > ph[0] else -at_ph
    if not rising[0] < wanted < rising[-1]:
        return 1.0
    return float(np.interp(wanted, rising, shares))
