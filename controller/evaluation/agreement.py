"""Do the estimators of one end point agree within what they claim?"""

from __future__ import annotations

import math
from collections.abc import Sequence

from controller.evaluation.estimate import GRAN_BEFORE, Estimate

#: differences beyond this many combined standard uncertainties are flagged. Of two estimators of the same points, one
#: as good as the points allow, the difference has the variance u_B^2 - u_A^2 (Hausman 1978; from memory), at most what
#: is taken here; that each u comes from five to ten points, and that up to five are compared, asks for 4 and not 3.
#: 400 runs without a fault: at most 3.9
COVERAGE_FACTOR = 4.0
#: a Gran line before the end point takes one activity coefficient and an ideal slope of the probe: on the weak acids of
#: the nominal bench it ends 0.15 % late on average
_LINE_SHARE = 0.002


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
        line_ml = _LINE_SHARE * other.volume_ml if other.estimator == GRAN_BEFORE else 0.0
        combined = math.hypot(other.standard_uncertainty_ml, reported.standard_uncertainty_ml, line_ml)
        if abs(difference) > COVERAGE_FACTOR * combined:
            flags.append(
                f"end point {number}: {other.estimator} gives {other.volume_ml:.4f} mL, {difference:+.4f} mL from the "
                f"{reported.estimator}; that is more than their uncertainties allow ({combined:.4f} mL combined)"
            )
    return flags
