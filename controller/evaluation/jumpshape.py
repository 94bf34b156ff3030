"""The shape of one jump, fitted as volume against signal: less noise than any difference of two points.

With u = ln 10 x (signal in units of pH) a jump between a reagent that is used up (exponential decay) and one in excess
(exponential growth) is V = a + b u + c exp(u) + d exp(-u), linear in a..d; its inflection is where c exp(u) = -d exp(-u).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from controller.evaluation.curve import Array, Curve

#: the part of the jump that is fitted, units of pH to both sides of its steepest interval
_REACH = 1.2
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
    volume, signal = curve.volume_ml, curve.decades
    use = (volume >= between_ml[0]) & (volume <= between_ml[1]) & (np.abs(signal - around) <= _REACH)
    sides = (np.sum(use & (volume < near_ml)), np.sum(use & (volume > near_ml)))
    if np.sum(use) < _FEWEST_POINTS or min(sides) < 2:
        return None
    v, sd, sd_v = volume[use] - near_ml, signal_sd[use], curve.volume_sd[use]
    u = (signal[use] - around) * _LN10 * (1.0 if curve.rising else -1.0)
    columns = np.stack([np.ones_like(u), u, np.exp(u), np.exp(-u)], axis=1)
    coefficients = np.linalg.lstsq(columns, v, rcond=None)[0]
    covariance = np.zeros((4, 4))
    for _ in range(3):
        dv_du = np.maximum(_derivatives(u) @ coefficients, 0.0)
        weight = 1.0 / np.sqrt((dv_du * sd * _LN10) ** 2 + sd_v**2 + 1e-18)
        design = columns * weight[:, None]
        coefficients = np.linalg.lstsq(design, v * weight, rcond=None)[0]
        chi_square = float(np.sum((design @ coefficients - v * weight) ** 2)) / (len(v) - 4)
        covariance = np.linalg.pinv(design.T @ design) * max(1.0, chi_square)
    return _inflection(coefficients, covariance, around, near_ml, 1.0 if curve.rising else -1.0)


def _derivatives(u: Array) -> Array:
    return np.stack([np.zeros_like(u), np.ones_like(u), np.exp(u), -np.exp(-u)], axis=1)


def _inflection(coefficients: Array, covariance: Array, around: float, near_ml: float, way: float) -> Jump | None:
    _, b, c, d = (float(x) for x in coefficients)
    if c <= 0.0 or d >= 0.0:
        return None
    u = 0.5 * math.log(-d / c)
    slope = b + 2.0 * math.sqrt(-c * d)
    if abs(u) > _REACH * _LN10 * 0.8 or slope <= 0.0:
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
