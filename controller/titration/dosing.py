"""How the next dose is chosen: by the model, by the local slope, or equal volumes.

The promise that no setting may break: doses shrink before a steep region. The model's step is therefore bounded by what
the measured slope and its growth allow, and never reaches over the predicted equivalence in one go.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Protocol

from controller.evaluation.inverse import InverseFit
from controller.titration.plan import Dosing, RunPlan
from controller.titration.points import PhScale, Point
from controller.titration.precision import near_ml

FAR_SHARE = 0.4
FAR_SDS = 3.5
CURVATURE_FACTOR = 4.0
CURVATURE_GROWTH = 3.0


@dataclass(frozen=True, slots=True, kw_only=True)
class PlannedDose:
    """The next dose: volume, the change of potential it should bring (None: not known), and why in words.

    `goal`: what the dose works towards, in words; empty: the equivalence point that the model predicts.
    """

    volume_ml: float
    expected_mv: float | None
    why: str
    goal: str = ""


class DosingPolicy(Protocol):
    """Chooses the next dose."""

    def next_dose(self, points: Sequence[Point], sound: InverseFit | None, delivered_ml: float) -> PlannedDose:
        """The next dose after these points (at least one)."""
        ...


class EqualVolumes:
    """The same volume every time."""

    def __init__(self, dosing: Dosing) -> None:
        self._volume_ml = dosing.equal_volume_ml

    def next_dose(self, points: Sequence[Point], sound: InverseFit | None, delivered_ml: float) -> PlannedDose:
        """See DosingPolicy."""
        expected = local_slope(points) * self._volume_ml if len(points) > 1 else None
        return PlannedDose(volume_ml=self._volume_ml, expected_mv=expected, why="equal volumes")


class SlopeAdaptive:
    """dV = dE/|dE/dV| between a smallest and a largest dose, growing at most by a limit from dose to dose."""

    def __init__(self, dosing: Dosing) -> None:
        self._dosing = dosing
        self._last_ml: float | None = None

    def next_dose(self, points: Sequence[Point], sound: InverseFit | None, delivered_ml: float) -> PlannedDose:
        """See DosingPolicy."""
        d = self._dosing
        if len(points) < 2:
            self._last_ml = d.first_dose_ml
            return PlannedDose(volume_ml=d.first_dose_ml, expected_mv=None, why="first dose")
        slope = round(local_slope(points), 4)
        last = self._last_ml if self._last_ml is not None else d.first_dose_ml
        wanted = d.slope_step_mv / slope if slope > 1e-6 else d.largest_ml
        volume = min(max(min(wanted, d.growth_limit * last), d.smallest_ml), d.largest_ml)
        self._last_ml = volume
        return PlannedDose(volume_ml=volume, expected_mv=slope * volume, why=f"slope {slope:.0f} mV/mL")

    def took(self, volume_ml: float) -> None:
        """Another policy dosed this volume: growth counts from it."""
        self._last_ml = volume_ml


class ModelGuided:
    """Far from the predicted equivalence a share of what remains; near it the step that should give a set change.

    Without a sound model it falls back to the local slope.
    """

    def __init__(self, plan: RunPlan, scale: PhScale) -> None:
        self._plan = plan
        self._dosing = plan.dosing
        self._scale = scale
        self._fallback = SlopeAdaptive(plan.dosing)

    def next_dose(self, points: Sequence[Point], sound: InverseFit | None, delivered_ml: float) -> PlannedDose:
        """See DosingPolicy."""
        if sound is None:
            planned = self._fallback.next_dose(points, None, delivered_ml)
            volume = max(min(planned.volume_ml, curvature_limit_ml(points, self._dosing)), self._dosing.smallest_ml)
            if volume < planned.volume_ml:
                share = volume / planned.volume_ml
                expected = None if planned.expected_mv is None else planned.expected_mv * share
                planned = replace(planned, volume_ml=volume, expected_mv=expected)
                self._fallback.took(volume)
            return planned
        planned = self._by_model(points, sound, delivered_ml)
        self._fallback.took(planned.volume_ml)
        return planned

    def _by_model(self, points: Sequence[Point], fit: InverseFit, delivered_ml: float) -> PlannedDose:
        d = self._dosing
        veq, sd = round(fit.equivalence_ml, 6), round(fit.standard_uncertainty_ml, 6)
        remaining = veq - delivered_ml
        far = min(FAR_SHARE * remaining, remaining - FAR_SDS * sd, d.largest_ml)
        near = near_ml(self._plan, fit)
        if remaining > near and far > d.smallest_ml:
            volume, why = far, "a share of what remains"
        else:
            volume, why = self._near(points, fit, delivered_ml, veq, sd), f"a step of {d.model_step_mv:.0f} mV"
        if abs(remaining) < near:
            volume = min(volume, CURVATURE_FACTOR * curvature_limit_ml(points, d))
        if volume <= d.smallest_ml:
            volume, why = d.smallest_ml, "the smallest dose"
        volume = min(volume, d.largest_ml)
        return PlannedDose(
            volume_ml=volume, expected_mv=self._expected_mv(points[-1], fit, delivered_ml + volume), why=why
        )

    def _near(self, points: Sequence[Point], fit: InverseFit, delivered_ml: float, veq: float, sd: float) -> float:
        """The dose after which the glass should stand `model_step_mv` further (the lag left comes by itself)."""
        d, point = self._dosing, points[-1]
        now_ph = fit.ph_at(point.volume_ml)
        sign = -1.0 if fit.setting.acid_titrant else 1.0
        target_ml = fit.volume_ml(now_ph + sign * d.model_step_mv / self._scale.slope_mv)
        volume = target_ml - delivered_ml
        if delivered_ml + volume > veq:
            volume = min(volume, max(veq - delivered_ml, 0.0) + d.largest_past_equivalence_ml)
        if veq - delivered_ml > d.smallest_ml:  # not over the equivalence in one go
            volume = min(volume, max(veq - delivered_ml + FAR_SDS * sd, d.smallest_ml))
        return max(volume, d.smallest_ml)

    def _expected_mv(self, point: Point, fit: InverseFit, volume_ml: float) -> float:
        ph = fit.ph_at(volume_ml)
        return abs(self._scale.potential_mv(ph) - self._scale.potential_mv(fit.ph_at(point.volume_ml)))


def curvature_limit_ml(points: Sequence[Point], dosing: Dosing) -> float:
    """Dose for one slope step by the measured slope and how it grows; the largest dose where that is not known.

    dV = w/g (exp(g dE) - 1) with w = dV/dE and g = dw/dV = d ln w/dE.
    """
    if len(points) < 3:
        return dosing.largest_ml
    slope, before = local_slope(points), local_slope(points[-3:-1])
    if slope < 1e-6 or before < 1e-6:
        return dosing.largest_ml
    between_mv = abs(points[-1].potential_mv - points[-3].potential_mv) / 2.0
    g = (math.log(before) - math.log(slope)) / max(between_mv, 1.0)
    exponent = min(max(round(g, 6) * dosing.slope_step_mv, -5.0), math.log(CURVATURE_GROWTH))
    factor = math.expm1(exponent) / exponent if abs(exponent) > 1e-9 else 1.0
    return dosing.slope_step_mv / slope * factor


def local_slope(points: Sequence[Point]) -> float:
    """|dE/dV| between the last two points, mV/mL; 0 with fewer than two."""
    if len(points) < 2:
        return 0.0
    a, b = points[-2], points[-1]
    dv = b.volume_ml - a.volume_ml
    return abs(b.potential_mv - a.potential_mv) / dv if dv > 1e-9 else 0.0
