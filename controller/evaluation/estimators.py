"""What every estimator says of each end point that the curve's shape shows."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

from controller.evaluation.curve import Curve
from controller.evaluation.estimate import CHARGE_BALANCE, INVERSE, SECOND_DERIVATIVE, STEEPEST, Estimate
from controller.evaluation.gran import GranLine
from controller.evaluation.inflection import Inflection
from controller.evaluation.inverse import InverseFit, InverseSetting, fit_inverse
from controller.evaluation.modelfit import ModelFit
from controller.evaluation.protons import (
    STRONG_LADDER,
    UNKNOWN_LADDER,
    ProtonLadder,
    conditional_pka,
    ladders,
)
from simulators.constants import ideal_slope_mv

#: said of a line before the end point without initial volume or titrant concentration
NOT_CORRECTED = "not corrected for free H+ and OH-: initial volume or titrant concentration is not given"
NEIGHBOUR = "takes no account of the substance's other protons"
OFF_LINE = "the points there do not lie on a line of this end point"
#: what takes up free titrant beyond an end point, and what that means
_TAKES_ACID = (
    "hydrogensulfate, fluoride or organic acids do), which biases a plain Gran line, in seawater by 0.15 to 0.4 %"
)
_TAKES_BASE = "a further proton of the substance, silicic or carbonic acid do), which biases a plain Gran line"
#: an estimate that lies further from the jump's shape than this share of the volume is of something else
_LARGEST_DISTANCE = 0.05
#: excess of titrant growing this much slower than titrant is added: something else takes it up
_SLOWER = 1.15
#: ... or faster: the pH scale (or the concentration) is off
_FASTER = 0.87
#: ... beyond what so many standard deviations of the line's slope allow
_SURE = 3.0


def inflection_bias_sd(inflection: Inflection, previous_ml: float) -> float:
    """Return how far equivalence may lie from an inflection, as a standard uncertainty in mL.

    To first order the distance is w^2/(Ve - Vp) times a factor of 1 to 5 (worked out here for weak acids of pKa 4 to 9,
    phosphoric acid, carbonate and seawater), with w = 1/(ln 10 x slope) the jump's width; three times that is taken.
    """
    width = 1.0 / (math.log(10.0) * inflection.slope)
    return 3.0 * width**2 / max(inflection.volume_ml - previous_ml, width)


def from_shape(inflection: Inflection, previous_ml: float) -> tuple[Estimate, Estimate]:
    """Return the second derivative's zero and the middle of the steepest interval, as estimates of equivalence."""
    bias = inflection_bias_sd(inflection, previous_ml)
    zero = Estimate(
        estimator=SECOND_DERIVATIVE,
        volume_ml=inflection.volume_ml,
        standard_uncertainty_ml=math.hypot(inflection.standard_uncertainty_ml, bias),
        bias_ml=bias,
        remark=inflection.method if inflection.method != SECOND_DERIVATIVE else None,
    )
    steepest = Estimate(
        estimator=STEEPEST,
        volume_ml=inflection.steepest_ml,
        standard_uncertainty_ml=math.hypot(inflection.steepest_uncertainty_ml, bias),
        bias_ml=bias,
    )
    return zero, steepest


def from_gran(line: GranLine | None, curve: Curve, inflection: Inflection, *, beyond: bool) -> Estimate | None:
    """Return a Gran line's estimate, marked unsound (with the reason) where it does not fit the curve."""
    if line is None:
        return None
    estimate, c = line.estimate, curve.titrant_concentration_mol_l
    off = abs(estimate.volume_ml - inflection.volume_ml)
    if abs(line.correlation) < 0.99 or off > _LARGEST_DISTANCE * inflection.volume_ml + 3.0 * (
        inflection.standard_uncertainty_ml + estimate.standard_uncertainty_ml
    ):
        return replace(estimate, sound=False, remark=OFF_LINE)
    if not beyond and (c is None or curve.initial_volume_ml is None):
        return replace(estimate, sound=False, remark=NOT_CORRECTED)
    if not beyond and curve.pka is not None and len(curve.pka) > 1:
        return replace(estimate, sound=False, remark=NEIGHBOUR)
    if beyond and c is not None and curve.ph is not None:
        ratio = line.slope * c
        by_chance = 1.0 + _SURE * _slope_spread(line)
        if ratio > _SLOWER * by_chance:
            return replace(
                estimate,
                sound=False,
                remark=(
                    f"free titrant grows {100.0 * (1.0 - 1.0 / ratio):.0f} % slower than it is added: something else "
                    f"takes it up ({_TAKES_ACID if curve.acid_titrant else _TAKES_BASE}"
                ),
            )
        if ratio < _FASTER / by_chance:
            return replace(
                estimate,
                remark=(
                    f"free titrant seems to grow {100.0 * (1.0 / ratio - 1.0):.0f} % faster than it is added: the pH "
                    f"scale reads {abs(math.log10(ratio)):.2f} off, or the concentration is wrong; the line's "
                    "intercept does not depend on either"
                ),
            )
    return estimate


