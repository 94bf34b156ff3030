"""Points that are left out of the evaluation still tell whether titrant was lost among them.

Where the lag record did not hold, the points taken with it lie off together, and no evaluation takes them. What is off
goes evenly from one to the next, though; titrant that was counted and did not come (air in the syringe) shows between
two of them as a difference that none of the others has. Without this look nothing would: the points that are left may
all lie near the end point, and a step before them moves it and nothing else.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from controller.evaluation.curve import Curve
from controller.evaluation.modelfit import fit_charge_balance

#: differences between fewer points have no middle
FEWEST_LEFT_OUT = 4
#: standard deviations of a point from which a difference is believed; 110 runs of slow probes without loss showed 2.4
#: at most but for one (3.2)
BELIEVED_SDS = 2.5


def lost_ml(curve: Curve, left_out: Sequence[bool]) -> float:
    """Return the titrant that differences between points left out do not account for, mL; 0 where all do.

    Args:
        curve: all points, the others with their small uncertainties.
        left_out: of each point, whether the evaluation leaves it out.
    """
    places = np.nonzero(np.asarray(left_out, dtype=np.bool_))[0]
    if len(places) < FEWEST_LEFT_OUT:
        return 0.0
    fit = fit_charge_balance(curve)
    if fit is None or len(fit.residual_ml) != len(left_out):
        return 0.0
    steps = np.diff(np.asarray(fit.residual_ml)[places])
    off = np.abs(steps - np.median(steps))
    sd_ml = float(np.median(np.asarray(fit.residual_sd_ml)[places]))  # lag and reading, both in volume
    return float(np.sum(off[off > BELIEVED_SDS * sd_ml]))


def told(lost: float) -> str:
    """Return the warning about a loss of so many mL."""
    return (
        f"{lost:.3f} mL do not fit among the points that were taken before the lag record was left (air in the line? a "
        "drop? a knock?); the uncertainty is widened by it"
    )
