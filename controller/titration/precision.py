"""What the pump can do at best; limits of settling, dosing and detection are counted in it, not in fixed volumes."""

from __future__ import annotations

import math

from controller.evaluation.inverse import InverseFit
from controller.titration.plan import RunPlan
from simulators.constants import ideal_slope_mv

#: the last stretch before equivalence begins at this many smallest doses, or this share of the equivalence volume
NEAR_DOSES = 30.0
NEAR_SHARE = 0.03


def pump_precision_ml(plan: RunPlan) -> float:
    """Standard deviation of a delivered position: correlated and white part joined, at least one step; mL."""
    pump = plan.pump
    return max(math.hypot(pump.position_sd_ml, pump.dose_sd_ml), pump.step_ml)


def near_ml(plan: RunPlan, sound: InverseFit | None) -> float:
    """Distance from the predicted equivalence within which doses follow the curve and not what remains; mL."""
    share = 0.0 if sound is None else NEAR_SHARE * round(sound.equivalence_ml, 6)
    return max(NEAR_DOSES * plan.dosing.smallest_ml, share)


def offset_sd_ph(plan: RunPlan) -> float | None:
    """Standard uncertainty of the calibration's offset, units of pH; None without a calibration."""
    calibration = plan.probe.calibration
    if calibration is None:
        return None
    slope_mv = calibration.slope_fraction * ideal_slope_mv(plan.chemistry.temperature_c)
    return calibration.offset_standard_uncertainty_mv / slope_mv
