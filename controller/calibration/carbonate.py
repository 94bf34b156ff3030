"""Carbonate in an alkaline titrant, from a titration of strong acid with it.

On the acid side of such a curve carbonate has taken up two protons (carbon dioxide); far on the alkaline side it takes
up none. The acid branch's Gran line therefore meets zero at n / (c_OH + 2 c_CO3), the base branch's at n / c_OH:
their gap is the carbonate. In a run on a weak acid it leaves no sign that could be told from the acid's own.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from configs.errors import HalfdropError

#: carbonate in percent of the titrant's strength that is still accepted (house limit, common practice)
LARGEST_CARBONATE_PERCENT = 1.0
CURE = "prepare carbonate-free base, keep it under a guard tube, standardise it at the end point pH of its samples"


@dataclass(frozen=True, slots=True, kw_only=True)
class CarbonateJudgement:
    """Carbonate in percent of the titrant's whole alkalinity, and mol/L, with standard uncertainties.

    `detected`: above twice its uncertainty. `accepted`: not detected above the limit.
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
    *,
    acid_branch_ml: float,
    acid_branch_standard_uncertainty_ml: float,
    base_branch_ml: float,
    base_branch_standard_uncertainty_ml: float,
    concentration_mol_l: float,
    limit_percent: float = LARGEST_CARBONATE_PERCENT,
) -> CarbonateJudgement:
    """Judge the gap between the Gran intercepts of both branches of a strong-acid titration.

    Args:
        acid_branch_ml: intercept of the line before equivalence.
        acid_branch_standard_uncertainty_ml: of it.
        base_branch_ml: intercept of the line after equivalence, from points above about pH 11.
        base_branch_standard_uncertainty_ml: of it.
        concentration_mol_l: whole alkalinity of the titrant (as standardised to an acidic end point).
        limit_percent: largest carbonate accepted.

    Raises:
        HalfdropError: intercepts not above 0.
    """
    if not (acid_branch_ml > 0.0 and base_branch_ml > 0.0):
        what = f"intercepts are {acid_branch_ml} and {base_branch_ml} mL, allowed: above 0 mL"
        raise HalfdropError(what, where="carbonate check", remedy="Titrate strong acid well past equivalence")
    gap = base_branch_ml - acid_branch_ml
    gap_u = math.hypot(acid_branch_standard_uncertainty_ml, base_branch_standard_uncertainty_ml)
    percent = 100.0 * gap / base_branch_ml
    percent_u = 100.0 * math.hypot(
        acid_branch_standard_uncertainty_ml / base_branch_ml,
        base_branch_standard_uncertainty_ml * acid_branch_ml / base_branch_ml**2,
    )
    detected = gap > 2.0 * gap_u
    accepted = not (detected and percent > limit_percent)
    figure = f"carbonate {percent:.2f} +- {percent_u:.2f} % of the titrant's strength"
    if not detected:
        text = f"no carbonate found: {figure}"
    elif accepted:
        text = f"{figure}, allowed: {limit_percent:g} %"
    else:
        text = f"{figure}, allowed: {limit_percent:g} %; {CURE}"
    return CarbonateJudgement(
        gap_ml=gap,
        gap_standard_uncertainty_ml=gap_u,
        percent=percent,
        standard_uncertainty_percent=percent_u,
        carbonate_mol_l=max(0.0, percent) / 200.0 * concentration_mol_l,
        detected=detected,
        accepted=accepted,
        text=text,
    )
