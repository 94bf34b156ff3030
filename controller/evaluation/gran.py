"""Gran's straight lines on both sides of an end point.

Beyond it the excess of titrant grows in proportion, (V0 + V) x (excess) = C (V - Ve); before it a weak acid follows
(W - Vp) h = K (Ve - W), with Vp the end point before (0 for the first) and W the titrant used by the substance (V
corrected for free H+ and OH-), and a strong one (V0 + V) (h - oh) = C (Ve - V). An acid titrant is the mirror image.
Regressed as volume on the function, weighted by what the signal's and the volume's noise mean in mL.

Source: G. Gran, Analyst 77 (1952) 661; water terms and weights: common practice.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from controller.evaluation.curve import Array, Curve, Mask
from controller.evaluation.estimate import GRAN_BEFORE, GRAN_BEYOND, Estimate
from controller.evaluation.noise import signal_noise
from simulators.activity import davies_term

_LN10 = math.log(10.0)
_FEWEST_POINTS = 3
#: of more points than this only a part is taken, evenly
_MOST_POINTS = 300
#: distance from the jump's middle from which the excess of titrant may be alone, units of pH
_CLEAR_OF_JUMP = 0.8
#: the part of the way to the end point that the line before it may use
_BEFORE_FROM, _BEFORE_TO = 0.3, 0.97
#: fewer points than this cannot show whether the weights are right
_FEWEST_FOR_WEIGHTS = 5
#: no line is better than this share of its end point (probe slope, activity, dilution)
_MODEL_SHARE = 5e-4
#: where the initial volume is not given: what a probe and a stirrer need at least, and a usual volume, mL
_SMALLEST_INITIAL_ML, _USUAL_INITIAL_ML = 20.0, 50.0
#: ... allowed while the choice moves the end point by less than this share
_LARGEST_DILUTION_SHARE = 0.005
#: a misfit larger than this (reduced chi-square) is no noise
_LARGEST_CHI_SQUARE = 4.0
#: titrant used over titrant needed, all along, that tells a strong acid or base
_STRONG_SHARE = 0.9
#: no signal is modelled better than this, units of pH
_MODEL_SD = 0.001


@dataclass(frozen=True, slots=True, kw_only=True)
class GranLine:
    """A fitted line: `estimate` of the end point, the line's slope, and what moves when half of its points go.

    `intercept_shift_ml` is the intercept of the half nearest the end point less that of the whole line: a straight
    line gives none beyond its noise. `strong` tells the form used before the end point.
    """

    estimate: Estimate
    slope: float
    correlation: float
    intercept_shift_ml: float
    first_ml: float
    last_ml: float
    strong: bool | None = None


def activity_coefficient(curve: Curve, titrant_ml: float) -> float:
    """Davies coefficient of H+ and OH- at the salt that `titrant_ml` makes; 1 without activity correction."""
    a, v0, c = curve.debye_huckel_a, curve.initial_volume_ml, curve.titrant_concentration_mol_l
    if a is None or v0 is None or c is None:
        return 1.0
    salt_ml = max(0.0, titrant_ml)  # below 0: no end point is known
    return math.pow(10.0, -a * davies_term(c * salt_ml / (v0 + salt_ml)))


def hydrogen_and_hydroxide(curve: Curve, titrant_ml: float) -> tuple[Array, Array]:
    """Return [H+] and [OH-] in mol/L at each point of a pH curve; shapes (n,)."""
    assert curve.ph is not None
    gamma = activity_coefficient(curve, titrant_ml)
    return np.power(10.0, -curve.ph) / gamma, np.power(10.0, curve.ph - curve.pkw) / gamma


def gran_beyond(curve: Curve, *, end_point_ml: float, signal: float) -> GranLine | None:
    """Fit the excess of titrant beyond an end point.

    Where the initial volume is not given it is taken as 50 mL, between 20 mL and very much, as long as that choice
    moves the end point by less than 0.5 % (small titrant volumes); the range enters the uncertainty.

    Args:
        curve: all points; of a potential only relative concentrations are used, so no calibration is needed.
        end_point_ml: the end point as the curve's shape gives it.
        signal: signal there, units of pH.
    """
    if curve.initial_volume_ml is not None:
        return _beyond(curve, curve.initial_volume_ml, end_point_ml, signal)
    usual = _beyond(curve, _USUAL_INITIAL_ML, end_point_ml, signal)
    small = _beyond(curve, _SMALLEST_INITIAL_ML, end_point_ml, signal)
    large = _beyond(curve, 1e6, end_point_ml, signal)
    if usual is None or small is None or large is None:
        return None
    spread = abs(small.estimate.volume_ml - large.estimate.volume_ml) / math.sqrt(12.0)
    if spread > _LARGEST_DILUTION_SHARE * usual.estimate.volume_ml:
        return None
    remark = (
        f"the initial volume is not given; {_USUAL_INITIAL_ML:g} mL is taken for the dilution, and what "
        f"{_SMALLEST_INITIAL_ML:g} mL or very much would change ({spread:.2g} mL) is in the uncertainty"
    )
    total = math.hypot(usual.estimate.standard_uncertainty_ml, spread)
    return replace(usual, estimate=replace(usual.estimate, standard_uncertainty_ml=total, remark=remark))


def _beyond(curve: Curve, initial_volume_ml: float, end_point_ml: float, signal: float) -> GranLine | None:
    way = 1.0 if curve.rising else -1.0
    use = (curve.volume_ml > end_point_ml) & (way * (curve.decades - signal) >= _CLEAR_OF_JUMP)
    if np.sum(use) < _FEWEST_POINTS:
        return None
    if curve.ph is not None:
        h, oh = hydrogen_and_hydroxide(curve, end_point_ml)
        excess = (oh - h) * way
    else:
        excess = np.power(10.0, way * (curve.decades - float(curve.decades[use][-1])))
    function = (initial_volume_ml + curve.volume_ml) * excess
    return _line(curve, curve.volume_ml, function, use, name=GRAN_BEYOND, far_first=True)


def gran_before(curve: Curve, *, end_point_ml: float, previous_ml: float = 0.0) -> GranLine | None:
    """Fit the line before an end point: the strong form where free H+ (or OH-) carries the titrant, else the weak one.

    The weak form works without initial volume and concentration, but then takes V for W. Needs pH.
    """
    way = 1.0 if curve.rising else -1.0
    used = titrant_used(curve)
    span = end_point_ml - previous_ml
    share = (curve.volume_ml - previous_ml) / span
    use = (share > _BEFORE_FROM) & (share < _BEFORE_TO)
    if np.sum(use) < _FEWEST_POINTS:
        return None
    if curve.ph is None:
        return None
    # a strong acid is dissociated from the start: its "used" titrant is all of it
    strong = bool(used is not None and np.median((used[use] - previous_ml) / span) > _STRONG_SHARE)
    if strong and curve.initial_volume_ml is not None:
        h, oh = hydrogen_and_hydroxide(curve, end_point_ml)
        function = (curve.initial_volume_ml + curve.volume_ml) * (h - oh) * way
        return _line(curve, curve.volume_ml, function, use, name=GRAN_BEFORE, far_first=False, strong=True)
    amount = curve.volume_ml if used is None else used
    function = (amount - previous_ml) * np.power(10.0, -way * (curve.decades - float(np.median(curve.decades[use]))))
    return _line(curve, amount, function, use, name=GRAN_BEFORE, far_first=False, strong=False)


def titrant_used(curve: Curve) -> Array | None:
    """Return the titrant in mL that the substance has used at each point: V less what makes up free H+ and OH-.

    W = V + (V0 + V) (h - oh) / C for a base as titrant, with the other sign for an acid; None where V0 or C is unknown.
    """
    v0, c = curve.initial_volume_ml, curve.titrant_concentration_mol_l
    if v0 is None or c is None or curve.ph is None:
        return None
    h, oh = hydrogen_and_hydroxide(curve, float(curve.volume_ml[-1]) / 2.0)
    way = 1.0 if curve.rising else -1.0
    return np.asarray(curve.volume_ml + way * (v0 + curve.volume_ml) * (h - oh) / c)


def _line(
    curve: Curve, volume: Array, function: Array, use: Mask, *, name: str, far_first: bool, strong: bool | None = None
) -> GranLine | None:
    """Take points from the far end of `use` inwards until two in a row do not lie on the line of the others."""
    order = np.flatnonzero(use & np.isfinite(function) & (function > 0.0))
    order = order[::-1] if far_first else order
    order = order[:: 1 + len(order) // _MOST_POINTS]
    noise = np.hypot(signal_noise(curve), _MODEL_SD) * _LN10
    taken = list(order[:_FEWEST_POINTS])
    if len(taken) < _FEWEST_POINTS:
        return None
    fit = _fit(curve, volume, function, noise, np.array(taken))
    skipped = 0
    for i in order[_FEWEST_POINTS:]:
        if fit is None or skipped == 2:
            break
        if abs(fit.predict(float(function[i])) - volume[i]) > 3.0 * fit.spread(float(function[i]), noise[i]):
            skipped += 1
            continue
        skipped = 0
        taken.append(i)
        fit = _fit(curve, volume, function, noise, np.array(taken))
    if fit is None:
        return None
    x, y = function[taken], volume[taken]
    if len(x) < _FEWEST_FOR_WEIGHTS or fit.chi_square > _LARGEST_CHI_SQUARE:
        fit = _plain(x, y, fit)
    shift = 0.0
    if len(taken) >= 2 * _FEWEST_POINTS:
        half = _fit(curve, volume, function, noise, np.array(taken[len(taken) // 2 :]))
        shift = 0.0 if half is None else half.intercept_ml - fit.intercept_ml
    uncertainty = math.hypot(math.sqrt(float(fit.covariance[0, 0])), shift, _MODEL_SHARE * fit.intercept_ml)
    estimate = Estimate(
        estimator=name,
        volume_ml=fit.intercept_ml,
        standard_uncertainty_ml=uncertainty,
        points=len(taken),
        bias_ml=shift,
    )
    return GranLine(
        estimate=estimate,
        slope=fit.slope,
        correlation=float(np.corrcoef(x, y)[0, 1]) if np.ptp(x) > 0.0 and np.ptp(y) > 0.0 else 0.0,
        intercept_shift_ml=shift,
        first_ml=float(np.min(curve.volume_ml[taken])),
        last_ml=float(np.max(curve.volume_ml[taken])),
        strong=strong,
    )


@dataclass(frozen=True, slots=True)
class _Fit:
    intercept_ml: float
    slope: float
    covariance: Array
    volume_sd_ml: float
    chi_square: float

    def predict(self, function: float) -> float:
        return self.intercept_ml + self.slope * function

    def spread(self, function: float, noise: float) -> float:
        row = np.array([1.0, function])
        own = math.hypot(self.volume_sd_ml, self.slope * function * noise)
        return math.hypot(own, math.sqrt(max(0.0, float(row @ self.covariance @ row))))


def _fit(curve: Curve, volume: Array, function: Array, noise: Array, taken: Array) -> _Fit | None:
    x, y = function[taken], volume[taken]
    design = np.stack([np.ones_like(x), x], axis=1)
    volume_sd = float(np.mean(curve.volume_sd)) if len(curve.volume_sd) else 0.0
    coefficients = np.linalg.lstsq(design, y, rcond=None)[0]
    for _ in range(3):
        sd = np.hypot(np.abs(coefficients[1] * x) * noise[taken], volume_sd) + 1e-12
        weighted = design / sd[:, None]
        coefficients = np.linalg.lstsq(weighted, y / sd, rcond=None)[0]
    normal = weighted.T @ weighted
    if not np.all(np.isfinite(normal)) or np.linalg.cond(normal) > 1e15 or coefficients[1] == 0.0:
        return None
    chi_square = float(np.sum((weighted @ coefficients - y / sd) ** 2)) / max(1, len(x) - 2)
    covariance = np.linalg.inv(normal) * max(1.0, chi_square)
    return _Fit(float(coefficients[0]), float(coefficients[1]), covariance, volume_sd, chi_square)


def _plain(x: Array, y: Array, weighted: _Fit) -> _Fit:
    """Return Gran's own line: function against volume, every point alike.

    Taken where the misfit is not the noise that the weights stand for, or cannot be seen. The difference between both
    lines enters the uncertainty.
    """
    slope, offset = np.polyfit(y, x, 1)
    intercept = -float(offset / slope)
    covariance = weighted.covariance.copy()
    covariance[0, 0] += (intercept - weighted.intercept_ml) ** 2
    return replace(weighted, intercept_ml=intercept, slope=1.0 / float(slope), covariance=covariance)
