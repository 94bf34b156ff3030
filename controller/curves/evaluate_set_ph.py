"""The volume at a run's set pH again, from the points of its record."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from controller.evaluation.at_ph import evaluate_at_ph, volume_at_ph
from controller.evaluation.curve import Curve
from controller.titration.plan import RunPlan
from controller.titration.target_ph_result import common_ph_sd, end_point_json, judged, last_look
from simulators.constants import ideal_slope_mv


def result_at_ph(plan: RunPlan, curve: Curve, ph: float, *, beyond_ml: float, at_s: Sequence[float]) -> dict[str, Any]:
    """Return the JSON of `evaluate` for a run to a set pH.

    Args:
        plan: of the run.
        curve: its points.
        ph: the set pH.
        beyond_ml: standard uncertainty by plunger positions and doses in doubt, mL.
        at_s: when each of its points was taken.
    """
    calibration = plan.probe.calibration
    fraction = 1.0 if calibration is None else calibration.slope_fraction
    temperature_c = plan.chemistry.temperature_c
    common = common_ph_sd(plan, at_s[-1] - at_s[0], fraction * ideal_slope_mv(temperature_c))
    result = evaluate_at_ph(curve, ph, common_ph_sd=common).to_json()
    found = volume_at_ph(curve, ph, common_ph_sd=common)
    if found is None:
        return result
    point = end_point_json(plan, found, beyond_ml=beyond_ml, temperature_c=temperature_c)
    told, contradicting = last_look(curve, at_s, point, slowness=None)
    warnings, withheld = judged(plan, found, point)
    result["warnings"] += [*warnings, *told]
    withheld = contradicting or withheld
    result["end_points"] = [] if withheld else [{**point, "potential_mv": result["end_points"][0]["potential_mv"]}]
    result["reason"] = withheld or result["reason"]
    return result
