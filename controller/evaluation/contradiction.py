"""Are these the points of one acid or base at all? Points that none could give carry no result."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import numpy.typing as npt

from controller.evaluation.curve import Array, Curve
from controller.evaluation.modelfit import ModelFit, Priors, fit_charge_balance

#: share of the points that may lie anywhere: a bubble spoils some and leaves the others true
STRAY_SHARE = 0.13
FEWEST_STRAYS = 2
SIDE_BY_SIDE = 1.2
_STRAY_SDS = 6.0
#: reduced chi-square of the others (robust); 120 runs without a mishap showed at most 0.9, those with one that left
#: the result true up to 2.2
LARGEST_OF_STATED, LARGEST_OF_ANY = 3.0, 2.5
#: constants of an acid or base that is not the stated one
_ANY_PKA: tuple[tuple[float, ...], ...] = ((4.8,), (3.5, 6.5))
_ANY = Priors(pka_sd=3.0)
FEWEST_POINTS = 9


def believed(curve: Curve, fit: ModelFit, *, allowed: float = 1.0) -> ModelFit | None:
    """Return the fit that describes the points: of the stated substance, else of one with constants of its own.

    Args:
        curve: the points.
        fit: of this curve, with the stated substance.
        allowed: how many times the usual limit is allowed to the stated substance, where a known cause spreads points.

    Returns:
        None where the points are those of no acid or base with one or two constants.
    """
    if len(curve.volume_ml) < FEWEST_POINTS or misfit(fit) <= LARGEST_OF_STATED * allowed:
        return fit
    for pka in _ANY_PKA:
        free = replace(curve, pka=pka, charge=0, counter_ion_charge=0)
        other = fit_charge_balance(free, priors=_ANY)
        if other is not None and misfit(other) <= LARGEST_OF_ANY:
            return other
    return None


def misfit(fit: ModelFit) -> float:
    """Return the robust reduced chi-square of the points, the worst of them left out.

    Many that lie off side by side are not the worst of a true curve: with them left in it must not be much larger.
    """
    residual = np.asarray(fit.residual_ml) / np.asarray(fit.residual_sd_ml)
    off = np.sort(np.abs(residual))
    kept = off[: len(off) - max(FEWEST_STRAYS, math.ceil(STRAY_SHARE * len(off)))]
    return max(_reduced(kept), _reduced(residual[~strays(residual)]) / SIDE_BY_SIDE)


def _reduced(residual: Array) -> float:
    return float(np.sum(2.0 * (np.sqrt(1.0 + residual**2) - 1.0))) / max(1, len(residual) - 3)


def strays(residual: Array) -> npt.NDArray[np.bool_]:
    """Return which points lie off all others: blocks of few, with true ones before and after.

    A block that reaches the first or last point is none: there, what changed may have changed for good.
    """
    off = np.abs(residual) > _STRAY_SDS
    found = np.zeros(len(off), dtype=np.bool_)
    most = max(FEWEST_STRAYS, math.ceil(STRAY_SHARE * len(off)))
    begin: int | None = None
    for i, is_off in enumerate(off):
        if is_off and begin is None:
            begin = i
        elif not is_off and begin is not None:
            if begin > 0 and i - begin <= most:
                found[begin:i] = True
            begin = None
    return found
