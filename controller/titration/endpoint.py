"""Live end points: excess titrant by the model; without a model, a peak of |dE/dV| that stands out of its noise."""

from __future__ import annotations

import itertools
import math
from bisect import bisect_right
from collections.abc import Sequence
from dataclasses import dataclass

from controller.evaluation.inverse import InverseFit
from controller.titration.actions import Report
from controller.titration.plan import RunPlan
from controller.titration.points import Point
from controller.titration.precision import near_ml, pump_precision_ml
from controller.titration.thinning import thinned

EXCESS_OVER_LEFT = 3.0
EXCESS_SDS = 5.0
LARGEST_SD_PRECISIONS = 20.0  # of the pump
POINTS_BEYOND = 2
PEAK_ERRORS = 5.0
PEAK_OVER_BASE = 3.0


@dataclass(frozen=True, slots=True, kw_only=True)
class FoundEndPoint:
    """An end point as detected in the run; the evaluation afterwards has the last word on its volume."""

    number: int
    volume_ml: float
    standard_uncertainty_ml: float
    estimator: str
    ph: float | None
    potential_mv: float | None


def end_point_report(found: FoundEndPoint) -> Report:
    """The report of a detected end point."""
    return Report(
        what="end-point",
        text=f"end point {found.number} at {found.volume_ml:.4f} mL by {found.estimator}",
        volume_ml=found.volume_ml,
        standard_uncertainty_ml=found.standard_uncertainty_ml,
        ph=found.ph,
        potential_mv=found.potential_mv,
        estimator=found.estimator,
        end_point=found.number,
    )


class EndPointWatch:
    """Looks for the next end point after every point; never goes back."""

    def __init__(self, plan: RunPlan) -> None:
        self._smallest_rise_mv = plan.end_points.smallest_rise_mv
        self._dose_sd_ml = plan.pump.dose_sd_ml
        self._precision_ml = pump_precision_ml(plan)
        self._plan = plan
        self._smallest_dose_ml = plan.dosing.smallest_ml
        self.found: list[FoundEndPoint] = []

    def look(self, points: Sequence[Point], sound: InverseFit | None) -> FoundEndPoint | None:
        """The next end point if the points show it now."""
        start_ml = self.found[-1].volume_ml if self.found else -math.inf
        first = bisect_right(points, start_ml, key=lambda p: p.volume_ml)
        section = thinned(points, start=first, near_ml=None if sound is None else sound.equivalence_ml)
        if len(section) < 4:
            return None
        end_point = self._by_model(section, sound) if sound is not None else None
        if end_point is None:
            late = sound is not None and section[-1].volume_ml < sound.equivalence_ml + near_ml(self._plan, sound)
            end_point = None if late else self._by_peak(section)
        if end_point is not None:
            self.found.append(end_point)
        return end_point

    def _by_model(self, section: Sequence[Point], fit: InverseFit) -> FoundEndPoint | None:
        """The last points lie beyond equivalence: excess titrant over 3 x what is left of the analyte.

        Both as titrant volume: V - Veq > 3 (sum_i k_i a^i (W - V_i) + (V0 + V) h/Cb), the same as concentrations
        c_ex = Cb (V - Veq)/(V0 + V) > 3 [protonated analyte + free acid], since both are divided by (V0 + V)/Cb.
        """
        veq, sd = round(fit.equivalence_ml, 6), round(fit.standard_uncertainty_ml, 6)
        if sd >= LARGEST_SD_PRECISIONS * self._precision_ml or section[0].volume_ml >= veq:
            return None
        for point in section[-POINTS_BEYOND:]:
            if point.ph is None:
                return None
            excess = point.volume_ml - veq
            if excess <= EXCESS_SDS * sd or excess <= EXCESS_OVER_LEFT * fit.untitrated_ml(point.ph):
                return None
        if abs(section[-1].potential_mv - section[0].potential_mv) < self._smallest_rise_mv:
            return None
        return FoundEndPoint(
            number=len(self.found) + 1,
            volume_ml=veq,
            standard_uncertainty_ml=sd,
            estimator="inverse model",
            ph=round(fit.ph_at(veq), 4),
            potential_mv=None,
        )

    def _by_peak(self, section: Sequence[Point]) -> FoundEndPoint | None:
        """A peak of |dE/dV|: flanks on both sides under half of it, 5 standard errors, a rise, 3 x the base."""
        points = self._spaced(section)
        if len(points) < 6:
            return None
        slopes, errors, middles = self._slopes(points)
        peak = max(range(len(slopes)), key=lambda i: round(slopes[i], 3))
        height = slopes[peak]
        after = slopes[peak + 1 :]
        before = slopes[:peak]
        if len(after) < 2 or len(before) < 2 or max(after[-2:]) >= 0.5 * height or min(before) >= 0.5 * height:
            return None
        base = max(min(before), min(after))
        if height <= PEAK_OVER_BASE * base or height - base <= PEAK_ERRORS * errors[peak]:
            return None
        low = max((i for i in range(peak) if slopes[i] < 0.5 * height), default=0)
        high = min(i for i in range(peak + 1, len(slopes)) if slopes[i] < 0.5 * height)
        rise = points[high].potential_mv - points[low + 1].potential_mv
        whole = points[-1].potential_mv - points[max(low - 1, 0)].potential_mv
        if abs(whole) < self._smallest_rise_mv or rise * whole <= 0.0:
            return None
        volume = _vertex(middles[peak - 1 : peak + 2], slopes[peak - 1 : peak + 2])
        width = middles[peak + 1] - middles[peak - 1]
        nearest = min(points, key=lambda p: abs(p.volume_ml - volume))
        return FoundEndPoint(
            number=len(self.found) + 1,
            volume_ml=round(volume, 6),
            standard_uncertainty_ml=round(max(width / math.sqrt(48.0), self._dose_sd_ml), 6),
            estimator="inflection",
            ph=nearest.ph,
            potential_mv=round(nearest.potential_mv, 2),
        )

    def _slopes(self, points: Sequence[Point]) -> tuple[list[float], list[float], list[float]]:
        """|dE/dV| between neighbours, its standard error, and the volume half-way."""
        slopes, errors, middles = [], [], []
        for a, b in itertools.pairwise(points):
            dv = b.volume_ml - a.volume_ml
            slope = abs(b.potential_mv - a.potential_mv) / dv
            by_volume = slope * self._dose_sd_ml * math.sqrt(2.0) / dv
            slopes.append(slope)
            errors.append(math.hypot(a.potential_sd_mv / dv, b.potential_sd_mv / dv, by_volume))
            middles.append(0.5 * (a.volume_ml + b.volume_ml))
        return slopes, errors, middles

    def _spaced(self, section: Sequence[Point]) -> list[Point]:
        """Points at least half a smallest dose apart (compositions of a lagging probe may nearly coincide)."""
        out = [section[0]]
        for point in section[1:]:
            if point.volume_ml - out[-1].volume_ml >= 0.5 * self._smallest_dose_ml:
                out.append(point)
        return out


def _vertex(x: Sequence[float], y: Sequence[float]) -> float:
    """Vertex of the parabola through three places; the middle one where there is no maximum inside."""
    d1, d2 = x[1] - x[0], x[1] - x[2]
    a, b = d1 * (y[1] - y[2]), d2 * (y[1] - y[0])
    if a == b:
        return x[1]
    return min(max(x[1] - 0.5 * (d1 * a - d2 * b) / (a - b), x[0]), x[2])
