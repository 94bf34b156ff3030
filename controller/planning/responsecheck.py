"""The probe's lag from the record of a run with a response check."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from statistics import median
from typing import Any

from controller.calibration.response import Dosing, Hold, Response, ResponseError, fit_response
from controller.titration.forecast import Forecast
from controller.titration.plan import RunPlan
from controller.titration.points import PhScale, Point

#: part of the time asked for that a stretch without a dose must last to be a hold
_HELD = 0.9
#: standard deviation of the curve's shape within a hold, as a part of the pump's precision
_SHAPE = 0.1


def response_of(plan: RunPlan, entries: Iterable[dict[str, Any]]) -> Response:
    """Return the lag that a run's holds show.

    Args:
        plan: of the run; it must have asked for a response check.
        entries: of its record, in order.

    Raises:
        ResponseError: no check, no hold, no sound curve.
    """
    check = plan.response_check
    if check is None:
        raise ResponseError("its plan has no response check", where="run", remedy="Run with --response-check")
    seen = _gathered(entries, check.hold_s)
    if not seen.holds:
        raise ResponseError(
            "no dose was held after just before the end point", where="response check", remedy="Repeat it"
        )
    scale = PhScale(plan, plan.chemistry.temperature_c if seen.temperature_c is None else seen.temperature_c)
    forecast = Forecast(plan, scale)
    forecast.update(_points(seen.points))
    sound = forecast.sound
    if sound is None:
        raise ResponseError("the points make no sound curve", where="response check", remedy="Repeat it")

    def curve(potential_mv: float) -> tuple[float, float]:
        volume_ml, per_mv = sound.volume_and_slope(scale.ph(potential_mv))
        return volume_ml, abs(per_mv)

    return fit_response(
        seen.log,
        seen.holds,
        curve,
        start=plan.probe.response,
        noise_mv=max(_noise_mv(seen.holds), plan.probe.resolution_mv / 12**0.5),
        volume_sd_ml=_SHAPE * plan.pump.position_sd_ml,
    )


def _noise_mv(holds: Sequence[Hold]) -> float:
    """Standard deviation of a reading, from successive differences in the later half of each hold."""
    steps = [
        abs(after - before)
        for hold in holds
        for before, after in pairwise(hold.potential_mv[len(hold.potential_mv) // 2 :])
    ]
    return 1.4826 * median(steps) / 2**0.5 if steps else 0.0


@dataclass(slots=True)
class _Gathered:
    log: list[Dosing] = field(default_factory=list)
    holds: list[Hold] = field(default_factory=list)
    points: list[dict[str, Any]] = field(default_factory=list)
    temperature_c: float | None = None


def _gathered(entries: Iterable[dict[str, Any]], hold_s: float) -> _Gathered:
    found, readings = _Gathered(), list[tuple[float, float]]()
    for entry in entries:
        kind = entry.get("observation") or entry.get("action")
        if kind == "dosed":
            _keep(found, readings, hold_s)
            readings = []
            ended_s = float(entry["at_s"])
            begun = entry.get("started_at_s")
            found.log.append(
                Dosing(
                    began_s=ended_s if begun is None else float(begun),
                    ended_s=ended_s,
                    volume_ml=float(entry["volume_ml"]),
                )
            )
        elif kind == "reading" and entry.get("status", "ok") == "ok":
            readings.append((float(entry["at_s"]), float(entry["potential_mv"])))
            if found.temperature_c is None:
                found.temperature_c = entry.get("temperature_c")
        elif kind == "report" and entry.get("what") == "point" and entry.get("ph") is not None:
            found.points.append(entry)
    return found


def _keep(found: _Gathered, readings: Sequence[tuple[float, float]], hold_s: float) -> None:
    if found.log and readings and readings[-1][0] - found.log[-1].ended_s >= _HELD * hold_s:
        found.holds.append(Hold(at_s=tuple(t for t, _ in readings), potential_mv=tuple(e for _, e in readings)))


def _points(entries: Sequence[dict[str, Any]]) -> list[Point]:
    return [
        Point(
            number=number,
            volume_ml=float(one["volume_ml"]),
            volume_sd_ml=float(one.get("volume_sd_ml") or 0.0),
            delivered_ml=float(one.get("delivered_ml") or one["volume_ml"]),
            potential_mv=float(one["potential_mv"]),
            potential_sd_mv=float(one.get("potential_sd_mv") or 0.0),
            ph=float(one["ph"]),
            at_s=float(one.get("run_s") or 0.0),
            settled=bool(one.get("settled", True)),
        )
        for number, one in enumerate(entries)
    ]
