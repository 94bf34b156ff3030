"""An equivalence point of a known substance whose jump the curve's shape does not show (very weak, very dilute)."""

from __future__ import annotations

from controller.evaluation.curve import Curve
from controller.evaluation.estimate import CHARGE_BALANCE, Estimate
from controller.evaluation.modelfit import ModelFit, fit_charge_balance
from controller.evaluation.protons import ladders

#: no number is given on a fit alone beyond this relative standard uncertainty
_LARGEST_UNCERTAINTY = 0.01
#: the curve must reach this far beyond the equivalence point
_REACH = 1.02


def by_fit_alone(curve: Curve) -> tuple[Estimate, ModelFit] | None:
    """Return the one equivalence point that a sound charge-balance fit gives, or None.

    Only for a known substance with a single equivalence point that could show a jump, a sound fit, a standard
    uncertainty of at most 1 %, and points on both sides.
    """
    if curve.pka is None or not curve.pka:
        return None
    steps = ladders(
        curve.pka, curve.charge, curve.counter_ion_charge, pkw=curve.pkw, acid_titrant=bool(curve.acid_titrant)
    )
    fit = fit_charge_balance(curve) if len(steps) == 1 else None
    if fit is None or not fit.sound:
        return None
    lost = curve.charge + curve.counter_ion_charge
    counted = round(1.0 / steps[0].share)
    place = lost - counted if curve.acid_titrant else lost + counted
    volume, sd = fit.equivalence_ml[place], fit.equivalence_sd_ml[place]
    inside = float(curve.volume_ml[0]) < volume and _REACH * volume < float(curve.volume_ml[-1])
    if not inside or not 0.0 < sd <= _LARGEST_UNCERTAINTY * volume:
        return None
    estimate = Estimate(
        estimator=CHARGE_BALANCE, volume_ml=volume, standard_uncertainty_ml=sd, points=len(curve.volume_ml)
    )
    return estimate, fit
