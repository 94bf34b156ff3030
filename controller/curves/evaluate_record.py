"""The end points of a record again, from its points; also of one that was broken off."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from configs.errors import HalfdropError
from controller.curves.evaluate_set_ph import result_at_ph
from controller.curves.identify import identity_of
from controller.curves.pointregions import regions_of
from controller.evaluation.curve import Array, Curve, CurveError
from controller.evaluation.evaluate import evaluate
from controller.evaluation.result import Evaluation
from controller.planning.amounts import amount_of_plan
from controller.records.encoding import plan_from_json
from controller.records.record import Record, points, read_record
from controller.records.verification import verify
from controller.titration.audit import audited
from controller.titration.gaps import drift_over_gaps_mv
from controller.titration.outcome import ABOUT_PKA, STRAIGHTNESS_MV
from controller.titration.plan import RunPlan
from controller.titration.precision import offset_sd_ph, pump_precision_ml
from simulators.constants import ideal_slope_mv

#: no probe and no calibration is straight to better than this over a few pH
STRAIGHTNESS_PH = 0.003
#: an uncertainty larger than this many times another one is another one
_LARGER = 1.02


def evaluate_record(path: Path, *, end_points_expected: int | None = None, identify: bool = False) -> dict[str, Any]:
    """Evaluate a record's settled points with what its plan knows.

    Args:
        path: the record.
        end_points_expected: how many end points there should be; None: as its plan says.
        identify: also rank what the substance may be.

    Returns:
        The JSON of `evaluate`; outcome and reason are the run's own, None for a run without an end; `record_state`
        tells whether the record is as it was written.

    Raises:
        HalfdropError: it is no record, or its plan cannot be read.
    """
    found = verify(path)
    result = evaluate_points(read_record(path), end_points_expected=end_points_expected, identify=identify)
    result["record_state"] = found.state
    if found.state == "edited":
        result["warnings"].insert(0, f"NOT TO BE TRUSTED: the record is not as it was written ({found.what})")
    return result


def evaluate_points(
    record: Record, *, end_points_expected: int | None = None, identify: bool = False
) -> dict[str, Any]:
    """As `evaluate_record`, for a record that is read already."""
    path = record.path
    plan = plan_from_json(record.header.get("plan"), where=str(path))
    curve = curve_of(plan, record, where=str(path))
    closing = record.closing or {}
    result = _at_set_ph(plan, record, curve) if end_points_expected is None else None
    if result is None:
        evaluation = evaluate(
            curve,
            end_points_expected=end_points_expected or plan.end_points.expected,
            detected_ml=_detected_ml(record),
        )
        result = evaluation.to_json()
        result["notes"] = [one for one in result["warnings"] if one.startswith(ABOUT_PKA)]
        result["warnings"] = [one for one in result["warnings"] if one not in result["notes"]]
        _hold_against_run(result, evaluation, plan, record, curve)
    result["run"], result["seed"] = str(path), plan.seed
    result["run_outcome"] = closing.get("outcome", "open")
    result["result"] = _amount(plan, result)
    result["regions"] = regions_of(curve, result)
    if identify:
        u_mol_l = plan.titrant.standard_uncertainty_mol_l
        result["identity"] = identity_of(
            curve, result["end_points"], mass_g=plan.sample.mass_g, titrant_standard_uncertainty_mol_l=u_mol_l
        )
    if record.closing is None:
        result["warnings"].append("the run has no closing line: what is evaluated is what was recorded")
    return result


def _at_set_ph(plan: RunPlan, record: Record, curve: Curve) -> dict[str, Any] | None:
    """The volume at the plan's set pH; None where it has none."""
    if plan.end_points.at_ph is None:
        return None
    result = _result_at_ph(plan, record, curve, plan.end_points.at_ph)
    own = (record.closing or {}).get("result") or {}
    for point in result["end_points"]:
        _keep_doubts(point, own.get("end_points") or [], result["warnings"])
    return result


def evaluate_points_at_ph(plan: RunPlan, record: Record, ph: float) -> tuple[Curve, dict[str, Any]]:
    """Return a record's curve, and the JSON of `evaluate` for the volume at a pH of it, whatever its plan looked for.

    Raises:
        CurveError: there are too few points, or they make no curve.
    """
    curve = curve_of(plan, record, where=str(record.path))
    return curve, _result_at_ph(plan, record, curve, ph)


def _result_at_ph(plan: RunPlan, record: Record, curve: Curve, ph: float) -> dict[str, Any]:
    at_s = [float(one["at_s"] or 0.0) for one in _used(record)]
    return result_at_ph(plan, curve, ph, beyond_ml=_beyond_points_ml(plan, record), at_s=at_s)


def _amount(plan: RunPlan, result: dict[str, Any]) -> dict[str, Any] | None:
    """Return the amount; where it is refused the end points stand and the reason is told."""
    try:
        return amount_of_plan(plan, result)
    except HalfdropError as error:
        result["warnings"].append(f"the amount could not be computed: {error}")
        return None


