"""The shape of one jump, fitted as volume against signal: less noise than any difference of two points.

With u = ln 10 x (signal in units of pH) a jump between a reagent that is used up (exponential decay) and one in excess
(exponential growth) is V = a + b u + c exp(u) + d exp(-u), linear in a..d; its inflection is where
c exp(u) = -d exp(-u).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from controller.evaluation.curve import Array, Curve, Mask

#: the part of the jump that is fitted, units of pH to both sides of its steepest interval: the widest that fits
_REACHES = (1.2, 0.9, 0.6)
#: ... within this, units of pH, beside the noise
_SHAPE_SD = 0.001
_LARGEST_CHI_SQUARE = 3.0
_FEWEST_POINTS = 7

_LN10 = math.log(10.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class Jump:
    """The fitted inflection: volume with standard uncertainty in mL, signal in units of pH."""

    volume_ml: float
    standard_uncertainty_ml: float
    signal: float


def fit_jump(
    curve: Curve, signal_sd: Array, *, between_ml: tuple[float, float], around: float, near_ml: float
) -> Jump | None:
    """Return the inflection of the fitted shape, or None where the points are too few or do not follow it.

    Args:
        curve: all points.
        signal_sd: standard deviation of each point's signal, units of pH.
        between_ml: the flat parts on both sides of the jump.
        around: signal in the middle of the steepest interval, units of pH.
        near_ml: middle of the steepest interval.
    """
    for reach in _REACHES:
        inside = (curve.volume_ml >= between_ml[0]) & (curve.volume_ml <= between_ml[1])
        use = inside & (np.abs(curve.decades - around) <= reach)
        if np.sum(use) < _FEWEST_POINTS:
            return None
        if min(np.sum(use & (curve.volume_ml < near_ml)), np.sum(use & (curve.volume_ml > near_ml))) < 2:
            return None
        jump = _fit(curve, signal_sd, use, around=around, near_ml=near_ml, reach=reach)
        if jump is not None:
            return jump
    return None


def _fit(curve: Curve, signal_sd: Array, use: Mask, *, around: float, near_ml: float, reach: float) -> Jump | None:
    way = 1.0 if curve.rising else -1.0
    v, sd_v, sd = curve.volume_ml[use] - near_ml, curve.volume_sd[use], np.hypot(signal_sd[use], _SHAPE_SD) * _LN10
    u = (curve.decades[use] - around) * _LN10 * way
    columns = np.stack([np.ones_like(u), u, np.exp(u), np.exp(-u)], axis=1)
    coefficients = np.linalg.lstsq(columns, v, rcond=None)[0]
    for _ in range(3):
        dv_du = np.maximum(_derivatives(u) @ coefficients, 0.0)
        weight = 1.0 / np.sqrt((dv_du * sd) ** 2 + sd_v**2 + 1e-18)
        design = columns * weight[:, None]
        coefficients = np.linalg.lstsq(design, v * weight, rcond=None)[0]
    chi_square = float(np.sum((design @ coefficients - v * weight) ** 2)) / (len(v) - 4)
    if chi_square > _LARGEST_CHI_SQUARE:
        return None
    covariance = np.linalg.pinv(design.T @ design) * max(1.0, chi_square)
    return _inflection(coefficients, covariance, around=around, near_ml=near_ml, way=way, reach=reach)


def _derivatives(u: Array) -> Array:
    return np.stack([np.zeros_like(u), np.ones_like(u), np.exp(u), -np.exp(-u)], axis=1)


def _inflection(
    coefficients: Array, covariance: Array, *, around: float, near_ml: float, way: float, reach: float
) -> Jump | None:
    _, b, c, d = (float(x) for x in coefficients)
    if c <= 0.0 or d >= 0.0:
        return None
    u = 0.5 * math.log(-d / c)
    slope = b + 2.0 * math.sqrt(-c * d)
    if abs(u) > reach * _LN10 * 0.8 or slope <= 0.0:
        return None
    row = np.array([1.0, u, math.exp(u), math.exp(-u)])
    # the inflection itself moves with c and d: du/dc = -1/(2c), du/dd = 1/(2d), each times dV/du
    gradient = row + slope * np.array([0.0, 0.0, -0.5 / c, 0.5 / d])
    variance = float(gradient @ covariance @ gradient)
    return Jump(
        volume_ml=near_ml + float(row @ coefficients),
        standard_uncertainty_ml=math.sqrt(max(variance, 0.0)),
        signal=around + way * u / _LN10,
    )
