"""The result of a run: what Finish carries."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from controller.titration.core import RunState


def run_result(run: RunState) -> dict[str, Any]:
    """JSON of `halfdrop run` less run path and seed. No end point found: an empty list and no number."""
    world = run.world
    end_points = []
    for found in run.watch.found:
        sd = math.hypot(found.standard_uncertainty_ml, run.plan.pump.position_sd_ml, world.doubt_ml)
        end_points.append(
            {
                "volume_ml": round(found.volume_ml, 6),
                "standard_uncertainty_ml": round(sd, 6),
                "ph": found.ph,
                "potential_mv": found.potential_mv,
                "estimator": found.estimator,
            }
        )
    return {
        "outcome": run.outcome,
        "reason": run.reason or None,
        "end_points": end_points,
        "half_equivalence": [],
        "estimators": {},
        "result": None,
        "doses": world.doses,
        "duration_s": round(world.elapsed_s, 3),
        "titrant_ml": round(world.delivered_ml, 6),
        "warnings": list(world.warnings),
    }
