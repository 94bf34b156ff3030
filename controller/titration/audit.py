"""The last look at a result before it is given: do the points hang together, and is the number as sure as it says?

A result is widened where something happened that the points show, and withheld where they contradict one another. It
is never corrected: what went wrong is known too badly for that.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any

from controller.evaluation.agreement import COVERAGE_FACTOR
from controller.evaluation.carbonate import carbonate_for_sure, without_carbonate
from controller.evaluation.contradiction import LARGEST_OF_STATED, believed, misfit
from controller.evaluation.curve import Curve
from controller.evaluation.estimate import SECOND_DERIVATIVE, Estimate
from controller.evaluation.mishaps import MOST_MISHAPS, Explained, Mishap, explain
from controller.evaluation.modelfit import ModelFit, Priors, fit_charge_balance
from controller.titration.left_out import told

#: relative standard uncertainty above which a number is remarked upon, and above which none is given
NOTABLE_SHARE, LARGEST_SHARE = 0.005, 0.1
#: what a calibration's offset is worth in another liquid: the junction, units of pH (common practice)
JUNCTION_SD_PH = 0.02
#: end points closer than this share are one
LEAST_APART = 0.02
#: pKa so far apart show a jump between them
JUMP_PKA = 2.5
#: reduced chi-square from which on the uncertainty grows with it, without a jump; the nominal bench leaves 0.1 to 0.8
NOTABLE_CHI_SQUARE = 1.0
#: standard uncertainties by which the reported value may differ from a good fit
ALLOWED_SDS = 4.0
#: the probe answers so many times as slowly as its record says before it is remarked upon
NOTABLE_SLOWNESS = 1.35
#: standard uncertainties by which the shape of the curve may differ before the number owns the rest
SHAPE_SDS = 2.0
#: why no number is given where the lag record was left and something else happened
TWO_AT_ONCE = (
    "the probe does not answer as its lag record says, and something else happened while the points were taken: one "
    "may be taken for the other, so no number is given"
)
#: how much more the points of a slow probe may leave over: its slowness to this power
SLOW_POINTS = 3.0
#: what a slowness of one more time the record's may cost, in precisions of the pump
SLOWNESS_COST = 5.0

EndPoint = dict[str, Any]


@dataclass(slots=True)
class Audit:
    """What became of the end points: `withheld` says why none is given, else None."""

    end_points: list[EndPoint]
    warnings: list[str] = field(default_factory=list)
    withheld: str | None = None

    def widen(self, number: int, by_ml: float) -> None:
        """Add to the standard uncertainty of one end point."""
        point = self.end_points[number]
        u_ml = math.hypot(point["standard_uncertainty_ml"], by_ml)
        self.end_points[number] = {**point, "standard_uncertainty_ml": round(u_ml, 7)}


def audited(
    end_points: Sequence[EndPoint],
    curve: Curve,
    at_s: Sequence[float],
    estimates: Sequence[Sequence[Estimate]],
    *,
    slowness: float | None,
    precision_ml: float,
    offset_sd_ph: float | None = None,
    lost_ml: float = 0.0,
    carbonate: bool = False,
    record_holds: bool = True,
) -> Audit:
    """Look at every end point once more.

    Args:
        end_points: as they would be given.
        curve: the run's points.
        at_s: when each was taken.
        estimates: by end point of the evaluation, the reported one first.
        slowness: learned lag over the record's, where there is a record.
        precision_ml: of the pump.
        offset_sd_ph: standard uncertainty of the calibration's offset, units of pH, where it is known.
        lost_ml: titrant that points not in the curve do not account for.
        carbonate: the run looks for it: what of it is found is no mishap, and the points are held against a titrant
            without it; an end point still owns what lies between it and the alkalinity's.
        record_holds: the record of the probe's lag was kept to its end.
    """
    audit = Audit(list(end_points))
    if not audit.end_points:
        return audit
    if carbonate:
        near_ml = float(end_points[0]["volume_ml"])
        gap = carbonate_for_sure(curve, end_point_ml=near_ml)
        curve = curve if gap is None else without_carbonate(curve, gap, end_point_ml=near_ml)
    priors = known_beforehand(curve, offset_sd_ph)
    fit = fit_charge_balance(curve, priors=priors)
    slow = slowness if slowness is not None and slowness > NOTABLE_SLOWNESS else None
    if fit is not None:
        explained = explain(curve, fit, at_s, priors=priors)
        # before a slow probe was known for one, its points were taken too early
        shown = believed(explained.curve, explained.fit, allowed=spread_allowed(slowness))
        if shown is None or not explained.holds:
            audit.withheld = contradiction(fit, explained)
            audit.end_points = []
            return audit
        if explained.mishaps and not record_holds:
            audit.withheld = TWO_AT_ONCE
            audit.end_points = []
            return audit
        if explained.mishaps:
            audit.warnings += [mishap_told(mishap) for mishap in explained.mishaps]
            _widen_by(audit, explained.mishaps, explained.fit, curve, at_s)
        else:
            if explained.possible is not None:
                mishap, with_it = explained.possible
                _widen_by(audit, (mishap,), with_it, curve, at_s)
            _hold_against_fit(audit, shown, acid_titrant=bool(curve.acid_titrant))
        if shown is not explained.fit:  # no estimator has its word alone where the stated substance does not hold
            for number, point in enumerate(audit.end_points):
                audit.widen(number, _disagreement_ml(float(point["volume_ml"]), estimates))
    for number, point in enumerate(audit.end_points):
        audit.widen(number, _beyond_shape_ml(float(point["volume_ml"]), estimates))
    if slow is not None:
        audit.warnings.append(
            f"the probe answers {slow:.1f} times as slowly as its record says: clean it, or repeat the response check"
        )
        for number in range(len(audit.end_points)):
            audit.widen(number, SLOWNESS_COST * (slow - 1.0) * precision_ml)
    if lost_ml > 0.0:
        audit.warnings.append(told(lost_ml))
        for number in range(len(audit.end_points)):
            audit.widen(number, lost_ml)
    _judge_uncertainty(audit)
    return audit


def spread_allowed(slowness: float | None) -> float:
    """How much more the points may leave over where the probe turned out slow only while they were taken."""
    return 1.0 if slowness is None else math.pow(max(1.0, slowness), SLOW_POINTS)


def contradiction(fit: ModelFit, explained: Explained) -> str:
    """Return why no number is given where no acid or base could give the points, or too much happened to them."""
    left = f"misfit {misfit(fit):.1f}, allowed {LARGEST_OF_STATED:g}"
    if not explained.holds:
        left = f"{len(explained.mishaps)} mishaps do not explain them, allowed {MOST_MISHAPS}"
    return (
        f"the points contradict one another ({left}): something happened to sample, titrant or probe while they were "
        "taken, so no number is given"
    )


def known_beforehand(curve: Curve, offset_sd_ph: float | None) -> Priors:
    """What is known beforehand; thermodynamic constants may be 0.15 off as conditional ones."""
    pka_sd = 0.05 if curve.debye_huckel_a is not None else 0.15
    if offset_sd_ph is None:
        return Priors(pka_sd=pka_sd)
    return Priors(pka_sd=pka_sd, offset_sd_ph=math.hypot(offset_sd_ph, JUNCTION_SD_PH))


def _widen_by(audit: Audit, mishaps: Sequence[Mishap], fit: ModelFit, curve: Curve, at_s: Sequence[float]) -> None:
    """By how far the number goes when they are taken out (`fit`), or by the titrant not accounted for before it."""
    acid = bool(curve.acid_titrant)
    for number, point in enumerate(audit.end_points):
        volume_ml = float(point["volume_ml"])
        right_ml, sd_ml = min(_shown(fit, acid), key=lambda pair: abs(pair[0] - volume_ml))
        lost_ml = 0.0
        for mishap in mishaps:
            if volume_ml < mishap.after_ml:
                continue
            if mishap.kind == "step":
                lost_ml += abs(mishap.amount)
            elif mishap.kind == "leak":
                passed_s = next((t for v, t in zip(curve.volume_ml, at_s, strict=True) if v >= volume_ml), at_s[-1])
                lost_ml += abs(mishap.amount) * max(0.0, passed_s - mishap.after_s) / 60.0
        # where several happened, one may have been taken for another
        audit.widen(number, len(mishaps) * math.hypot(max(abs(right_ml - volume_ml), lost_ml), sd_ml))


def mishap_told(mishap: Mishap) -> str:
    """Return a mishap in words."""
    place = f"after {mishap.after_ml:.3f} mL"
    match mishap.kind:
        case "step":
            way = "less titrant came than was counted" if mishap.amount > 0 else "more titrant came than was counted"
            said = f"{place} {abs(mishap.amount):.3f} mL do not fit ({way}: air in the line? a drop? a knock?)"
        case "leak":
            said = (
                f"{place} the volume runs away by {-mishap.amount:+.3f} mL/min (a leaking valve, or a slow reaction?)"
            )
        case "shift":
            said = f"{place} the potential is another by {mishap.amount:+.2f} pH (the reference, or the temperature?)"
        case _:
            said = (
                f"{place} the potential runs away by {mishap.amount:+.2f} pH/min (the reference, or the temperature?)"
            )
    return f"{said}; the uncertainty is widened by it"


def _hold_against_fit(audit: Audit, fit: ModelFit, *, acid_titrant: bool) -> None:
    """Widen where the fit that describes the points says otherwise, or leaves much over."""
    for number, point in enumerate(audit.end_points):
        volume_ml, u_ml = float(point["volume_ml"]), float(point["standard_uncertainty_ml"])
        near_ml, sd_ml = min(_shown(fit, acid_titrant), key=lambda pair: abs(pair[0] - volume_ml))
        off_ml = abs(near_ml - volume_ml)
        if fit.chi_square > NOTABLE_CHI_SQUARE:
            audit.widen(number, u_ml * math.sqrt(fit.chi_square**2 - 1.0))
        if off_ml > ALLOWED_SDS * math.hypot(u_ml, sd_ml):
            audit.warnings.append(
                f"end point {number + 1}: the charge balance of most points is at {near_ml:.4f} mL, not at "
                f"{volume_ml:.4f} mL; the uncertainty is widened by the difference"
            )
            audit.widen(number, off_ml)


def _beyond_shape_ml(volume_ml: float, estimates: Sequence[Sequence[Estimate]]) -> float:
    """What the shape of the curve and the number differ by beyond twice what they claim together.

    A drift that the balance takes for a constant moves its number and not the shape. Where they differ by more than
    `COVERAGE_FACTOR` times, shape and balance speak of different things, which is remarked upon elsewhere.
    """
    here = min(estimates, key=lambda found: abs(found[0].volume_ml - volume_ml), default=())
    shape = next((e for e in here if e.estimator == SECOND_DERIVATIVE and e.sound), None)
    if shape is None:
        return 0.0
    joint_ml = math.hypot(shape.standard_uncertainty_ml, here[0].standard_uncertainty_ml)
    off_ml = abs(shape.volume_ml - here[0].volume_ml)
    if not SHAPE_SDS * joint_ml < off_ml <= COVERAGE_FACTOR * joint_ml:
        return 0.0
    return math.sqrt(off_ml**2 - (SHAPE_SDS * joint_ml) ** 2)


def _disagreement_ml(volume_ml: float, estimates: Sequence[Sequence[Estimate]]) -> float:
    """By how much the estimators of the end point at this volume differ beyond what they claim, at most."""
    here = min(estimates, key=lambda found: abs(found[0].volume_ml - volume_ml), default=())
    if not here:
        return 0.0
    reported = here[0]
    off = [
        abs(e.volume_ml - reported.volume_ml)
        for e in here[1:]
        if e.sound
        and abs(e.volume_ml - reported.volume_ml)
        > COVERAGE_FACTOR * math.hypot(e.standard_uncertainty_ml, reported.standard_uncertainty_ml)
    ]
    return max(off, default=0.0)


def _shown(fit: ModelFit, acid_titrant: bool) -> list[tuple[float, float]]:
    """Volume and standard deviation of the fit's equivalence points that show a jump; the titration's last counts."""
    last = 0 if acid_titrant else len(fit.pka)
    return [
        (fit.equivalence_ml[lost], fit.equivalence_sd_ml[lost])
        for lost in range(len(fit.pka) + 1)
        if lost == last or (0 < lost < len(fit.pka) and fit.pka[lost] - fit.pka[lost - 1] >= JUMP_PKA)
    ]


def _judge_uncertainty(audit: Audit) -> None:
    for number, (one, next_one) in enumerate(pairwise(audit.end_points), start=1):
        if next_one["volume_ml"] <= (1.0 + LEAST_APART) * one["volume_ml"]:
            audit.withheld = f"end points {number} and {number + 1} fall together, so no number is given"
            audit.end_points = []
            return
    for number, point in enumerate(audit.end_points):
        share = point["standard_uncertainty_ml"] / max(abs(point["volume_ml"]), 1e-9)
        if share > LARGEST_SHARE:
            audit.withheld = (
                f"end point {number + 1} would be known to {100.0 * share:.0f} % only (allowed "
                f"{100.0 * LARGEST_SHARE:.0f} %), so no number is given"
            )
            audit.end_points = []
            return
        if share > NOTABLE_SHARE:
            audit.warnings.append(
                f"end point {number + 1} is known to {100.0 * share:.1f} % only (standard uncertainty)"
            )
