"""Verdict on the carbonate in an alkaline titrant, from a titration of strong acid with it.

The gap between the ends of the acid and the base branch is the carbonate (`controller.evaluation.carbonate`). In
a run on a weak acid it leaves no sign that could be told from the acid's own.
"""

from __future__ import annotations

from dataclasses import dataclass

from controller.evaluation.carbonate import CarbonateGap

#: carbonate in percent of the titrant's strength that is still accepted (house limit, common practice)
LARGEST_CARBONATE_PERCENT = 1.0
CURE = "prepare carbonate-free base, keep it under a guard tube, standardise it at the end point pH of its samples"


@dataclass(frozen=True, slots=True, kw_only=True)
class CarbonateJudgement:
    """Carbonate in percent of the titrant's whole alkalinity, and mol/L, with standard uncertainties.

    `detected`: more than its uncertainty explains. `accepted`: not detected above the limit.
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
    gap: CarbonateGap, *, concentration_mol_l: float, limit_percent: float = LARGEST_CARBONATE_PERCENT
) -> CarbonateJudgement:
    """Judge the gap between both branches of a strong-acid titration.

    Args:
        gap: between acid and base branch.
        concentration_mol_l: whole alkalinity of the titrant (as standardised to an acidic end point).
        limit_percent: largest carbonate accepted.
    """
    percent, percent_u = 100.0 * gap.carbonate_share, 100.0 * gap.share_standard_uncertainty
    water = min(percent, 100.0 * gap.water_share)
    detected = gap.significant
    accepted = not (detected and percent > limit_percent)
    figure = f"carbonate {max(0.0, percent):.2f} % of the titrant's alkalinity, u = {percent_u:.2f} %"
    if not detected:
        text = f"no carbonate found ({figure})"
    else:
        text = f"{figure}, allowed: {limit_percent:g} %; unboiled water of the sample may make {water:.2f} % of it"
        text += "" if accepted else f"; {CURE}"
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
