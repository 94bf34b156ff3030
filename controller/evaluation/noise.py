"""Noise of a measured curve, from the curve itself."""

from __future__ import annotations

import math

import numpy as np

from controller.evaluation.curve import Array, Curve

#: median of |x| of a standard normal x
_MEDIAN = 0.6744897501960817
#: median of |x1 - x2| of two normal points, in standard deviations of one
_MEDIAN_STEP = 0.95
#: steps against the curve's direction are noise, not a mishap, from this share on
_REVERSED_SHARE = 0.1
#: a share of lone kinks below this is a smooth curve: what noise there is cannot be told from its curvature
_SMOOTH_SHARE = 0.15


def resolution(values: Array) -> float:
    """Return the last decimal in which `values` are written, 0 where they are not rounded (more than 6 decimals)."""
    for decimals in range(7):
        step = math.pow(10.0, -decimals)
        if np.all(np.abs(values / step - np.round(values / step)) < 1e-6):
            return step
    return 0.0


def signal_noise(curve: Curve) -> Array:
    """Return the standard deviation of each point's signal in units of pH (see `Curve.decades`), shape (n,).

    As stated, else estimated from lone kinks: points off the line through their neighbours, to the other side than
    both neighbours are off theirs. White noise makes them at nearly half of all points, a titration curve itself at
    none. Steps against the curve's direction count as well where they are many. Never below the rounding of the
    values (uniform distribution: last decimal / sqrt 12).
    """
    n = len(curve.volume_ml)
    if curve.signal_sd is not None:
        stated = np.asarray(curve.signal_sd, dtype=float) / curve.unit_per_decade
        return np.broadcast_to(np.maximum(stated, 1e-9), (n,)).copy()
    floor = max(resolution(curve.signal) / math.sqrt(12.0) / curve.unit_per_decade, 1e-6)
    kinks = _from_kinks(curve.volume_ml, curve.decades)
    return np.full(n, max(floor, kinks, _from_reversals(curve.decades, 1.0 if curve.rising else -1.0)))


def _from_kinks(volume_ml: Array, signal: Array) -> float:
    kept = np.concatenate(([True], np.diff(volume_ml) > 0.0)) if len(volume_ml) else np.zeros(0, dtype=bool)
    x, y = volume_ml[kept], signal[kept]
    if len(x) < 6:
        return 0.0
    before, after = x[1:-1] - x[:-2], x[2:] - x[1:-1]
    first, last = after / (before + after), before / (before + after)
    off = (y[1:-1] - first * y[:-2] - last * y[2:]) / np.sqrt(1.0 + first**2 + last**2)
    sides = np.sign(off)
    lone = (sides[1:-1] * sides[:-2] < 0.0) & (sides[1:-1] * sides[2:] < 0.0)
    if np.sum(lone) < 3 or np.mean(lone) < _SMOOTH_SHARE:
        return 0.0
    return float(np.median(np.abs(off[1:-1][lone]))) / _MEDIAN


def _from_reversals(signal: Array, way: float) -> float:
    steps = np.diff(signal) * way
    against = -steps[steps < 0.0]
    if not len(against) or len(against) < _REVERSED_SHARE * len(steps):
        return 0.0
    return float(np.median(against)) / _MEDIAN_STEP
