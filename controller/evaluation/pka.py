"""pKa from the buffer region of one proton, by charge balance and activity, beside the plain half-equivalence pH.

With W the titrant that the substance has used (V corrected for free H+ and OH-), Vp and Ve the end points around the
region: pKa = pH + log10((Ve - W)/(W - Vp)) for a base as titrant, pH - log10(...) for an acid, at every point between
20 and 80 % of the way. With activity correction the Davies coefficients of both forms make it thermodynamic; without,
it is the conditional constant at this ionic strength.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from controller.evaluation.curve import Array, Curve, Mask
from controller.evaluation.gran import activity_coefficient, titrant_used
from controller.evaluation.noise import signal_noise

_LN10 = math.log(10.0)
_FROM, _TO = 0.2, 0.8
#: the plain half-equivalence pH stands for pKa only below this bias
LARGEST_PLAIN_BIAS = 0.02
#: where initial volume and concentration are unknown, the substance is taken to be at least this concentrated
_ASSUMED_MOL_L = 0.002
_UNCORRECTED = (
    "pKa without correction for free H+ and OH-: initial volume or titrant concentration is not given (the bias is "
    f"below {LARGEST_PLAIN_BIAS:g} if the substance is at least {_ASSUMED_MOL_L * 1000.0:g} mmol/L)"
)
#: a pKa that runs by more than this through the region is not that of one proton
_LARGEST_RUN = 0.10
#: free H+ or OH- beyond this share of either form: the plain buffer equation is not valid
_LARGEST_FREE_SHARE = 0.01


@dataclass(frozen=True, slots=True, kw_only=True)
class HalfEquivalence:
    """Half-way to an end point: plain pH there, and the pKa by charge balance where it can be had.

    `plain_bias`: plain pH less pKa; `valid_plain`: free H+ and OH- are below 1 % of either form there;
    `conditional_pka`: the constant at the ionic strength of this solution, before the activity correction.
    """

    volume_ml: float
    ph: float
    pka: float | None
    standard_uncertainty: float | None
    plain_bias: float | None
    valid_plain: bool | None
    remark: str | None
    conditional_pka: float | None = None


def half_equivalence(
    curve: Curve,
    *,
    end_point_ml: float,
    standard_uncertainty_ml: float,
    previous_ml: float = 0.0,
    single_proton: bool | None = None,
    charge_before: int | None = None,
    log_coefficient: float | None = None,
) -> HalfEquivalence | None:
    """Return what the region before an end point tells; None without pH or without points there.

    Args:
        curve: all points.
        end_point_ml: the end point, with `standard_uncertainty_ml`.
        previous_ml: the end point before it, 0 for the first.
        single_proton: whether one proton is exchanged in the region; None: judged from the points.
        charge_before: charge of the protonated form of this step; needed for the activity correction.
        log_coefficient: log10 of the activity coefficient of charge 1 half-way; None: that of the titrant's salt.
    """
    half = (previous_ml + end_point_ml) / 2.0
    span = end_point_ml - previous_ml
    if curve.ph is None or span <= 0.0 or not curve.volume_ml[0] <= half <= curve.volume_ml[-1]:
        return None
    plain = _smooth_ph(curve, half, span)
    used = titrant_used(curve)
    share = ((curve.volume_ml if used is None else used) - previous_ml) / span
    inside = (curve.volume_ml > previous_ml) & (curve.volume_ml < end_point_ml)
    region = inside & (share > _FROM) & (share < _TO)
    region_ml = (previous_ml, half)
    refusal = _refusal(curve, used, region, region_ml=region_ml, plain=plain, single_proton=single_proton)
    if refusal is not None:
        return _without_pka(half, plain, refusal)
    pka, sd, run = _averaged(curve, share, region, standard_uncertainty_ml / span)
    if single_proton is None and abs(run) > max(_LARGEST_RUN, 6.0 * sd):
        remark = f"no pKa: it runs by {run:+.2f} through the region, so more than one proton (or substance) is at work"
        return _without_pka(half, plain, remark)
    conditional = pka
    pka += _activity(curve, half, charge_before, log_coefficient)
    return HalfEquivalence(
        volume_ml=half,
        ph=plain,
        pka=pka,
        standard_uncertainty=sd,
        plain_bias=None if used is None else plain - pka,
        valid_plain=None if used is None else _valid_plain(curve, plain, half, span),
        remark=_UNCORRECTED if used is None else None,
        conditional_pka=conditional,
    )


def _without_pka(volume_ml: float, plain: float, remark: str) -> HalfEquivalence:
    return HalfEquivalence(
        volume_ml=volume_ml,
        ph=plain,
        pka=None,
        standard_uncertainty=None,
        plain_bias=None,
        valid_plain=None,
        remark=remark,
    )


def buffer_equation_bias(hydrogen_mol_l: float, hydroxide_mol_l: float, form_mol_l: float) -> float:
    """Return the first-order bias of the plain half-equivalence pH against pKa, both forms at `form_mol_l`."""
    return 2.0 * (hydrogen_mol_l - hydroxide_mol_l) / form_mol_l / _LN10


def _refusal(
    curve: Curve,
    used: Array | None,
    region: Mask,
    *,
    region_ml: tuple[float, float],
    plain: float,
    single_proton: bool | None,
) -> str | None:
    previous_ml, half_ml = region_ml
    if curve.pka == ():
        return "no pKa: a strong acid or base"
    if single_proton is False:
        return "no pKa: more than one proton is exchanged before this end point; the pH is only that half-way"
    if used is not None:
        at_half = float(np.interp(half_ml, curve.volume_ml, used)) - previous_ml
        if not 0.5 <= at_half / (half_ml - previous_ml) <= 1.5:
            return "no pKa: free H+ or OH- takes most of the titrant half-way (a strong acid or base, or very dilute)"
    else:
        free = max(math.pow(10.0, -plain), math.pow(10.0, plain - curve.pkw))
        if abs(buffer_equation_bias(free, 0.0, _ASSUMED_MOL_L / 2.0)) > LARGEST_PLAIN_BIAS:
            return (
                "no pKa: at this pH it needs the initial volume and the titrant's concentration "
                "(--initial-volume-ml, --titrant-concentration-mol-l); the plain pH half-way may be biased"
            )
    if np.sum(region) < 1:
        return "no pKa: no point between 20 and 80 % of the way to the end point"
    return None


def _averaged(curve: Curve, share: Array, region: Mask, relative_sd: float) -> tuple[float, float, float]:
    """Return the weighted pKa, its standard uncertainty (probe calibration left out) and its run."""
    assert curve.ph is not None
    way = 1.0 if curve.rising else -1.0
    s = share[region]
    each = curve.ph[region] + way * np.log10((1.0 - s) / s)
    weight = s * (1.0 - s)
    mean = float(np.average(each, weights=weight))
    noise = float(np.mean(signal_noise(curve)[region]))
    scatter = float(np.sqrt(np.average((each - mean) ** 2, weights=weight))) if len(each) > 1 else noise
    run = float(np.polyfit(s, each, 1)[0]) * (_TO - _FROM) if len(each) >= 3 else 0.0
    from_end_point = relative_sd / _LN10 * float(np.mean(1.0 / (1.0 - s)))
    return mean, math.sqrt(max(scatter, noise) ** 2 / len(each) + from_end_point**2 + 1e-8), run


def _activity(curve: Curve, half_ml: float, charge_before: int | None, log_coefficient: float | None) -> float:
    """Return log10 of the two forms' activity coefficients, protonated less deprotonated (Davies)."""
    if curve.debye_huckel_a is None or charge_before is None:
        return 0.0
    unit = math.log10(activity_coefficient(curve, half_ml)) if log_coefficient is None else log_coefficient
    return unit * (charge_before**2 - (charge_before - 1) ** 2)


def _valid_plain(curve: Curve, plain: float, half_ml: float, span_ml: float) -> bool:
    v0, c = curve.initial_volume_ml, curve.titrant_concentration_mol_l
    if v0 is None or c is None:
        return False
    form = c * span_ml / 2.0 / (v0 + half_ml)
    return max(math.pow(10.0, -plain), math.pow(10.0, plain - curve.pkw)) <= _LARGEST_FREE_SHARE * form


def _smooth_ph(curve: Curve, at_ml: float, span_ml: float) -> float:
    """Return the pH at a volume: by a parabola through the points near it where there are enough, else interpolated."""
    assert curve.ph is not None
    near = np.abs(curve.volume_ml - at_ml) <= 0.2 * span_ml
    if np.sum(near) >= 7 and np.ptp(curve.volume_ml[near]) > 0.0:
        coefficients = np.polyfit(curve.volume_ml[near] - at_ml, curve.ph[near], 2)
        return float(coefficients[-1])
    return float(np.interp(at_ml, curve.volume_ml, curve.ph))
