"""From a curve to its end points, each with a standard uncertainty and its estimator, half-equivalence and warnings."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from controller.evaluation.curve import Curve
from controller.evaluation.estimate import (
    CHARGE_BALANCE,
    GRAN_BEYOND,
    INVERSE,
    SECOND_DERIVATIVE,
    Estimate,
)
from controller.evaluation.estimators import (
    from_fit,
    from_gran,
    from_inverse,
    from_shape,
    inverse_ladders,
)
from controller.evaluation.fitalone import by_fit_alone
from controller.evaluation.gran import gran_before, gran_beyond
from controller.evaluation.inflection import SMALLEST_RISE, Inflection, find_inflections, inflection_at
from controller.evaluation.modelfit import ModelFit, fit_charge_balance
from controller.evaluation.pka import HalfEquivalence, half_equivalence
from controller.evaluation.protons import ladders
from controller.evaluation.remarks import carbonate_remarks, curve_remarks, extrapolation_remarks
from controller.evaluation.result import EndPoint, Evaluation

#: fewer points than this make no curve
FEWEST_POINTS = 5
#: a Gran line takes the derivative's place beyond this relative standard uncertainty of the latter ...
_COARSE_SHARE = 0.005
#: ... and when it is this many times larger than the line's
_COARSE_RATIO = 3.0


def evaluate(
    curve: Curve,
    *,
    end_points_expected: int | None = None,
    smallest_rise: float = SMALLEST_RISE,
    detected_ml: Sequence[float] = (),
) -> Evaluation:
    """Evaluate a titration curve.

    Args:
        curve: points and what is known about them.
        end_points_expected: how many end points there should be; more are cut to the clearest, fewer are remarked upon.
        smallest_rise: change of signal that a jump must have, units of pH (59 mV).
        detected_ml: end points that a run detected: each gets its place on the curve, whether the shape alone shows
            it or not.

    Returns:
        The evaluation; without an end point it says so in `reason` and gives no number.
    """
    last = float(curve.volume_ml[-1]) if len(curve.volume_ml) else 0.0
    if len(np.unique(curve.volume_ml)) < FEWEST_POINTS:
        reason = f"no end point: {len(curve.volume_ml)} points are too few to evaluate (at least {FEWEST_POINTS})"
        return _nothing(reason, [], last)
    jumps, remarks = find_inflections(curve, smallest_rise=smallest_rise)
    jumps = _with_detected(curve, jumps, detected_ml)
    jumps, cut = _clearest(jumps, end_points_expected)
    warnings = [*remarks, *cut]
    alone = None if jumps else by_fit_alone(curve)
    if alone is not None:
        return _alone(curve, *alone, warnings)
    if not jumps:
        warnings += extrapolation_remarks(curve)
        return _nothing("no end point: the curve shows no jump that stands out from its noise", warnings, last)
    strong = _strong(curve, jumps)
    known = replace(curve, pka=()) if strong and curve.pka is None else curve
    fit = fit_charge_balance(known)
    estimates = _estimates(known, jumps, fit, strong=strong)
    reported = [choose(e) for e in estimates]
    halves = _halves(known, reported, fit)
    warnings += curve_remarks(known, jumps, estimates, reported, fit)
    warnings += [h.remark for h in halves if h.remark is not None]
    if strong and not curve.acid_titrant:
        warnings += carbonate_remarks(curve, reported[0].volume_ml)
    if end_points_expected is not None and len(jumps) < end_points_expected:
        warnings.append(f"{len(jumps)} of {end_points_expected} expected end points found")
    return Evaluation(
        end_points=tuple(_end_point(curve, e) for e in reported),
        half_equivalence=tuple(halves),
        estimates=tuple((r, *(e for e in found if e is not r)) for r, found in zip(reported, estimates, strict=True)),
        warnings=tuple(warnings),
        titrant_ml=last,
        details=_details(fit, jumps),
    )


def _with_detected(curve: Curve, jumps: list[Inflection], detected_ml: Sequence[float]) -> list[Inflection]:
    added = [
        inflection_at(curve, volume)
        for volume in detected_ml
        if all(abs(j.volume_ml - volume) > 0.03 * volume for j in jumps)
    ]
    return sorted([*jumps, *(j for j in added if j is not None)], key=lambda j: j.volume_ml)


def choose(estimates: list[Estimate]) -> Estimate:
    """Return the estimate that is reported; the rule stands in words in `result.RULE`."""
    by_name = {e.estimator: e for e in estimates if e.sound and e.standard_uncertainty_ml > 0.0}
    for name in (CHARGE_BALANCE, INVERSE):
        if name in by_name:
            return by_name[name]
    shape = next(e for e in estimates if e.estimator == SECOND_DERIVATIVE)
    line = by_name.get(GRAN_BEYOND)
    coarse = shape.standard_uncertainty_ml > _COARSE_SHARE * shape.volume_ml
    if line is not None and coarse and shape.standard_uncertainty_ml > _COARSE_RATIO * line.standard_uncertainty_ml:
        return line
    return shape


def _alone(curve: Curve, estimate: Estimate, fit: ModelFit, warnings: list[str]) -> Evaluation:
    halves = _halves(curve, [estimate], fit)
    said = "the curve shows no jump: the end point rests on the charge balance of the stated substance alone"
    return Evaluation(
        end_points=(_end_point(curve, estimate),),
        half_equivalence=tuple(halves),
        estimates=((estimate,),),
        warnings=(*warnings, said, *(h.remark for h in halves if h.remark is not None)),
        titrant_ml=float(curve.volume_ml[-1]),
        details=_details(fit, []),
    )


def _nothing(reason: str, warnings: list[str], titrant_ml: float) -> Evaluation:
    return Evaluation(
        end_points=(),
        half_equivalence=(),
        estimates=(),
        warnings=tuple(warnings),
        titrant_ml=titrant_ml,
        reason=reason,
    )


def _clearest(jumps: list[Inflection], expected: int | None) -> tuple[list[Inflection], list[str]]:
    if expected is None or len(jumps) <= expected:
        return jumps, []
    ranked = sorted(jumps, key=lambda x: x.contrast * x.rise, reverse=True)
    dropped = sorted(x.volume_ml for x in ranked[expected:])
    kept = sorted(ranked[:expected], key=lambda x: x.volume_ml)
    places = ", ".join(f"{v:.4g}" for v in dropped)
    return kept, [f"{len(jumps)} jumps found, {expected} expected: the less clear at {places} mL are left out"]


def _strong(curve: Curve, jumps: list[Inflection]) -> bool:
    """Does free H+ (or OH-) carry the titrant all the way to a single jump: a strong acid or base?"""
    if curve.pka is not None or len(jumps) != 1:
        return curve.pka == ()
    line = gran_before(curve, end_point_ml=jumps[0].volume_ml)
    return line is not None and bool(line.strong)


def _estimates(curve: Curve, jumps: list[Inflection], fit: ModelFit | None, *, strong: bool) -> list[list[Estimate]]:
    # for one of several end points the inverse model is second to a sound fit of the whole curve
    several = len(jumps) > 1 and fit is not None and fit.sound
    ladder = [None] if several else inverse_ladders(curve, len(jumps), strong)
    everything = []
    previous = 0.0
    for i, jump in enumerate(jumps):
        following = jumps[i + 1] if i + 1 < len(jumps) else None
        middle = None if following is None else (jump.volume_ml + following.volume_ml) / 2.0
        inverse, _ = from_inverse(curve, None if several else ladder[i], jump, up_to_ml=middle)
        found = [from_fit(fit, jump), inverse, *from_shape(jump, previous)]
        if following is None:
            line = gran_beyond(curve, end_point_ml=jump.volume_ml, signal=jump.signal)
            found.append(from_gran(line, curve, jump, beyond=True))
        before = gran_before(curve, end_point_ml=jump.volume_ml, previous_ml=previous)
        found.append(from_gran(before, curve, jump, beyond=False))
        everything.append([e for e in found if e is not None])
        previous = jump.volume_ml
    return everything


def _end_point(curve: Curve, estimate: Estimate) -> EndPoint:
    def at(signal: Any) -> float | None:
        return None if signal is None else float(np.interp(estimate.volume_ml, curve.volume_ml, signal))

    return EndPoint(
        volume_ml=estimate.volume_ml,
        standard_uncertainty_ml=estimate.standard_uncertainty_ml,
        ph=at(curve.ph),
        potential_mv=at(curve.potential_mv),
        estimator=estimate.estimator,
    )


def _halves(curve: Curve, reported: list[Estimate], fit: ModelFit | None) -> list[HalfEquivalence]:
    halves: list[HalfEquivalence] = []
    previous = 0.0
    for e in reported:
        single, charge = _step(curve, len(reported), len(halves))
        unit = None
        if fit is not None and fit.sound:
            unit = float(np.interp((previous + e.volume_ml) / 2.0, curve.volume_ml, fit.log_coefficient))
        half = half_equivalence(
            curve,
            end_point_ml=e.volume_ml,
            standard_uncertainty_ml=e.standard_uncertainty_ml,
            previous_ml=previous,
            single_proton=single,
            charge_before=charge,
            log_coefficient=unit,
        )
        if half is not None:
            halves.append(half)
        previous = e.volume_ml
    return halves


def _step(curve: Curve, jumps: int, index: int) -> tuple[bool | None, int | None]:
    """Return whether end point `index` counts one proton, and the charge of the form that has it; None: not known."""
    if not curve.pka:
        return (None, None) if curve.pka is None else (False, None)
    gone = curve.charge + curve.counter_ion_charge
    acid = bool(curve.acid_titrant)
    shown = ladders(curve.pka, curve.charge, curve.counter_ion_charge, pkw=curve.pkw, acid_titrant=acid)
    if len(shown) != jumps:
        return None, None
    counted = [0, *(round(1.0 / step.share) for step in shown)]
    lost = gone - counted[index] - 1 if acid else gone + counted[index]
    return counted[index + 1] - counted[index] == 1, curve.charge - lost


def _details(fit: ModelFit | None, jumps: list[Inflection]) -> dict[str, Any]:
    details: dict[str, Any] = {"jumps": [{"rise_ph_units": j.rise, "contrast": j.contrast} for j in jumps]}
    if fit is not None:
        details["charge_balance_fit"] = {
            "sound": fit.sound,
            "reduced_chi_square": fit.chi_square,
            "pka": list(fit.pka),
            "pka_standard_uncertainty": list(fit.pka_sd),
            "offset_ph": fit.offset_ph,
            "slope_error": fit.slope_error,
            "strong_ion_mol_l": fit.strong_ion_mol_l,
            "activity": "davies" if fit.activity else "none",
        }
    return details
