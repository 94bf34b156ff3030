"""Carbonate in a base titrant, seen where a strong acid is titrated: the gap between both Gran lines.

Before the end point carbonate takes two protons, beyond it none: the line before meets zero at n/(OH + 2 CO3), the
line beyond at n/OH, so (V beyond - V before)/V before = 2 CO3/OH. A weak acid's run shows nothing of it safely.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from controller.evaluation.estimate import Estimate

#: a gap beyond this many of its standard uncertainties is told
_SIGNIFICANT = 3.0


@dataclass(frozen=True, slots=True, kw_only=True)
class CarbonateGap:
    """The gap in mL with its standard uncertainty, and the share of the titrant's alkalinity that is carbonate."""

    gap_ml: float
    standard_uncertainty_ml: float
    carbonate_share: float

    @property
    def significant(self) -> bool:
        """Is there more than the lines' own uncertainties explain?"""
        return self.gap_ml > _SIGNIFICANT * self.standard_uncertainty_ml


def carbonate_gap(before: Estimate, beyond: Estimate) -> CarbonateGap:
    """Return the gap between the Gran lines of a strong acid titrated with a base."""
    gap = beyond.volume_ml - before.volume_ml
    return CarbonateGap(
        gap_ml=gap,
        standard_uncertainty_ml=math.hypot(before.standard_uncertainty_ml, beyond.standard_uncertainty_ml),
        carbonate_share=gap / beyond.volume_ml,
    )
