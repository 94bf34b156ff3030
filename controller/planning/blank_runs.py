"""Blank runs: the method without its sample, and what its records say at the pH where the sample's titration ends."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from configs.method import AnalyteSettings, MethodSettings
from controller.curves.evaluate_record import evaluate_points_at_ph
from controller.evaluation.at_ph import volume_at_ph
from controller.evaluation.curve import Curve
from controller.foresight.expectation import vessel_of_plan
from controller.planning.endpointinputs import calibration_name
from controller.planning.lots import closed_run
from controller.planning.runplan import SampleChoice, expected_account, make_plan
from controller.records.record import read_record
from controller.titration.plan import RunPlan
from simulators.solution import titration_curve

#: what a simulated beaker holds in a blank run
SIMULATED_WATER = "water"
#: a blank of a titration to equivalence goes so far beyond the pH expected there: samples differ
BEYOND_EXPECTED_PH = 0.5
#: a volume below so many of its own standard uncertainties is not detected
DETECTION_SDS = 3.0
#: the blank's course is told in steps of this
COURSE_STEP_PH = 0.1


@dataclass(frozen=True, slots=True, kw_only=True)
class SeenBlank:
    """One blank run at a pH: `volume_ml` None where it shows nothing; its own uncertainty is without the pH scale's."""

    volume_ml: float | None
    own_standard_uncertainty_ml: float
    ml_per_ph: float
    ph_standard_uncertainty: float
    probe_calibration: str
    course: tuple[tuple[float, float], ...]
    detection_limit_ml: float | None


def sample_end_ph(method: MethodSettings, bench: BenchSettings) -> float | None:
    """Return the pH at which the sample's titration ends: as set, or as expected; None where nothing tells."""
    if method.end_points.at_ph is not None:
        return method.end_points.at_ph
    account = expected_account(bench)
    try:
        plan = make_plan(method, bench, SampleChoice(), pump=account, probe_identity=account.identity)
    except HalfdropError:
        return None
    expected_ml = plan.chemistry.expected_equivalence_volume_ml
    if plan.chemistry.analyte is None or expected_ml is None:
        return None
    vessel = vessel_of_plan(plan, equivalence_ml=expected_ml)
    place = 1.0 if method.report_as is None else method.report_as.end_point / method.end_points.expected
    initial_ml = plan.sample.initial_volume_ml
    (ph,) = titration_curve(vessel.sample, vessel.titrant, initial_ml, [place * expected_ml], vessel.medium)
    return round(float(ph), 2)


def blank_method(method: MethodSettings, ph: float, *, acid: bool) -> MethodSettings:
    """Return the method as it is carried out without sample: to a set pH, and the volume is all it reports.

    Args:
        method: of the sample.
        ph: where the blank counts.
        acid: whether the titrant is an acid.
    """
    beyond = 0.0 if method.end_points.at_ph is not None else BEYOND_EXPECTED_PH
    sample = method.sample
    plain = sample.model_copy(
        update={
            "taken_by": "volume",
            "volume_ml": sample.initial_volume_ml,
            "mass_g": None,
            "volume_standard_uncertainty_ml": 0.0,
            "mass_standard_uncertainty_g": 0.0,
        }
    )
    return method.model_copy(
        update={
            "name": f"blank-of-{method.name}"[:64].rstrip("-"),
            "title": f"Blank of: {method.title}"[:200],
            "kind": "end-point-ph",
            "end_points": method.end_points.model_copy(
                update={"expected": 1, "at_ph": round(ph - beyond if acid else ph + beyond, 2)}
            ),
            "sample": plain,
            "analyte": AnalyteSettings(),
            "report_as": None,
            "preparation": None,
            "back_titration": None,
            "standard": None,
            "blank_lot_id": None,
            "simulated_sample": SIMULATED_WATER,
        }
    )


def seen_at_ph(path: Path, ph: float) -> SeenBlank:
    """Return what a blank's record says at a pH.

    Raises:
        HalfdropError: it has no result, or ended before it came there.
    """
    plan, result = closed_run(path)
    record = read_record(path)
    curve, found = evaluate_points_at_ph(plan, record, ph)
    name = calibration_name(plan.probe)
    course = _course(curve)
    if found["end_points"]:
        point: dict[str, Any] = found["end_points"][0]
        own = float(point["own_standard_uncertainty_ml"])
        limit = DETECTION_SDS * own if plan.end_points.at_ph is not None else None
        seen = float(point["volume_ml"]) > DETECTION_SDS * own
        return SeenBlank(
            volume_ml=float(point["volume_ml"]) if seen else None,
            own_standard_uncertainty_ml=own,
            ml_per_ph=float(point["ml_per_ph"]),
            ph_standard_uncertainty=float(point["ph_standard_uncertainty"]),
            probe_calibration=name,
            course=course,
            detection_limit_ml=limit,
        )
    if not _began_beyond(plan, curve, ph):
        what = f"it ended before it came to pH {ph:.2f} ({result.get('reason') or result.get('outcome')})"
        raise HalfdropError(what, where=path.stem, remedy="Leave it out, or titrate the blank again")
    return SeenBlank(
        volume_ml=None,
        own_standard_uncertainty_ml=0.0,
        ml_per_ph=0.0,
        ph_standard_uncertainty=0.0,
        probe_calibration=name,
        course=course,
        detection_limit_ml=None,
    )


def mean_course(courses: list[tuple[tuple[float, float], ...]]) -> list[dict[str, float]]:
    """Return the mean volume of several blanks at every pH that all of them passed."""
    tables = [dict(course) for course in courses]
    common = sorted(set.intersection(*(set(table) for table in tables))) if tables else []
    return [
        {"ph": ph, "volume_ml": round(sum(table[ph] for table in tables) / len(tables), 7)} for ph in common
    ]  # fmt: skip


def _course(curve: Curve) -> tuple[tuple[float, float], ...]:
    if curve.ph is None or len(curve.ph) < 2:
        return ()
    low, high = float(np.min(curve.ph)), float(np.max(curve.ph))
    steps = np.arange(np.ceil(low / COURSE_STEP_PH), np.floor(high / COURSE_STEP_PH) + 1)
    phs = [round(float(step) * COURSE_STEP_PH, 2) for step in steps]
    told = [(ph, volume_at_ph(curve, ph)) for ph in phs]
    return tuple((ph, round(found.volume_ml, 7)) for ph, found in told if found is not None)


def _began_beyond(plan: RunPlan, curve: Curve, ph: float) -> bool:
    if curve.ph is None or not len(curve.ph):
        return False
    first = float(curve.ph[0])
    return first <= ph if plan.titrant.acid else first >= ph
