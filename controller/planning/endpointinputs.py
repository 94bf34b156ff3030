"""End points and blanks of runs as the evaluation's plain arguments; what hangs on the probe's pH is kept apart.

An end point at a set pH moves with every error of the pH scale, and so does its blank: where one calibration gave both,
the error is one and the same.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import fmean
from typing import Any

from controller.calibration.validity import SAME_END_POINT_PH, end_point_words
from controller.evaluation.quantity import Quantity
from controller.evaluation.samplechain import Titration
from controller.planning.amountinputs import end_point_of, freedom_of, portion_of
from controller.titration.plan import Probe, RunPlan
from controller.titration.traceability import BlankInForce


def end_point_named(plan: RunPlan) -> str:
    """Return what the end point is, in the words that stand beside an amount."""
    return end_point_words(plan.end_points.at_ph)


def titration_of(plan: RunPlan, result: dict[str, Any], number: int) -> Titration:
    """Return a run's end point, without what the calibration of the probe adds to its uncertainty.

    Raises:
        HalfdropError: the run has no such end point, or no amount of sample.
    """
    volume_ml, u_ml = end_point_of(result, number)
    point = result["end_points"][number - 1]
    return Titration(
        volume_ml=volume_ml,
        standard_uncertainty_ml=float(point.get("own_standard_uncertainty_ml", u_ml)),
        portion=portion_of(plan),
        ml_per_ph=float(point.get("ml_per_ph") or 0.0),
    )


def end_point_ph_of(plan: RunPlan, results: Sequence[dict[str, Any]], number: int) -> Quantity | None:
    """Return the error of the pH at which runs end; None where their volumes do not hang on it."""
    if plan.end_points.at_ph is None:
        return None
    us = [float(one["end_points"][number - 1].get("ph_standard_uncertainty") or 0.0) for one in results]
    return Quantity(
        name="end point pH",
        value=0.0,
        standard_uncertainty=max(us),
        unit="pH",
        shared_id=calibration_name(plan.probe),
    )


def calibration_name(probe: Probe) -> str:
    """Return the name of the cause of error that all pH of one calibration share."""
    held = probe.calibration
    if held is None:
        return f"probe {probe.identity}"
    made = held.record_sha256[:12] if held.record_sha256 else held.calibrated_utc or held.source
    return f"pH scale of probe {probe.identity}, calibration {made}"


@dataclass(frozen=True, slots=True, kw_only=True)
class BlankOfRun:
    """The blank as it is taken off: volume, the error of its pH (None: does not hang on it), dV/dpH, warnings."""

    volume: Quantity
    ph: Quantity | None
    ml_per_ph: float
    warnings: tuple[str, ...]


def blank_of_run(
    held: BlankInForce, plan: RunPlan, results: Sequence[dict[str, Any]], number: int, *, shares_ph: bool
) -> BlankOfRun:
    """Return the blank at the sample's end point pH, where its course tells it.

    Args:
        held: in force.
        plan: of the sample's runs.
        results: of the sample's runs.
        number: of the end point.
        shares_ph: whether the sample's end point hangs on the pH scale too.
    """
    volume_ml, warnings = held.volume_ml, []
    phs = [float(one["end_points"][number - 1]["ph"]) for one in results if one["end_points"][number - 1].get("ph")]
    wanted = plan.end_points.at_ph if plan.end_points.at_ph is not None else (fmean(phs) if phs else None)
    elsewhere = held.end_point_ph is not None and wanted is not None
    if elsewhere and abs((wanted or 0.0) - (held.end_point_ph or 0.0)) > SAME_END_POINT_PH:
        found = volume_at(held, wanted or 0.0)
        if found is None:
            warnings.append(
                f"blank {held.lot_id}: taken at pH {held.end_point_ph:.2f}, the sample ends at pH {wanted:.2f}, which "
                "its course does not reach; repeat 'halfdrop calibrate blank' with --at-ph"
            )
        else:
            volume_ml = found
    ph = None
    if shares_ph and held.ph_standard_uncertainty > 0.0 and held.ml_per_ph:
        ph = Quantity(
            name="blank end point pH",
            value=0.0,
            standard_uncertainty=held.ph_standard_uncertainty,
            unit="pH",
            shared_id=held.probe_calibration,
        )
    volume = Quantity(
        name="blank",
        value=volume_ml,
        standard_uncertainty=held.standard_uncertainty_ml,
        unit="mL",
        degrees_of_freedom=freedom_of(held.degrees_of_freedom),
    )
    return BlankOfRun(volume=volume, ph=ph, ml_per_ph=held.ml_per_ph if ph else 0.0, warnings=tuple(warnings))


def volume_at(held: BlankInForce, ph: float) -> float | None:
    """Return the blank's volume at a pH by its course, mL; None beyond it."""
    course = sorted(held.course, key=lambda one: one.ph)
    for low, high in itertools.pairwise(course):
        if low.ph <= ph <= high.ph:
            share = (ph - low.ph) / (high.ph - low.ph) if high.ph > low.ph else 0.0
            return low.volume_ml + share * (high.volume_ml - low.volume_ml)
    return None
