"""The result of a run: what Finish carries.

The run's own detection decides how many end points there are; the evaluation of the whole curve afterwards gives each
its volume. What the evaluation sees and the run did not confirm is remarked upon and yields no number.
"""

from __future__ import annotations

import math
import warnings
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

import numpy as np

from configs.errors import HalfdropError
from controller.evaluation.carbonate import carbonate_for_sure
from controller.evaluation.curve import Curve
from controller.evaluation.evaluate import evaluate
from controller.evaluation.inverse import LARGEST_PH
from controller.evaluation.result import Evaluation
from controller.titration.audit import Audit, audited
from controller.titration.endpoint import FoundEndPoint
from controller.titration.gaps import drift_over_gaps_mv
from controller.titration.left_out import lost_ml
from controller.titration.points import Point
from controller.titration.precision import offset_sd_ph, pump_precision_ml

if TYPE_CHECKING:
    from controller.titration.core import RunState

FEWEST_POINTS = 6
SAME_POINT_SHARE = 0.02
#: a point seen again is doubtful from so many precisions of the pump on; left out where so many others are left
DOUBTFUL_PRECISIONS, FEWEST_SURE = 10.0, 10
#: an evaluation this many times less certain than the run's own sound model does not take its place
COARSER = 4.0
#: no probe and no calibration is straight to better than this over a few pH, mV
STRAIGHTNESS_MV = 0.2
DIGITS = 7
#: what casts no doubt on the end points is a note, not a warning
ABOUT_PKA = "no pKa:"
#: what the run calls an end point that it saw by the shape of the curve, until the evaluation confirms it
SHAPE_ALONE = "inflection"


def run_result(run: RunState) -> dict[str, Any]:
    """JSON of `halfdrop run` less run path and seed. No end point found: an empty list and no number."""
    world = run.world
    evaluation = _evaluated(run)
    remarks = list(world.warnings)
    audit = _audited(run, evaluation)
    end_points = audit.end_points
    outcome, reason = run.outcome, run.reason or None
    if audit.withheld is not None and outcome == "completed":
        outcome, reason = "stopped", audit.withheld
    remarks += audit.warnings
    if evaluation is not None:
        remarks += [w for w in evaluation.warnings if w not in remarks and not w.startswith(ABOUT_PKA)]
        remarks += _unconfirmed(run, evaluation)
    return {
        "outcome": outcome,
        "reason": reason,
        "end_points": end_points,
        "half_equivalence": _halves(evaluation) if end_points else [],
        "estimators": _rounded(evaluation.estimators()) if evaluation is not None and end_points else {},
        "result": None,
        "doses": world.doses,
        "duration_s": round(world.elapsed_s, 3),
        "titrant_ml": round(world.delivered_ml, DIGITS),
        "notes": [w for w in evaluation.warnings if w.startswith(ABOUT_PKA)] if evaluation is not None else [],
        "probe_lag": probe_lag(run),
        "warnings": remarks,
    }


def probe_lag(run: RunState) -> dict[str, Any] | None:
    """The probe's lag as learned from this run's transients, for the probe's own record; None: nothing learned."""
    learned, record = run.learned_lag, run.plan.probe.response
    if learned is None or record is None:
        return None
    return {
        **asdict(learned),
        "temperature_c": round(run.temperature_c, 2),
        "slowness": round(learned.sum_s / (record.bulk_s + record.film_s), 4),
        "record_holds": run.record_holds,
    }


def sure_points(run: RunState) -> list[Point]:
    """The points that are evaluated: where the lag record was left, without those it made doubtful, if enough are left.

    They lie off together, all to one side, which no uncertainty of each alone says.
    """
    if run.record_holds:
        return run.points
    largest_sd_ml = DOUBTFUL_PRECISIONS * pump_precision_ml(run.plan)
    sure = [p for p in run.points if p.volume_ml >= p.delivered_ml or p.volume_sd_ml <= largest_sd_ml]
    return sure if len(sure) >= FEWEST_SURE else run.points


def run_curve(run: RunState) -> Curve:
    """The settled points as the evaluation takes them, with their uncertainties.

    Raises:
        CurveError: they make no curve.
    """
    return _curve_of(run, sure_points(run))


def lost_among_left_out_ml(run: RunState) -> float:
    """Titrant that the points not evaluated do not account for, mL."""
    sure = {id(point) for point in sure_points(run)}
    left_out = [id(point) not in sure for point in run.points]
    if not any(left_out):
        return 0.0
    try:
        with np.errstate(all="ignore"), warnings.catch_warnings():
            warnings.simplefilter("ignore", RuntimeWarning)
            return lost_ml(_curve_of(run, run.points), left_out)
    except (HalfdropError, ArithmeticError, ValueError):  # no curve can be made of them all
        return 0.0


def _curve_of(run: RunState, points: list[Point]) -> Curve:
    plan = run.plan
    analyte, chemistry = plan.chemistry.analyte, plan.chemistry
    per_unit = run.scale.slope_mv if run.scale.known else 1.0
    return Curve(
        volume_ml=np.array([p.volume_ml for p in points]),
        ph=np.array([p.ph for p in points], dtype=np.float64) if run.scale.known else None,
        potential_mv=np.array([p.potential_mv for p in points]),
        initial_volume_ml=plan.sample.initial_volume_ml,
        titrant_concentration_mol_l=plan.titrant.concentration_mol_l,
        titrant_is_acid=plan.titrant.acid,
        volume_sd_ml=np.array([math.hypot(p.volume_sd_ml, plan.pump.dose_sd_ml, 0.0005) for p in points]),
        signal_sd=np.array(
            [math.hypot(p.potential_sd_mv, STRAIGHTNESS_MV, drift_over_gaps_mv(p.at_s, run.world.gaps)) for p in points]
        )
        / per_unit,
        pka=None if analyte is None else analyte.pka,
        charge=0 if analyte is None else analyte.charge,
        counter_ion_charge=0 if analyte is None else analyte.counter_ion_charge,
        pkw=chemistry.pkw,
        debye_huckel_a=chemistry.debye_huckel_a,
        temperature_c=chemistry.temperature_c,
    )


