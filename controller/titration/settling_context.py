"""What a settling rule is told of the run when a point begins to settle."""

from __future__ import annotations

from typing import TYPE_CHECKING

from controller.titration.dosing import PlannedDose, local_slope
from controller.titration.precision import near_ml, pump_precision_ml
from controller.titration.settling import SettlingContext

if TYPE_CHECKING:
    from controller.titration.core import RunState


def settling_context(run: RunState, planned: PlannedDose, begun_s: float) -> SettlingContext:
    """Return what the settling rule may know about the point that begins to settle at `begun_s`."""
    sound = run.forecast.sound
    slope = local_slope(run.points)
    if sound is not None:
        try:
            ph = sound.ph_at(run.world.delivered_ml)
            slope = max(slope * 0.2, 1.0 / max(abs(sound.volume_and_slope(ph)[1]), 1e-9))
        except (ZeroDivisionError, OverflowError):
            pass
    return SettlingContext(
        at_s=begun_s,
        delivered_ml=run.world.delivered_ml,
        noise_mv=run.probe.noise.sd_mv,
        points=len(run.points),
        local_slope_mv_ml=round(slope, 3),
        step_mv=round(planned.expected_mv or 0.0, 3),
        fit=sound,
        end_point=len(run.watch.found) + 1,
        precision_ml=pump_precision_ml(run.plan),
        near_ml=near_ml(run.plan, sound),
        rest=(run.points[-1].at_s, run.points[-1].potential_mv),
        about_ml=None if run.target is None else run.target.about_ml(run.points, sound),
    )
