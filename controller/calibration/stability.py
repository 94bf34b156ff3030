"""A reading in a buffer: stable, with its mean and uncertainty, or not within the time allowed.

Stable: over the window the straight line through the readings drifts less than the limit, and so it does between the
means of both halves; and the readings scatter less than their limit.
"""

from __future__ import annotations

import math
from collections.abc import Generator, Sequence
from dataclasses import dataclass

import numpy as np

from controller.calibration.plans import Stability
from controller.titration.actions import Action, Command, Failed, Observation, Read, Reading, Refused, Wait

#: readings of the window that count as the settled potential
_MEAN_OF_LAST_S = 10.0
#: within this of the settled potential the probe has answered, mV (0.02 pH)
ANSWERED_MV = 1.2
#: readings further apart than this have a pause between them, s
LONGEST_GAP_S = 30.0
#: failed readings in a row after which the buffer is given up
MOST_FAILED = 10


@dataclass(frozen=True, slots=True, kw_only=True)
class Stable:
    """An accepted reading: mean potential with standard uncertainty, temperature, drift, and how long it took.

    `response_s`: time after which every reading lay within 1.2 mV (0.02 pH) of the mean.
    """

    potential_mv: float
    standard_uncertainty_mv: float
    temperature_c: float | None
    drift_mv_min: float
    waited_s: float
    response_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class NotStable:
    """Why no reading was accepted; `stopped`: by the operator or for safety."""

    reason: str
    stopped: bool = False


def read_until_stable(
    rule: Stability, interval_s: float, resolution_mv: float
) -> Generator[Action, Observation | None, Stable | NotStable]:
    """Read the probe until it is stable.

    Yields:
        Read and Wait actions.
    """
    readings: list[Reading] = []
    failed, began_s = 0, None
    while True:
        seen = yield Read()
        if isinstance(seen, Command) and seen.name == "stop":
            return NotStable(reason=seen.text or "stopped", stopped=True)
        if isinstance(seen, Refused):
            return NotStable(reason=seen.what, stopped=True)
        good = isinstance(seen, Reading) and seen.status == "ok" and math.isfinite(seen.potential_mv)
        if good and isinstance(seen, Reading):
            failed, began_s = 0, seen.at_s if began_s is None else began_s
            if readings and seen.at_s - readings[-1].at_s > LONGEST_GAP_S:
                readings.clear()  # a pause: what was read before says nothing of the drift now
            readings.append(seen)
            found = _judged(readings, rule, resolution_mv)
            if found is not None:
                return found
            if seen.at_s - readings[0].at_s >= rule.longest_s:
                return NotStable(reason=_why_not(_window(readings, rule.window_s), rule))
        elif not isinstance(seen, Command):
            failed += 1
            if failed >= MOST_FAILED:
                what = seen.what if isinstance(seen, Failed) else "no good reading"
                return NotStable(reason=f"{failed} readings in a row failed: {what}")
        waited = yield Wait(seconds=interval_s)
        if isinstance(waited, Command) and waited.name == "stop":
            return NotStable(reason=waited.text or "stopped", stopped=True)
        if isinstance(waited, Refused):
            return NotStable(reason=waited.what, stopped=True)


def _why_not(window: Sequence[Reading], rule: Stability) -> str:
    scatter = _scatter_mv(window)
    if scatter > rule.largest_scatter_mv:
        return (
            f"after {rule.longest_s:g} s the reading still scatters by {scatter:.1f} mV, allowed: "
            f"{rule.largest_scatter_mv:g} mV; look at plug, cable and screen"
        )
    return (
        f"after {rule.longest_s:g} s the reading still drifts by {_drift_mv_min(window):+.1f} mV/min, allowed: "
        f"{rule.limit_mv_min:g} mV/min"
    )


def _window(readings: Sequence[Reading], window_s: float) -> list[Reading]:
    last_s = readings[-1].at_s
    return [one for one in readings if last_s - one.at_s <= window_s]


def _judged(readings: Sequence[Reading], rule: Stability, resolution_mv: float) -> Stable | None:
    if readings[-1].at_s - readings[0].at_s < rule.window_s:
        return None
    window = _window(readings, rule.window_s)
    if len(window) < 6:
        return None
    if _scatter_mv(window) > rule.largest_scatter_mv:
        return None
    drift = _drift_mv_min(window)
    values = np.array([one.potential_mv for one in window])
    half = len(values) // 2
    between_min = rule.window_s / 120.0
    halves = abs(float(values[half:].mean() - values[:half].mean())) / between_min
    if abs(drift) > rule.limit_mv_min or halves > rule.limit_mv_min:
        return None
    last = [one for one in window if window[-1].at_s - one.at_s <= _MEAN_OF_LAST_S]
    settled = np.array([one.potential_mv for one in last])
    scatter = float(settled.std(ddof=1)) / math.sqrt(len(settled)) if len(settled) > 1 else 0.0
    mean = float(settled.mean())
    warm = [one.temperature_c for one in last if one.temperature_c is not None]
    late = [one.at_s for one in readings if abs(one.potential_mv - mean) > ANSWERED_MV]
    return Stable(
        potential_mv=mean,
        standard_uncertainty_mv=math.hypot(scatter, resolution_mv / math.sqrt(12.0)),
        temperature_c=sum(warm) / len(warm) if warm else None,
        drift_mv_min=drift,
        waited_s=readings[-1].at_s - readings[0].at_s,
        response_s=late[-1] - readings[0].at_s if late else 0.0,
    )


def _drift_mv_min(window: Sequence[Reading]) -> float:
    times = np.array([one.at_s for one in window])
    values = np.array([one.potential_mv for one in window])
    times = times - times.mean()
    return 60.0 * float(times @ (values - values.mean())) / float(times @ times)


def _scatter_mv(window: Sequence[Reading]) -> float:
    """Standard deviation of a reading, from successive differences: drift is no scatter."""
    values = np.array([one.potential_mv for one in window])
    return float(np.sqrt(np.mean(np.diff(values) ** 2) / 2.0)) if len(values) > 1 else 0.0