def _evaluated(run: RunState) -> Evaluation | None:
    if len(run.points) < FEWEST_POINTS:
        return None
    if any(point.ph is not None and abs(point.ph) > LARGEST_PH for point in run.points):
        run.world.warnings.append("readings beyond any pH: the curve is not evaluated")
        return None
    detected_ml = [found.volume_ml for found in run.watch.found]
    try:
        with np.errstate(all="ignore"), warnings.catch_warnings():
            warnings.simplefilter("ignore", RuntimeWarning)  # numbers that no formula likes end as "not sound"
            return evaluate(run_curve(run), end_points_expected=run.plan.end_points.expected, detected_ml=detected_ml)
    except (HalfdropError, ArithmeticError, ValueError) as error:  # the run must end and its record close
        run.world.warnings.append(f"the curve could not be evaluated: {error}")
        return None


def _audited(run: RunState, evaluation: Evaluation | None) -> Audit:
    apart_ml = 0.0 if evaluation is None else _branches_apart_ml(run)
    found = [_end_point(run, one, evaluation, apart_ml) for one in run.watch.found]
    unconfirmed = [p for p in found if p["estimator"] == SHAPE_ALONE]
    if unconfirmed and len(run.points) >= FEWEST_POINTS:
        at_ml = unconfirmed[0]["volume_ml"]
        return Audit([], withheld=f"the whole curve does not show the jump that was seen at {at_ml:.3f} mL")
    if evaluation is None or not found:
        return Audit(found)
    return audited(
        found,
        run_curve(run),
        [point.at_s for point in sure_points(run)],
        evaluation.estimates,
        slowness=run.slowness,
        precision_ml=pump_precision_ml(run.plan),
        offset_sd_ph=offset_sd_ph(run.plan),
        lost_ml=lost_among_left_out_ml(run),
        carbonate=run.plan.looks_for_carbonate,
        record_holds=run.record_holds,
    )


def _branches_apart_ml(run: RunState) -> float:
    """By how much the ends of both branches lie apart where the run looks for carbonate, mL: the jump is between."""
    if not run.plan.looks_for_carbonate or not run.watch.found:
        return 0.0
    gap = carbonate_for_sure(run_curve(run), end_point_ml=run.watch.found[0].volume_ml)
    return 0.0 if gap is None else gap.gap_ml


def _same_point_ml(volume_ml: float, sd_ml: float, apart_ml: float) -> float:
    """How far apart the run's own end point and the evaluation's may be to be one."""
    return SAME_POINT_SHARE * volume_ml + 5.0 * sd_ml + apart_ml


def _end_point(run: RunState, found: FoundEndPoint, evaluation: Evaluation | None, apart_ml: float) -> dict[str, Any]:
    """The evaluation's value of a detected end point where it has one there, else the run's own."""
    volume_ml, sd_ml, estimator = found.volume_ml, found.standard_uncertainty_ml, found.estimator
    ph, potential_mv = found.ph, found.potential_mv
    for point in evaluation.end_points if evaluation is not None else ():
        coarser = point.standard_uncertainty_ml > COARSER * sd_ml and "model" in estimator
        near = abs(point.volume_ml - found.volume_ml) <= _same_point_ml(found.volume_ml, sd_ml, apart_ml)
        if near and not coarser:
            volume_ml, sd_ml, estimator = point.volume_ml, point.standard_uncertainty_ml, point.estimator
            ph, potential_mv = point.ph, point.potential_mv
            break
    return {
        "volume_ml": round(volume_ml, DIGITS),
        "standard_uncertainty_ml": round(
            math.hypot(sd_ml, position_sd_ml(run), run.world.doubt_ml, run.lag_left_ml), DIGITS
        ),
        "ph": None if ph is None else round(ph, 4),
        "potential_mv": None if potential_mv is None else round(potential_mv, 2),
        "estimator": estimator,
    }


def position_sd_ml(run: RunState) -> float:
    """Of a volume between two positions of the plunger; the full syringe is where positions are counted from."""
    pump = run.plan.pump
    begun_full = pump.contents_ml >= pump.syringe_ml - pump.step_ml
    return pump.position_sd_ml * math.sqrt((1.0 if begun_full else 2.0) + 2.0 * run.world.refills)


def _unconfirmed(run: RunState, evaluation: Evaluation) -> list[str]:
    """Jumps that the evaluation sees and the run did not confirm."""
    extra, apart_ml = [], _branches_apart_ml(run)
    for point in evaluation.end_points:
        near = _same_point_ml(point.volume_ml, point.standard_uncertainty_ml, apart_ml)
        if all(abs(point.volume_ml - found.volume_ml) > near for found in run.watch.found):
            extra.append(
                f"the curve shows a jump near {point.volume_ml:.3f} mL that the run did not confirm as an end point; "
                "no number is given for it"
            )
    return extra


def _halves(evaluation: Evaluation | None) -> list[dict[str, Any]]:
    if evaluation is None:
        return []
    return [
        {key: round(value, DIGITS) if isinstance(value, float) else value for key, value in half.items()}
        for half in evaluation.to_json()["half_equivalence"]
    ]


def _rounded(estimators: dict[str, list[float]]) -> dict[str, list[float]]:
    return {name: [round(v, DIGITS) for v in volumes] for name, volumes in estimators.items()}
