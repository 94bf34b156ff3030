"""The numbers behind a report's figures, computed again from the points of the record."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from controller.curves.evaluate_record import curve_of
from controller.evaluation.curve import Array, Curve, Mask
from controller.evaluation.gran import GranLine, gran_before, gran_beyond, hydrogen_and_hydroxide, titrant_used
from controller.evaluation.modelfit import ModelFit, fit_charge_balance
from controller.records.encoding import plan_from_json
from controller.records.record import Record, points

#: volumes nearer than this make no slope between them, mL
_SMALLEST_STEP_ML = 1e-4


@dataclass(frozen=True, slots=True, kw_only=True)
class GranSeries:
    """One Gran line, its function scaled so that it reads as titrant in mL: missing before, over beyond.

    `used` marks the points that the line rests on; the line itself is |volume - intercept_ml|. `end_point` counts
    from 1.
    """

    name: str
    volume_ml: Array
    function_ml: Array
    used: Mask
    intercept_ml: float
    standard_uncertainty_ml: float
    beyond: bool
    end_point: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Series:
    """All that is drawn. Volumes mL; `signal` is pH, or mV where the record has no pH.

    `doses_ml`: cumulative volume after each dose; `slope` at `slope_ml`: |change of signal per mL| between neighbours.
    `missing`: why a figure is not there, by figure ("gran", "residuals").
    """

    curve: Curve
    settled: Mask
    doses_ml: Array
    slope_ml: Array
    slope: Array
    gran: tuple[GranSeries, ...]
    fit: ModelFit | None
    missing: dict[str, str]

    @property
    def unit(self) -> str:
        """What the signal is: "pH" or "mV"."""
        return "pH" if self.curve.ph is not None else "mV"


def series_of(record: Record, end_points_ml: list[float]) -> Series:
    """Return what the figures of a record show.

    Args:
        record: as read.
        end_points_ml: the reported end points, in the order of volume.

    Raises:
        HalfdropError: the record has no points or its plan cannot be read.
    """
    plan = plan_from_json(record.header.get("plan"), where=str(record.path))
    curve = curve_of(plan, record, where=str(record.path))
    slope_ml, slope = _slope(curve)
    fit = fit_charge_balance(curve) if len(curve.volume_ml) >= 5 else None
    gran = _gran(curve, end_points_ml)
    missing = {}
    if not gran:
        missing["gran"] = "No Gran plot: no end point, or too few points on either side of it to make a straight line."
    if fit is None:
        missing["residuals"] = (
            "No residuals: a charge-balance fit needs pH and the constants of the titrated substance, and more points "
            "than free parameters."
        )
    return Series(
        curve=curve,
        settled=_settled(record),
        doses_ml=_doses(record),
        slope_ml=slope_ml,
        slope=slope,
        gran=gran,
        fit=fit,
        missing=missing,
    )


def _settled(record: Record) -> Mask:
    found = [one for one in points(record) if one["volume_ml"] is not None and one["potential_mv"] is not None]
    found.sort(key=lambda one: float(one["volume_ml"]))
    return np.array([bool(one["settled"]) for one in found])


def _doses(record: Record) -> Array:
    return np.cumsum([float(entry["volume_ml"]) for entry in record.of("dosed")])


def _slope(curve: Curve) -> tuple[Array, Array]:
    step = np.diff(curve.volume_ml)
    good = step > _SMALLEST_STEP_ML
    middle = (curve.volume_ml[1:] + curve.volume_ml[:-1]) / 2.0
    return middle[good], np.abs(np.diff(curve.signal)[good] / step[good])


def _gran(curve: Curve, end_points_ml: list[float]) -> tuple[GranSeries, ...]:
    if not end_points_ml:
        return ()
    found = []
    before = [0.0, *end_points_ml[:-1]]
    for number, (previous, end) in enumerate(zip(before, end_points_ml, strict=True), start=1):
        line = gran_before(curve, end_point_ml=end, previous_ml=previous) if end > previous else None
        if line is not None:
            found.append(replace(_before(curve, line, previous, end), end_point=number))
    last = end_points_ml[-1]
    signal = float(np.interp(last, curve.volume_ml, curve.decades))
    line = gran_beyond(curve, end_point_ml=last, signal=signal)
    if line is not None:
        found.append(replace(_beyond(curve, line, last), end_point=len(end_points_ml)))
    return tuple(found)


def _before(curve: Curve, line: GranLine, previous_ml: float, end_ml: float) -> GranSeries:
    way = 1.0 if curve.rising else -1.0
    if line.strong and curve.initial_volume_ml is not None:
        h, oh = hydrogen_and_hydroxide(curve, end_ml)
        volume, function = curve.volume_ml, (curve.initial_volume_ml + curve.volume_ml) * (h - oh) * way
    else:
        used = titrant_used(curve)
        volume = curve.volume_ml if used is None else used
        middle = float(np.median(curve.decades))
        function = (volume - previous_ml) * np.power(10.0, -way * (curve.decades - middle))
    shown = (volume > previous_ml) & (curve.volume_ml <= end_ml)
    return _scaled(curve, line, volume, function, shown, beyond=False)


def _beyond(curve: Curve, line: GranLine, end_ml: float) -> GranSeries:
    way = 1.0 if curve.rising else -1.0
    initial = 50.0 if curve.initial_volume_ml is None else curve.initial_volume_ml
    if curve.ph is not None:
        h, oh = hydrogen_and_hydroxide(curve, end_ml)
        excess = (oh - h) * way
    else:
        excess = np.power(10.0, way * (curve.decades - float(curve.decades[-1])))
    shown = (curve.volume_ml > end_ml) & (excess > 0.0)
    return _scaled(curve, line, curve.volume_ml, (initial + curve.volume_ml) * excess, shown, beyond=True)


def _scaled(curve: Curve, line: GranLine, volume: Array, function: Array, shown: Mask, *, beyond: bool) -> GranSeries:
    """Scale the function by least squares on the line's own points, through its intercept."""
    used = (curve.volume_ml >= line.first_ml) & (curve.volume_ml <= line.last_ml) & shown
    away = np.abs(volume - line.estimate.volume_ml)
    norm = float(np.sum(function[used] ** 2))
    factor = float(np.sum(function[used] * away[used])) / norm if norm > 0.0 else math.nan
    return GranSeries(
        name=line.estimate.estimator,
        volume_ml=volume[shown],
        function_ml=function[shown] * factor,
        used=used[shown],
        intercept_ml=line.estimate.volume_ml,
        standard_uncertainty_ml=line.estimate.standard_uncertainty_ml,
        beyond=beyond,
        end_point=1,
    )
