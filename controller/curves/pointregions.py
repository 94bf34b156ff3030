"""The region of each point of an evaluated curve, as plain data."""

from __future__ import annotations

from typing import Any

from controller.evaluation.curve import Curve
from controller.evaluation.regions import Step, regions

#: of a longer table only so many points are told, evenly taken
_MOST_POINTS = 500


def regions_of(curve: Curve, result: dict[str, Any]) -> list[dict[str, Any]]:
    """Return the result's key "regions": where each point lies against the pKa, and the buffer equation there.

    Args:
        curve: the points.
        result: the JSON of `evaluate`: its end points, and the conditional pKa of the step before each.
    """
    volumes = [float(point["volume_ml"]) for point in result["end_points"]]
    steps = []
    for previous, end in zip([0.0, *volumes], volumes, strict=False):
        halves = [half for half in result["half_equivalence"] if previous < half["volume_ml"] < end]
        pka = halves[0].get("conditional_pka") if halves else None
        steps.append(Step(previous_ml=previous, end_point_ml=end, pka=pka))
    found = regions(curve, steps)
    return [
        {
            "volume_ml": one.volume_ml,
            "ph": one.ph,
            "region": one.region,
            "end_point": one.end_point,
            "ph_less_pka": one.ph_less_pka,
            "buffer_equation_ph": one.buffer_equation.ph,
            "buffer_equation_refused": one.buffer_equation.refused,
        }
        for one in found[:: 1 + len(found) // _MOST_POINTS]
    ]
