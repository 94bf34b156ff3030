"""End points from the curve's shape alone: where the signal is steepest.

No chemistry is assumed; the result is an inflection, which is the equivalence point only where the jump is symmetrical.
Signals are in units of pH (a potential divided by R T ln 10 / F), so that one set of limits serves both.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from controller.evaluation.curve import Array, Curve
from controller.evaluation.jumpshape import fit_jump
from controller.evaluation.noise import signal_noise

#: neighbouring points are averaged until they differ by this many standard deviations: slopes then carry 12 % noise
_GROUP_SD = 12.0
#: a jump's slope stands out by this many standard errors above the flatter parts on both sides
_SIGNIFICANCE = 5.0
#: ... and these are flatter than this share of it: a shoulder or the first rise of a weak acid is no end point
_BASE_SHARE = 0.5
#: a shoulder is remarked upon when it is this clear
_SHOULDER_SHARE, _SHOULDER_SIGNIFICANCE = 0.75, 10.0
#: ... and the signal changes at least by this between them, units of pH (30 mV)
SMALLEST_RISE = 0.5


@dataclass(frozen=True, slots=True, kw_only=True)
class Inflection:
    """One jump. Volumes in mL, `signal` and `rise` in units of pH, `slope` in units of pH per mL.

    `contrast`: the peak slope over that of the steeper flank.
    """

    volume_ml: float
    standard_uncertainty_ml: float
    signal: float
    steepest_ml: float
    steepest_uncertainty_ml: float
    from_ml: float
    to_ml: float
    rise: float
    contrast: float
    slope: float
    method: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Slopes:
    """Points averaged as far as the noise asks (`volume_ml`, `signal`, `sd`) and the slopes between them.

    `slope` (counted positive in the curve's own direction) belongs to `middle_ml`, with standard error `slope_se`.
    """

    volume_ml: Array
    signal: Array
    sd: Array
    middle_ml: Array
    slope: Array
    slope_se: Array


def slopes(curve: Curve, *, group_sd: float = _GROUP_SD) -> Slopes:
    """Return the curve's first derivative by differences between neighbouring (averaged) points."""
    volume, signal, sd = _grouped(curve.volume_ml, curve.decades, signal_noise(curve), group_sd)
    widths = np.diff(volume)
    steps = np.diff(signal) * (1.0 if curve.rising else -1.0)
    volume_sd = float(np.mean(curve.volume_sd)) if len(volume) else 0.0
    return Slopes(
        volume_ml=volume,
        signal=signal,
        sd=sd,
        middle_ml=(volume[1:] + volume[:-1]) / 2.0,
        slope=steps / widths,
        slope_se=np.hypot(np.hypot(sd[1:], sd[:-1]), steps / widths * math.sqrt(2.0) * volume_sd) / widths,
    )


def _grouped(volume: Array, signal: Array, sd: Array, group_sd: float) -> tuple[Array, Array, Array]:
    """Average runs of points whose signals are alike within the noise; points of one volume always."""
    starts = [0] if len(volume) else []
    for i in range(1, len(volume)):
        start = starts[-1]
        apart = abs(signal[i] - signal[start]) >= group_sd * sd[i]
        if volume[i] > volume[i - 1] and (apart or _steps_away(volume, signal, sd, i, group_sd)):
            starts.append(i)
    bounds = [*starts, len(volume)]
    runs = [slice(a, b) for a, b in pairwise(bounds)]
    counts = np.array([r.stop - r.start for r in runs], dtype=float)
    return (
        np.array([np.mean(volume[r]) for r in runs]),
        np.array([np.mean(signal[r]) for r in runs]),
        np.array([np.mean(sd[r]) for r in runs]) / np.sqrt(counts),
    )


def _steps_away(volume: Array, signal: Array, sd: Array, i: int, group_sd: float) -> bool:
    """Is the next volume's point far off already? Then point i stands alone: the jump keeps its own points."""
    following = i + 1
    while following < len(volume) and volume[following] <= volume[i]:
        following += 1
    if following == len(volume):
        return False
    return bool(abs(signal[following] - signal[i]) >= group_sd * sd[i])


def find_inflections(curve: Curve, *, smallest_rise: float = SMALLEST_RISE) -> tuple[list[Inflection], list[str]]:
    """Return the end points that the shape shows, in the order of volume, and remarks on what was not counted.

    A peak of the slope counts when the slope falls below half of it on both sides within the data, stands out from
    both sides by 5 standard errors, and the signal changes by `smallest_rise` (units of pH) between the flat parts.
    """
    s = slopes(curve)
    found: list[Inflection] = []
    remarks: list[str] = []
    for j in range(len(s.slope)):
        if not _is_peak(s.slope, j):
            continue
        left, right = _flank(s, j, -1), _flank(s, j, +1)
        if left is None or right is None:
            continue
        peak = float(s.slope[j])
        base_at = left if s.slope[left] > s.slope[right] else right
        base = float(s.slope[base_at])
        stands_out = all(
            peak - s.slope[k] >= _SIGNIFICANCE * math.hypot(float(s.slope_se[j]), float(s.slope_se[k]))
            for k in (left, right)
        )
        clearly = peak - base >= _SHOULDER_SIGNIFICANCE * float(s.slope_se[j])
        rise = abs(float(s.signal[right] - s.signal[left + 1])) if right > left + 1 else 0.0
        if not stands_out or rise < smallest_rise:
            continue
        if base > _BASE_SHARE * peak:
            if clearly and base < _SHOULDER_SHARE * peak:
                remarks.append(
                    f"the curve steepens near {s.middle_ml[j]:.4g} mL, but the slope does not fall to half of it on "
                    "both sides: a shoulder, not counted as an end point"
                )
            continue
        found.append(_located(curve, s, j, flanks=(left, right), contrast=peak / max(base, 1e-12), rise=rise))
    return found, remarks


def inflection_at(curve: Curve, near_ml: float, *, within: float = 0.03) -> Inflection | None:
    """Return the steepest place near a volume where an end point is known to be (a run detected it).

    A run may stop so soon after its end point, or dose so finely, that the slope alone does not stand out of the pump's
    error; None where fewer than four points are at hand or none is near.
    """
    s = slopes(curve)
    near = [j for j in range(1, len(s.slope) - 1) if abs(float(s.middle_ml[j]) - near_ml) <= within * near_ml]
    if not near:
        return None
    j = max(near, key=lambda i: float(s.slope[i]))
    if not s.slope[j] > 0.0:
        return None
    left = int(np.argmin(s.slope[:j]))
    right = j + 1 + int(np.argmin(s.slope[j + 1 :]))
    base = max(float(s.slope[left]), float(s.slope[right]), 1e-12)
    rise = abs(float(s.signal[right] - s.signal[left + 1]))
    return _located(curve, s, j, flanks=(left, right), contrast=float(s.slope[j]) / base, rise=rise)


def _is_peak(slope: Array, j: int) -> bool:
    return bool(0 < j < len(slope) - 1 and slope[j] > slope[j - 1] and slope[j] >= slope[j + 1] and slope[j] > 0.0)


def _flank(s: Slopes, j: int, way: int) -> int | None:
    """Return where the slope is surely least between peak j and the next higher peak (or the end of the data)."""
    surely = s.slope + 2.0 * s.slope_se
    lowest, k = None, j + way
    while 0 <= k < len(surely) and s.slope[k] <= s.slope[j]:
        if lowest is None or surely[k] < surely[lowest]:
            lowest = k
        k += way
    return lowest


def _located(curve: Curve, s: Slopes, j: int, *, flanks: tuple[int, int], contrast: float, rise: float) -> Inflection:
    width = float(s.volume_ml[j + 1] - s.volume_ml[j])
    sd_v = float(np.mean(curve.volume_sd)) if len(curve.volume_sd) else 0.0
    volume, signal, uncertainty = _second_derivative_zero(s, j)
    uncertainty = math.hypot(uncertainty, sd_v)
    method = "second-derivative zero"
    inside = (float(s.volume_ml[flanks[0]]), float(s.volume_ml[flanks[1] + 1]))
    middle = (float(s.signal[j]) + float(s.signal[j + 1])) / 2.0
    jump = fit_jump(curve, signal_noise(curve), between_ml=inside, around=middle, near_ml=float(s.middle_ml[j]))
    if jump is not None and jump.standard_uncertainty_ml < uncertainty:
        volume, signal, uncertainty = jump.volume_ml, jump.signal, jump.standard_uncertainty_ml
        method = "second-derivative zero of the jump's fitted shape"
    return Inflection(
        volume_ml=volume,
        standard_uncertainty_ml=uncertainty,
        signal=signal,
        steepest_ml=float(s.middle_ml[j]),
        steepest_uncertainty_ml=math.hypot(width / math.sqrt(12.0), sd_v),
        from_ml=inside[0],
        to_ml=inside[1],
        rise=rise,
        contrast=contrast,
        slope=float(s.slope[j]),
        method=method,
    )


def _second_derivative_zero(s: Slopes, j: int) -> tuple[float, float, float]:
    """Return volume, signal and standard uncertainty of the second derivative's zero beside slope peak j.

    Differences are placed at the middle of what they span and the zero is interpolated linearly, as textbooks do by
    hand. The uncertainty joins the noise carried through and the step: rectangular over the steepest interval
    (width / sqrt 12), less as the neighbouring slopes come up to the steepest one, and how far the zero lies from the
    middle of the part that is steeper than half the peak (as a rectangular half-width): a lopsided peak.
    """
    near = slice(j - 1, j + 3)
    volume, signal = s.volume_ml[near], s.signal[near]
    way = 1.0 if signal[-1] >= signal[0] else -1.0
    zero = _zero(volume, signal * way)
    noise = 0.0
    for i in range(4):
        shifted = signal * way
        shifted[i] += s.sd[near][i]
        noise += (_zero(volume, shifted) - zero) ** 2
    shape = 1.0 - float(s.slope[j - 1] + s.slope[j + 1]) / (2.0 * float(s.slope[j]))
    width = float(volume[2] - volume[1])
    step = width / math.sqrt(12.0) * min(1.0, max(shape, 0.1))
    noise = min(math.sqrt(noise), float(volume[3] - volume[0]) / math.sqrt(12.0))
    lopsided = (zero - _middle_of_steep_part(s, j)) / math.sqrt(3.0)
    return zero, float(np.interp(zero, volume, signal)), math.hypot(step, noise, lopsided)


def _middle_of_steep_part(s: Slopes, j: int) -> float:
    first = last = j
    while first > 0 and s.slope[first - 1] >= s.slope[j] / 2.0:
        first -= 1
    while last < len(s.slope) - 1 and s.slope[last + 1] >= s.slope[j] / 2.0:
        last += 1
    return float(s.volume_ml[first] + s.volume_ml[last + 1]) / 2.0


def _zero(volume: Array, signal: Array) -> float:
    """Return where the second derivative of four points changes sign, held inside them."""
    middle = (volume[1:] + volume[:-1]) / 2.0
    second = np.diff(np.diff(signal) / np.diff(volume)) / np.diff(middle)
    at = (middle[1:] + middle[:-1]) / 2.0
    if second[0] - second[1] <= 0.0:
        return float(middle[1])
    zero = at[0] + (at[1] - at[0]) * second[0] / (second[0] - second[1])
    return float(min(max(zero, volume[1] - (volume[1] - volume[0]) / 2.0), volume[2] + (volume[3] - volume[2]) / 2.0))