def _hold_against_run(
    result: dict[str, Any], evaluation: Evaluation, plan: RunPlan, record: Record, curve: Curve
) -> None:
    """Bring in what the points alone do not tell: plunger, doses in doubt, the last look, the run's own doubts."""
    beyond_ml = _beyond_points_ml(plan, record)
    for point in result["end_points"]:
        point["standard_uncertainty_ml"] = math.hypot(point["standard_uncertainty_ml"], beyond_ml)
    audit = audited(
        result["end_points"],
        curve,
        [float(one["at_s"] or 0.0) for one in _used(record)],
        evaluation.estimates,
        slowness=None,  # learned while it ran; what it cost is in the run's own uncertainty, below
        precision_ml=pump_precision_ml(plan),
        offset_sd_ph=offset_sd_ph(plan),
        carbonate=plan.looks_for_carbonate,
    )
    result["end_points"] = audit.end_points
    result["warnings"] += audit.warnings
    result["reason"] = audit.withheld or result["reason"]
    own = (record.closing or {}).get("result") or {}
    for point in result["end_points"]:
        _keep_doubts(point, own.get("end_points") or [], result["warnings"])
    if record.closing is not None and result["end_points"] and not own.get("end_points"):
        result["warnings"].append(
            f"the run itself gave no end point: {record.closing.get('reason') or 'no reason told'}"
        )


def _keep_doubts(point: dict[str, Any], own: list[dict[str, Any]], warnings: list[str]) -> None:
    """The run saw more than its points (time, a slow probe): its larger uncertainty of the same end point stays."""
    u_ml = float(point["standard_uncertainty_ml"])
    for one in own:
        theirs = float(one.get("standard_uncertainty_ml") or 0.0)
        near = abs(float(one["volume_ml"]) - float(point["volume_ml"])) <= max(u_ml, theirs)
        if near and theirs > _LARGER * u_ml:
            point["standard_uncertainty_ml"] = theirs
            warnings.append(
                f"end point at {point['volume_ml']:.4f} mL: the run's own uncertainty, {theirs:.2g} mL, is kept; its "
                f"points alone give {u_ml:.2g} mL"
            )
            return


def _beyond_points_ml(plan: RunPlan, record: Record) -> float:
    """Standard uncertainty of a volume by the plunger's positions (two more for each refill) and doses in doubt, mL."""
    pump = plan.pump
    begun_full = pump.contents_ml >= pump.syringe_ml - pump.step_ml
    refills = sum(1 for _ in record.of("refilled"))
    positions = (1.0 if begun_full else 2.0) + 2.0 * refills
    doubts = [float(one["highest_ml"]) - float(one["lowest_ml"]) for one in record.of("failed")
              if one.get("highest_ml") is not None and one.get("lowest_ml") is not None]  # fmt: skip
    return math.hypot(pump.position_sd_ml * math.sqrt(positions), *[doubt / math.sqrt(12.0) for doubt in doubts])


def _used(record: Record) -> list[dict[str, Any]]:
    """The points that make the curve, in the order of volume."""
    found = [one for one in points(record) if one["volume_ml"] is not None and one["potential_mv"] is not None]
    return sorted(found, key=lambda one: float(one["volume_ml"]))


def curve_of(plan: RunPlan, record: Record, *, where: str) -> Curve:
    """Return the record's points as a curve.

    Raises:
        CurveError: there are too few, or they make no curve.
    """
    found = _used(record)
    if not found:
        raise CurveError("no points in it", where=where, remedy="Nothing can be evaluated")
    chemistry, analyte = plan.chemistry, plan.chemistry.analyte
    known = all(one["ph"] is not None for one in found)
    volume_sd, signal_sd = _spreads(plan, found, _gaps(record), known=known)
    curve = Curve(
        volume_ml=np.array([one["volume_ml"] for one in found], dtype=np.float64),
        ph=np.array([one["ph"] for one in found], dtype=np.float64) if known else None,
        potential_mv=np.array([one["potential_mv"] for one in found], dtype=np.float64),
        initial_volume_ml=plan.sample.initial_volume_ml,
        titrant_concentration_mol_l=plan.titrant.concentration_mol_l,
        titrant_is_acid=plan.titrant.acid,
        volume_sd_ml=volume_sd,
        signal_sd=signal_sd,
        pkw=chemistry.pkw,
        debye_huckel_a=chemistry.debye_huckel_a,
        temperature_c=chemistry.temperature_c,
    )
    if analyte is None:
        return curve
    return replace(curve, pka=analyte.pka, charge=analyte.charge, counter_ion_charge=analyte.counter_ion_charge)


def _gaps(record: Record) -> list[tuple[float, float]]:
    """When the run went on after a gap (run time), and how long it had stood, s."""
    told = [one for one in record.of("resumed") if "observation" in one]
    return [(float(one["at_s"]), float(one["gap_s"])) for one in told]


def _spreads(
    plan: RunPlan, found: list[dict[str, Any]], gaps: list[tuple[float, float]], *, known: bool
) -> tuple[float | Array, float | Array | None]:
    """Return standard deviations of volume and signal: the run's own where the points hold them."""
    calibration = plan.probe.calibration
    if any(one.get("volume_sd_ml") is None or one.get("potential_sd_mv") is None for one in found):
        return math.hypot(plan.pump.dose_sd_ml, plan.pump.step_ml), STRAIGHTNESS_PH if known else None
    per_unit = 1.0
    if known and calibration is not None:
        per_unit = calibration.slope_fraction * ideal_slope_mv(plan.chemistry.temperature_c)
    volume = [math.hypot(one["volume_sd_ml"], plan.pump.dose_sd_ml, 0.0005) for one in found]
    signal = [
        math.hypot(one["potential_sd_mv"], STRAIGHTNESS_MV, drift_over_gaps_mv(float(one["at_s"] or 0.0), gaps))
        / per_unit
        for one in found
    ]
    return np.array(volume, dtype=np.float64), np.array(signal, dtype=np.float64)


def _detected_ml(record: Record) -> list[float]:
    return [
        float(entry["volume_ml"])
        for entry in record.of("report")
        if entry.get("what") == "end-point" and isinstance(entry.get("volume_ml"), int | float)
    ]
