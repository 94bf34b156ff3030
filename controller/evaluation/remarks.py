"""What is said about an evaluated curve beside its numbers, in plain sentences."""

from __future__ import annotations

import math

from controller.evaluation.agreement import COVERAGE_FACTOR, disagreements
from controller.evaluation.branches import branch_remarks
from controller.evaluation.carbonate import carbonate_gap
from controller.evaluation.curve import Curve
from controller.evaluation.estimate import GRAN_BEFORE, GRAN_BEYOND, SECOND_DERIVATIVE, Estimate
from controller.evaluation.estimators import NEIGHBOUR, NOT_CORRECTED, OFF_LINE
from controller.evaluation.gran import gran_beyond
from controller.evaluation.inflection import Inflection
from controller.evaluation.modelfit import ModelFit

#: more points than this share (or number) off the fit: the fit is wrong, not the points
_FEW_OUTLIERS, _MOST_OUTLIERS = 0.25, 5
#: an inflection further from equivalence than this share is remarked upon
_NOTABLE_BIAS = 0.001
#: less carbonate than this share of the alkalinity is not spoken of
_NOTABLE_CARBONATE = 0.003


def curve_remarks(
    curve: Curve,
    jumps: list[Inflection],
    estimates: list[list[Estimate]],
    reported: list[Estimate],
    fit: ModelFit | None,
) -> list[str]:
    """Return everything that a person should know beside the numbers of a curve with end points.

    `jumps`, `estimates` and `reported` belong together, one entry for each end point.
    """
    out = []
    if curve.initial_volume_ml is None or curve.titrant_concentration_mol_l is None:
        out.append(
            "initial volume or titrant concentration is not given: the equivalence point rests on the curve's shape "
            "alone; the inverse model and the charge-balance fit need both"
        )
    for i, (jump, found, chosen) in enumerate(zip(jumps, estimates, reported, strict=True), start=1):
        out += disagreements(chosen, found, number=i)
        out += [
            f"end point {i}: {e.estimator}: {e.remark}"
            for e in found
            if e.estimator in {GRAN_BEYOND, GRAN_BEFORE} and e.remark not in (None, NEIGHBOUR, NOT_CORRECTED, OFF_LINE)
        ]
        out += _shape_warnings(i, jump, found, chosen)
    branches = branch_remarks(curve, jumps[0].volume_ml) if len(jumps) == 1 else []
    return out + (branches or _outliers(curve, fit))


def _outliers(curve: Curve, fit: ModelFit | None) -> list[str]:
    if fit is None or curve.ph is None or not fit.outliers:
        return []
    if len(fit.outliers) > _FEW_OUTLIERS * len(curve.volume_ml) or len(fit.outliers) > _MOST_OUTLIERS:
        return [
            f"the charge balance of the substance does not describe the curve ({len(fit.outliers)} of "
            f"{len(curve.volume_ml)} points are off it): wrong substance, volume, concentration or pH scale"
        ]
    return [
        f"the point at {curve.volume_ml[index]:g} mL (pH {curve.ph[index]:.2f}) lies {off:+.2f} pH off the charge "
        "balance of the others: a wrong reading or entry?"
        for index, off in fit.outliers
    ]


def _shape_warnings(number: int, jump: Inflection, found: list[Estimate], chosen: Estimate) -> list[str]:
    shape = next(e for e in found if e.estimator == SECOND_DERIVATIVE)
    if chosen is shape:
        share = shape.bias_ml / shape.volume_ml
        if share <= _NOTABLE_BIAS:
            return []
        return [
            f"end point {number} is an inflection; for a jump as flat as this (very weak, dilute or one of several) "
            f"equivalence may lie {100.0 * share:.1f} % or more from it (in the uncertainty)"
        ]
    off = (jump.volume_ml - chosen.volume_ml) / chosen.volume_ml
    if abs(off) <= _NOTABLE_BIAS or abs(jump.volume_ml - chosen.volume_ml) < COVERAGE_FACTOR * math.hypot(
        jump.standard_uncertainty_ml, chosen.standard_uncertainty_ml
    ):
        return []
    return [
        f"end point {number}: the inflection lies {100.0 * off:+.2f} % from equivalence; reported is the "
        f"{chosen.estimator}"
    ]


def extrapolation_remarks(curve: Curve) -> list[str]:
    """Say where a Gran line through a curve without a jump points: a hint, no end point."""
    if curve.initial_volume_ml is None:
        return []
    before = float(curve.decades[0]) - (1.0 if curve.rising else -1.0)
    line = gran_beyond(curve, end_point_ml=-1.0, signal=before)
    if line is None or line.correlation < 0.999 or not 0.0 < line.estimate.volume_ml < line.first_ml:
        return []
    return [
        f"a Gran line through the points from {line.first_ml:g} mL on points to {line.estimate.volume_ml:.4g} mL; that "
        "is outside of the data that show it, so it is a hint and no end point"
    ]


def carbonate_remarks(curve: Curve, end_point_ml: float) -> list[str]:
    """Say what the gap between both branches of a strong acid's curve tells of carbonate in the base."""
    found = carbonate_gap(curve, end_point_ml=end_point_ml)
    if found is None or not found.significant or found.carbonate_share < _NOTABLE_CARBONATE:
        return []
    water = min(found.carbonate_share, found.water_share)
    return [
        f"the branches of this strong acid end {found.gap_ml:.4f} +/- {found.standard_uncertainty_ml:.4f} mL apart: "
        f"about {100.0 * found.carbonate_share:.1f} % of the titrant's alkalinity is carbonate (unboiled water of the "
        f"sample may make {100.0 * water:.1f} % of it); use carbonate-free base with a guard tube, and standardise at "
        "the same end point pH"
    ]
