"""Do the estimators of one end point agree within what they claim?"""

from __future__ import annotations

import math
from collections.abc import Sequence

from controller.evaluation.estimate import Estimate

#: differences beyond this many combined standard uncertainties are flagged; several estimators are compared, so that
#: the coverage factor for 95 % would flag one curve in ten that has nothing wrong
COVERAGE_FACTOR = 4.0


def disagreements(reported: Estimate, others: Sequence[Estimate], *, number: int) -> list[str]:
    """Return a sentence for each sound estimate that differs from the reported one by more than both allow.

    Args:
        reported: the estimate that is given as the result.
        others: every estimate of the same end point.
        number: of the end point, from 1, for the text.
    """
    flags = []
    for other in others:
        if other is reported or not other.sound or other.estimator == reported.estimator:
            continue
        difference = other.volume_ml - reported.volume_ml
        combined = math.hypot(other.standard_uncertainty_ml, reported.standard_uncertainty_ml)
        if abs(difference) > COVERAGE_FACTOR * combined:
            flags.append(
                f"end point {number}: {other.estimator} gives {other.volume_ml:.4f} mL, {difference:+.4f} mL from the "
                f"{reported.estimator}; that is more than their uncertainties allow ({combined:.4f} mL combined)"
            )
    return flags
