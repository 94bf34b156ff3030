"""Do both branches of a strong acid (or base) titration tell the same? A check on single points, no estimator.

Before the end point h (V0 + V) = C (Ve - V); as h V = C Ve - C V - V0 h this is linear in C Ve, C and V0, so that the
acid branch alone tells all three, given or not. They predict the branch beyond, point by point.
"""

from __future__ import annotations

import math

import numpy as np

from controller.evaluation.curve import Array, Curve, Mask
from controller.evaluation.noise import signal_noise

_LN10 = math.log(10.0)
#: points in the branch before the end point that decide, at least
_FEWEST_POINTS = 4
#: h of the first points, mol/L, from which a strong acid is looked for
_STRONG_ACID_MOL_L = 0.003
#: no strong-acid branch is straighter than this, units of pH
_MODEL_SD = 0.005
_LARGEST_CHI_SQUARE = 4.0
#: a point further off than this, units of pH, contradicts the other branch
_NOTABLE = 0.05
#: standard deviations that a volume may be off
_VOLUME_SDS = 4.0


def branch_remarks(curve: Curve, end_point_ml: float) -> list[str]:
    """Return a sentence for each point beyond the end point that contradicts the branch before it.

    Args:
        curve: a pH curve with one jump.
        end_point_ml: the jump.

    Returns:
        Nothing where the branch before the end point is not that of a strong acid or base.
    """
    if curve.ph is None:
        return []
    frame = curve.ph if curve.rising else curve.pkw - curve.ph
    before = (curve.volume_ml < end_point_ml) & (frame < curve.pkw / 2.0 - 0.5)
    beyond = (curve.volume_ml > end_point_ml) & (frame > curve.pkw / 2.0 + 0.5)
    h = np.power(10.0, -frame)
    if np.sum(before) < _FEWEST_POINTS or not np.any(beyond) or h[0] < _STRONG_ACID_MOL_L:
        return []
    noise = float(np.hypot(np.mean(signal_noise(curve)), _MODEL_SD))
    solved = _acid_branch(curve.volume_ml[before], h[before], noise)
    if solved is None:
        return []
    c, v0, ve = solved
    excess = c * (curve.volume_ml[beyond] - ve) / (v0 + curve.volume_ml[beyond])
    good = excess > 0.0
    expected = curve.pkw + np.log10(np.where(good, excess, 1.0))
    off = np.where(good, frame[beyond] - expected, 0.0)
    # close to the end point the smallest error of a volume is a large one of the pH
    slack = _VOLUME_SDS / _LN10 * curve.volume_sd[beyond] / np.maximum(curve.volume_ml[beyond] - ve, 1e-9)
    off = np.sign(off) * np.maximum(0.0, np.abs(off) - slack)
    return _sentences(curve, beyond, off if curve.rising else -off)


def _acid_branch(volume: Array, h: Array, noise: float) -> tuple[float, float, float] | None:
    """Return C, V0 and Ve, or None where the points are not those of a strong acid."""
    columns = np.stack([np.ones_like(volume), -volume, -h], axis=1)
    sd = h * np.maximum(volume, 1e-9) * noise * _LN10
    for _ in range(3):
        weight = 1.0 / sd
        solved, _, rank, _ = np.linalg.lstsq(columns * weight[:, None], h * volume * weight, rcond=None)
        if rank < 3 or solved[1] <= 0.0 or solved[2] <= 0.0:
            return None
        sd = h * (solved[2] + volume) * noise * _LN10
    misfit = (columns @ solved - h * volume) / sd
    if float(np.sum(misfit**2)) / max(1, len(h) - 3) > _LARGEST_CHI_SQUARE:
        return None
    return float(solved[1]), float(solved[2]), float(solved[0] / solved[1])


def _sentences(curve: Curve, beyond: Mask, off: Array) -> list[str]:
    assert curve.ph is not None
    if np.all(np.abs(off) <= _NOTABLE):
        return []
    middle = float(np.median(off))
    if len(off) >= 3 and abs(middle) > _NOTABLE and np.all(np.abs(off - middle) <= _NOTABLE):
        return [f"both branches of this strong acid or base disagree by {middle:+.2f} pH: the pH scale is off"]
    volumes, phs = curve.volume_ml[beyond], curve.ph[beyond]
    return [
        f"the point at {volumes[i]:g} mL (pH {phs[i]:.2f}) lies {off[i]:+.2f} pH from what the branch before the end "
        "point makes of it: a wrong reading or entry?"
        for i in np.flatnonzero(np.abs(off) > _NOTABLE)
    ]