def _slope_spread(line: GranLine) -> float:
    """Relative standard deviation of a fitted line's slope, from its correlation: sqrt((1/r^2 - 1)/(n - 2))."""
    return math.sqrt(max(0.0, 1.0 / line.correlation**2 - 1.0) / max(1, (line.estimate.points or 3) - 2))


def from_fit(fit: ModelFit | None, inflection: Inflection) -> Estimate | None:
    """Return the charge-balance fit's equivalence volume nearest to a jump."""
    if fit is None:
        return None
    nearest = min(range(len(fit.equivalence_ml)), key=lambda n: abs(fit.equivalence_ml[n] - inflection.volume_ml))
    volume, sd = fit.equivalence_ml[nearest], fit.equivalence_sd_ml[nearest]
    remark = None if fit.sound else f"the fit is not sound (reduced chi-square {fit.chi_square:.1f})"
    near = abs(volume - inflection.volume_ml) <= _LARGEST_DISTANCE * inflection.volume_ml + 3.0 * sd
    if not near:
        remark = "the fit's equivalence point is not at this jump"
    return Estimate(
        estimator=CHARGE_BALANCE,
        volume_ml=volume,
        standard_uncertainty_ml=sd,
        sound=fit.sound and near,
        remark=remark,
    )


def inverse_ladders(curve: Curve, jumps: int, strong: bool) -> Sequence[ProtonLadder | None]:
    """Return which protons each jump counts for the inverse model; None where that is not known."""
    nothing: list[ProtonLadder | None] = [None] * jumps
    v0, c = curve.initial_volume_ml, curve.titrant_concentration_mol_l
    if curve.ph is None or v0 is None or c is None or not jumps:
        return nothing
    if curve.pka is None or not curve.pka:
        return [STRONG_LADDER if strong or curve.pka == () else UNKNOWN_LADDER] if jumps == 1 else nothing
    strength = c * float(curve.volume_ml[-1]) / (v0 + float(curve.volume_ml[-1]))
    constants = conditional_pka(curve.pka, curve.charge, strength, curve.debye_huckel_a)
    found = ladders(
        constants, curve.charge, curve.counter_ion_charge, pkw=curve.pkw, acid_titrant=bool(curve.acid_titrant)
    )
    return list(found) if len(found) == jumps else nothing


def from_inverse(
    curve: Curve, ladder: ProtonLadder | None, inflection: Inflection, *, up_to_ml: float | None
) -> tuple[Estimate | None, InverseFit | None]:
    """Return the inverse model's estimate for one jump, with the fit itself."""
    v0, c = curve.initial_volume_ml, curve.titrant_concentration_mol_l
    if ladder is None or curve.ph is None or v0 is None or c is None:
        return None, None
    use = curve.volume_ml <= (math.inf if up_to_ml is None else up_to_ml)
    setting = InverseSetting(
        initial_volume_ml=v0,
        titrant_concentration_mol_l=c,
        pkw=curve.pkw,
        debye_huckel_a=curve.debye_huckel_a,
        acid_titrant=bool(curve.acid_titrant),
        slope_mv=ideal_slope_mv(curve.temperature_c),
        ladder=ladder,
    )
    fit = fit_inverse(
        curve.volume_ml[use], curve.ph[use], setting, volume_sd_ml=curve.volume_sd[use], start_ml=inflection.volume_ml
    )
    if fit is None:
        return None, None
    off = abs(fit.equivalence_ml - inflection.volume_ml)
    near = off <= _LARGEST_DISTANCE * inflection.volume_ml + 3.0 * fit.standard_uncertainty_ml
    remark = None if fit.sound else f"the model does not fit (reduced chi-square {fit.chi_square:.1f})"
    estimate = Estimate(
        estimator=INVERSE,
        volume_ml=fit.equivalence_ml,
        standard_uncertainty_ml=fit.standard_uncertainty_ml,
        sound=fit.sound and near,
        points=fit.points,
        remark=remark if near else "the model's equivalence point is not at this jump",
    )
    return estimate, fit
