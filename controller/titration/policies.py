"""The dosing policy and the settling rule that a plan asks for."""

from __future__ import annotations

from controller.titration.composition import Composition, Stretch
from controller.titration.dosing import DosingPolicy, EqualVolumes, ModelGuided, SlopeAdaptive
from controller.titration.lag_watch import LagWatch
from controller.titration.plan import RunPlan
from controller.titration.points import PhScale
from controller.titration.settling import FixedWait, SettlingRule, StabilityLimit
from controller.titration.settling_extrapolated import Extrapolated
from controller.titration.settling_lag import LagCorrected


def settling_rule(plan: RunPlan, log: list[Stretch], scale: PhScale) -> SettlingRule:
    """The settling rule; lag-corrected without a probe record becomes extrapolated.

    Args:
        plan: of the run.
        log: doses as (begun, ended, volume), growing during the run.
        scale: of the probe.
    """
    settling, response = plan.settling, plan.probe.response
    if settling.rule == "lag-corrected" and response is not None:
        composition = Composition(response, log)
        return LagCorrected(settling, composition, scale, LagWatch(response, log, composition, scale))
    if settling.rule in {"lag-corrected", "extrapolated"}:
        return Extrapolated(settling)
    return StabilityLimit(settling) if settling.rule == "stability-limit" else FixedWait(settling)


def dosing_policy(plan: RunPlan, scale: PhScale) -> DosingPolicy:
    """The dosing policy."""
    if plan.dosing.policy == "model-guided":
        return ModelGuided(plan, scale)
    return SlopeAdaptive(plan.dosing) if plan.dosing.policy == "slope-adaptive" else EqualVolumes(plan.dosing)
