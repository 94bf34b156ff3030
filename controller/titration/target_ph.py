"""Titration to a set pH: where it will be reached, the dose that does not pass it, and when it was reached.

The volume left is predicted by the inverse model where that is sound, from the last point on. What limits every dose is
chemistry that needs no model: a sample takes at least what water alone would take, and no buffering falls faster than
tenfold per unit of pH, so the slope of the last points says how much more titrant there must be at least.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from controller.evaluation.at_ph import estimator_name, volume_at_ph
from controller.evaluation.curve import Curve
from controller.evaluation.inverse import LARGEST_PH, InverseFit
from controller.titration.actions import Report
from controller.titration.dosing import PlannedDose
from controller.titration.endpoint import FoundEndPoint
from controller.titration.exchange import EndOfRunError, Exchange, Talk
from controller.titration.plan import RunPlan
from controller.titration.points import PhScale, Point
from controller.titration.precision import pump_precision_ml

_LN10 = math.log(10.0)
#: a dose takes at most this share of what remains
SHARE = 0.5
#: a dose of the smallest kind need not move pH by less than this
FINE_PH = 0.02
#: points beyond the set pH that end a run, the first of them taken once more
POINTS_BEYOND = 2
#: points that are taken without a dose between them, at most
MOST_LOOKS = 6
#: how far a determination may pass the set pH
ALLOWED_PASS_PH = 0.2
#: the slope of the last points is taken over at least so many precisions of the pump, and so much pH
_SLOPE_PRECISIONS, _SLOPE_PH = 6.0, 0.02
#: why a run ended before its first dose
ALREADY_BEYOND = "the sample lay beyond the end point pH already"
#: a point that lies so far behind one of the last ones is taken again before anything is dosed
_BACK_PH, _BACK_POINTS = 0.1, 4
#: how well the model knows the volume between two points
_MODEL_SHARE = 0.03


@dataclass(frozen=True, slots=True, kw_only=True)
class Ahead:
    """What lies ahead of the last point: volumes mL, counted as everything delivered."""

    least_ml: float  # the set pH is not reached before
    predicted_ml: float | None  # by the model; None: it is not sound
    predicted_sd_ml: float
    model_sd_ml: float  # of that, what the model may be off by
    slope_ml: float  # dV/dpH there, positive


class TargetPh:
    """The set pH of a plan: prediction, doses and end of a run to it.

    Args:
        plan: one with `end_points.at_ph`.
        scale: of the probe.
    """

    def __init__(self, plan: RunPlan, scale: PhScale) -> None:
        assert plan.end_points.at_ph is not None
        self._plan, self._scale = plan, scale
        self.ph = plan.end_points.at_ph
        self._sign = -1.0 if plan.titrant.acid else 1.0
        self._precision_ml = pump_precision_ml(plan)
        self._looks = 0
        self.found: list[FoundEndPoint] = []

    # --- where ---

    def beyond_by(self, ph: float) -> float:
        """How far a pH lies beyond the set one, in the direction of titration."""
        return self._sign * (ph - self.ph)

    def ahead(self, points: Sequence[Point], sound: InverseFit | None) -> Ahead:
        """What lies ahead of the last point."""
        last = points[-1]
        assert last.ph is not None
        short = -self.beyond_by(last.ph)
        fall = 1.0 - math.pow(10.0, -max(short, 0.0))
        now_ml = self._slope_now_ml(points)
        least_ml = last.volume_ml + max(self._water_ml(last), now_ml / _LN10 * fall)
        predicted, slope = self._by_model(last, sound)
        if predicted is None:
            slope = max(now_ml * math.pow(10.0, -max(short, 0.0)), self._water_slope_ml(last))
        between = 0.0 if predicted is None else abs(predicted - last.volume_ml)
        model_sd = _MODEL_SHARE * between
        if sound is not None:
            model_sd = math.hypot(model_sd, min(sound.standard_uncertainty_ml, between))
        return Ahead(
            least_ml=round(least_ml, 7),
            predicted_ml=None if predicted is None else round(predicted, 7),
            predicted_sd_ml=round(math.hypot(model_sd, self._precision_ml), 7),
            model_sd_ml=round(model_sd, 7),
            slope_ml=round(slope, 7),
        )

    def about_ml(self, points: Sequence[Point], sound: InverseFit | None) -> float:
        """The volume about which points must be good."""
        ahead = self.ahead(points, sound)
        return ahead.least_ml if ahead.predicted_ml is None else ahead.predicted_ml

    def _by_model(self, last: Point, sound: InverseFit | None) -> tuple[float | None, float]:
        if sound is None or last.ph is None:
            return None, 0.0
        try:
            there, slope = sound.volume_and_slope(self.ph)
            volume = last.volume_ml + there - sound.volume_ml(last.ph)
        except (ZeroDivisionError, OverflowError):
            return None, 0.0
        slope_ml = abs(slope) * self._scale.slope_mv
        behind = self.beyond_by(last.ph) < 0.0 and volume < last.volume_ml  # it must go up to get there
        good = math.isfinite(volume) and math.isfinite(slope_ml) and abs(volume) < 1e4 and not behind
        return (volume, max(slope_ml, self._water_slope_ml(last))) if good else (None, 0.0)

    def _slope_now_ml(self, points: Sequence[Point]) -> float:
        """DV/dpH at the last point at least, by the points before it; 0 where they do not say."""
        last = points[-1]
        for point in reversed(points[:-1]):
            rise, volume = self._sign * ((last.ph or 0.0) - (point.ph or 0.0)), last.volume_ml - point.volume_ml
            if volume >= _SLOPE_PRECISIONS * self._precision_ml and rise >= _SLOPE_PH:
                return volume * _LN10 / math.expm1(_LN10 * min(rise, 10.0))
        return 0.0

    def _water_ml(self, last: Point) -> float:
        """What water alone takes from the last point on."""
        assert last.ph is not None
        free = self._sign * (self._base_mol_l(self.ph) - self._base_mol_l(last.ph))
        return max(self._volume_ml(last) * free / self._plan.titrant.concentration_mol_l, 0.0)

    def _water_slope_ml(self, last: Point) -> float:
        free = math.pow(10.0, -self.ph) + math.pow(10.0, self.ph - self._plan.chemistry.pkw)
        return _LN10 * self._volume_ml(last) * free / self._plan.titrant.concentration_mol_l

    def _base_mol_l(self, ph: float) -> float:
        ph = min(max(ph, -LARGEST_PH), LARGEST_PH)
        return math.pow(10.0, ph - self._plan.chemistry.pkw) - math.pow(10.0, -ph)

    def _volume_ml(self, last: Point) -> float:
        return self._plan.sample.initial_volume_ml + last.volume_ml

    def begin(self, world: Exchange, points: Sequence[Point]) -> Talk[None]:
        """Say at once where the first point lies beyond the set pH already; nothing is dosed then.

        Raises:
            EndOfRunError: it does.
        """
        ph = points[-1].ph
        if ph is None or self.beyond_by(ph) < 0.0:
            return
        text = f"the sample is at pH {ph:.2f} already, {'below' if self._sign < 0 else 'above'} the end point pH"
        yield from world.warn(f"{text} {self.ph:.2f}: nothing was dosed")
        raise EndOfRunError("completed", ALREADY_BEYOND)

    # --- how much ---

    def next_dose(self, points: Sequence[Point], sound: InverseFit | None, delivered_ml: float) -> PlannedDose:
        """See DosingPolicy; a volume of 0: what was delivered may be enough, look again."""
        d, ahead = self._plan.dosing, self.ahead(points, sound)
        smallest_ml = max(d.smallest_ml, self._plan.pump.step_ml, FINE_PH * ahead.slope_ml)
        smallest_ml = min(smallest_ml, d.largest_ml)
        target_ml = ahead.least_ml if ahead.predicted_ml is None else ahead.predicted_ml
        remaining_ml = target_ml - delivered_ml
        if self._enough(points, remaining_ml):
            self._looks += 1
            return PlannedDose(volume_ml=0.0, expected_mv=None, why="look again", goal="")
        self._looks = 0
        half_ml = SHARE * remaining_ml
        if ahead.predicted_ml is not None:
            half_ml = SHARE * (remaining_ml - ahead.model_sd_ml)
        volume_ml = min(half_ml, d.largest_ml)
        if ahead.predicted_ml is not None:
            volume_ml = min(volume_ml, ahead.least_ml - delivered_ml)
        why = "half of what remains" if volume_ml >= half_ml else "what cannot pass it"
        if volume_ml >= d.largest_ml:
            why = "the largest dose"
        if volume_ml <= smallest_ml:
            volume_ml, why = smallest_ml, "the smallest dose"
        return PlannedDose(volume_ml=volume_ml, expected_mv=None, why=why, goal=self._goal(ahead))

    def _enough(self, points: Sequence[Point], remaining_ml: float) -> bool:
        """Should a point be taken without a dose: beyond already, what is on its way should do, or it went back."""
        if self._looks >= MOST_LOOKS:
            return False
        way = [self.beyond_by(p.ph) for p in points[-_BACK_POINTS:] if p.ph is not None]
        if not way:
            return False
        went_back = way[-1] < max(way) - _BACK_PH  # no titrant does that: a bubble, a knock
        return went_back or way[-1] >= 0.0 or remaining_ml <= 0.0

    def _goal(self, ahead: Ahead) -> str:
        if ahead.predicted_ml is None:
            return f"pH {self.ph:.2f} not before {ahead.least_ml:.4f} mL"
        sd = ahead.predicted_sd_ml
        digits = 3 if sd >= 0.0095 else 4
        return f"pH {self.ph:.2f} predicted at {ahead.predicted_ml:.{digits}f} +/- {sd:.{digits}f} mL"

    def forecast_report(self, points: Sequence[Point], sound: InverseFit) -> Report | None:
        """The report of where the set pH is predicted; None where the model has no volume there."""
        ahead = self.ahead(points, sound)
        if ahead.predicted_ml is None:
            return None
        return Report(
            what="forecast",
            volume_ml=round(ahead.predicted_ml, 6),
            standard_uncertainty_ml=round(ahead.predicted_sd_ml, 6),
            end_point=1,
        )

    # --- when ---

    def look(self, points: Sequence[Point], sound: InverseFit | None) -> FoundEndPoint | None:
        """The end point, once successive points lie beyond the set pH and the last of them settled."""
        newest = points[-POINTS_BEYOND:]
        beyond = [p.ph is not None and self.beyond_by(p.ph) >= 0.0 for p in newest]
        if len(newest) < POINTS_BEYOND or not all(beyond):
            return None
        if not newest[-1].settled and self._looks < MOST_LOOKS:
            return None
        interpolated = volume_at_ph(points_curve(self._plan, points, self._scale), self.ph)
        if interpolated is None:
            return None
        found = FoundEndPoint(
            number=1,
            volume_ml=round(interpolated.volume_ml, 6),
            standard_uncertainty_ml=round(max(interpolated.standard_uncertainty_ml, self._plan.pump.dose_sd_ml), 6),
            estimator=estimator_name(self.ph),
            ph=self.ph,
            potential_mv=round(self._scale.potential_mv(self.ph), 2),
        )
        self.found.append(found)
        return found


def target_of(plan: RunPlan, scale: PhScale) -> TargetPh:
    """The set pH of a plan.

    Raises:
        EndOfRunError: the probe has no calibration, so no pH.
    """
    if not scale.known:
        raise EndOfRunError(
            "stopped",
            f"the end point is pH {plan.end_points.at_ph:.2f}, and the probe has no pH calibration: nothing was dosed",
        )
    return TargetPh(plan, scale)


def points_curve(plan: RunPlan, points: Sequence[Point], scale: PhScale) -> Curve:
    """The last points as a curve for the interpolation.

    Raises:
        CurveError: they make no curve.
    """
    some = points[-60:]
    return Curve(
        volume_ml=np.array([p.volume_ml for p in some]),
        ph=np.array([p.ph for p in some], dtype=np.float64),
        initial_volume_ml=plan.sample.initial_volume_ml,
        titrant_concentration_mol_l=plan.titrant.concentration_mol_l,
        titrant_is_acid=plan.titrant.acid,
        volume_sd_ml=np.array([math.hypot(p.volume_sd_ml, plan.pump.dose_sd_ml) for p in some]),
        signal_sd=np.array([p.potential_sd_mv for p in some]) / scale.slope_mv,
        pkw=plan.chemistry.pkw,
        temperature_c=plan.chemistry.temperature_c,
    )
