"""Verdict on the carbonate in an alkaline titrant, from a titration of strong acid with it.

The gap between the Gran lines of the acid and the base branch is the carbonate (`controller.evaluation.carbonate`). In
a run on a weak acid it leaves no sign that could be told from the acid's own.
"""

from __future__ import annotations

from dataclasses import dataclass

from configs.errors import HalfdropError
from controller.evaluation.carbonate import carbonate_gap
from controller.evaluation.estimate import Estimate

#: carbonate in percent of the titrant's strength that is still accepted (house limit, common practice)
LARGEST_CARBONATE_PERCENT = 1.0
CURE = "prepare carbonate-free base, keep it under a guard tube, standardise it at the end point pH of its samples"


@dataclass(frozen=True, slots=True, kw_only=True)
class CarbonateJudgement:
    """Carbonate in percent of the titrant's whole alkalinity, and mol/L, with standard uncertainties.

    `detected`: more than the uncertainties of the lines explain. `accepted`: not detected above the limit.
    """

    gap_ml: float
    gap_standard_uncertainty_ml: float
    percent: float
    standard_uncertainty_percent: float
    carbonate_mol_l: float
    detected: bool
    accepted: bool
    text: str


def judge_carbonate(
    acid_branch: Estimate,
    base_branch: Estimate,
    *,
    concentration_mol_l: float,
    limit_percent: float = LARGEST_CARBONATE_PERCENT,
) -> CarbonateJudgement:
    """Judge the gap between the Gran intercepts of both branches of a strong-acid titration.

    Args:
        acid_branch: intercept of the line before equivalence.
        base_branch: intercept of the line after equivalence, from points above about pH 11.
        concentration_mol_l: whole alkalinity of the titrant (as standardised to an acidic end point).
        limit_percent: largest carbonate accepted.

    Raises:
        HalfdropError: intercepts not above 0.
    """
    acid_ml, base_ml = acid_branch.volume_ml, base_branch.volume_ml
    if not (acid_ml > 0.0 and base_ml > 0.0):
        what = f"intercepts are {acid_ml} and {base_ml} mL, allowed: above 0 mL"
        raise HalfdropError(what, where="carbonate check", remedy="Titrate strong acid well past equivalence")
    gap = carbonate_gap(acid_branch, base_branch)
    percent = 100.0 * gap.carbonate_share
    # to first order in the gap
    percent_u = 100.0 * gap.standard_uncertainty_ml / base_ml
    detected = gap.significant
    accepted = not (detected and percent > limit_percent)
    figure = f"carbonate {percent:.2f} +- {percent_u:.2f} % of the titrant's strength"
    if not detected:
        text = f"no carbonate found: {figure}"
    elif accepted:
        text = f"{figure}, allowed: {limit_percent:g} %"
    else:
        text = f"{figure}, allowed: {limit_percent:g} %; {CURE}"
    return CarbonateJudgement(
        gap_ml=gap.gap_ml,
        gap_standard_uncertainty_ml=gap.standard_uncertainty_ml,
        percent=percent,
        standard_uncertainty_percent=percent_u,
        carbonate_mol_l=max(0.0, percent) / 200.0 * concentration_mol_l,
        detected=detected,
        accepted=accepted,
        text=text,
    )
