"""The result of a titration to a set pH: the interpolated volume, what it rests on, and what speaks against it."""

from __future__ import annotations

import math
import warnings
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from controller.evaluation.at_ph import VolumeAtPh, estimator_name, volume_at_ph
from controller.evaluation.contradiction import believed
from controller.evaluation.curve import Curve, CurveError
from controller.evaluation.mishaps import explain
from controller.evaluation.modelfit import fit_charge_balance
from controller.titration import left_out
from controller.titration.audit import (
    LARGEST_SHARE,
    NOTABLE_SLOWNESS,
    SLOWNESS_COST,
    contradiction,
    known_beforehand,
    mishap_told,
    spread_allowed,
)
from controller.titration.outcome import (
    DIGITS,
    STRAIGHTNESS_MV,
    lost_among_left_out_ml,
    position_sd_ml,
    probe_lag,
    run_curve,
    sure_points,
)
from controller.titration.plan import RunPlan
from controller.titration.points import calibration_ph_sd
from controller.titration.precision import pump_precision_ml
from controller.titration.target_ph import ALLOWED_PASS_PH, ALREADY_BEYOND

if TYPE_CHECKING:
    from controller.titration.core import RunState

#: drift of a good probe, which its calibration does not know of
USUAL_DRIFT_MV_MIN = 0.1
#: an uncertainty of fewer precisions of the pump is never too large a share
_SMALL_PRECISIONS = 20.0
#: what may come without a dose: precisions of the pump, share of what the lag explains, standard deviations of pH
_STILL_PRECISIONS, _STILL_SHARE, _STILL_SDS = 2.0, 0.5, 4.0
#: smallest doses below which passing the set pH is nobody's fault
_FEW_DOSES = 4.0


def target_result(run: RunState) -> dict[str, Any]:
    """JSON of `halfdrop run` less run path and seed; without a determination no number."""
    world = run.world
    outcome, reason = run.outcome, run.reason or None
    end_points, remarks = [], list(world.warnings)
    if run.watch.found:
        point, told, withheld = _determination(run)
        remarks += told
        if point is not None and withheld is None:
            end_points = [point]
        elif outcome == "completed":
            outcome, reason = "stopped", withheld
    return {
        "outcome": outcome,
        "reason": reason,
        "end_points": end_points,
        "half_equivalence": [],
        "estimators": {point["estimator"]: [point["volume_ml"]] for point in end_points},
        "result": None,
        "doses": world.doses,
        "duration_s": round(world.elapsed_s, 3),
        "titrant_ml": round(world.delivered_ml, DIGITS),
        "notes": [],
        "probe_lag": probe_lag(run),
        "warnings": remarks,
        "beyond_at_start": run.reason == ALREADY_BEYOND,
    }


def end_point_json(plan: RunPlan, found: VolumeAtPh, *, beyond_ml: float, temperature_c: float) -> dict[str, Any]:
    """An interpolated end point as it stands in results.

    Args:
        plan: of the run.
        found: the interpolation.
        beyond_ml: standard uncertainty by what the points do not tell: plunger, doses in doubt.
        temperature_c: of the sample.
    """
    calibration = plan.probe.calibration
    ph_sd = 0.0 if calibration is None else calibration_ph_sd(calibration, found.ph, temperature_c)
    own_ml = math.hypot(found.standard_uncertainty_ml, beyond_ml)
    return {
        "volume_ml": round(found.volume_ml, DIGITS),
        "standard_uncertainty_ml": round(math.hypot(own_ml, found.ml_per_ph * ph_sd), DIGITS),
        "ph": found.ph,
        "potential_mv": None,
        "estimator": estimator_name(found.ph),
        "own_standard_uncertainty_ml": round(own_ml, DIGITS),
        "ml_per_ph": round(found.ml_per_ph, DIGITS),
        "ph_standard_uncertainty": round(ph_sd, DIGITS),
        "passed_by_ph": round(found.passed_by_ph, 4),
    }


def judged(plan: RunPlan, found: VolumeAtPh, point: dict[str, Any]) -> tuple[list[str], str | None]:
    """Warnings about a determination, and why it is withheld (None: it is not)."""
    remarks: list[str] = []
    if found.passed_by_ph > ALLOWED_PASS_PH:
        passed = f"the first point beyond pH {found.ph:.2f} lies {found.passed_by_ph:.2f} beyond it"
        if found.bracket_ml > _FEW_DOSES * max(plan.pump.step_ml, plan.dosing.smallest_ml):
            return remarks, (
                f"{passed} (allowed {ALLOWED_PASS_PH:.2f}), {found.bracket_ml:.4f} mL after the last point before it, "
                "though doses were small: a dose by hand, a leak, a bubble? No number is given"
            )
        remarks.append(f"{passed}: this pump, or its smallest dose, is no finer")
    u_ml = float(point["standard_uncertainty_ml"])
    share = u_ml / max(found.volume_ml, 1e-9)
    if share > LARGEST_SHARE and u_ml > _SMALL_PRECISIONS * pump_precision_ml(plan):
        return remarks, (
            f"the volume at pH {found.ph:.2f} would be known to {100.0 * share:.0f} % only (allowed "
            f"{100.0 * LARGEST_SHARE:.0f} %), so no number is given"
        )
    return remarks, None


def common_ph_sd(plan: RunPlan, duration_s: float, slope_mv: float) -> float:
    """What shifts all readings near the end together without being known to the calibration, in pH."""
    return math.hypot(STRAIGHTNESS_MV, USUAL_DRIFT_MV_MIN * duration_s / 60.0) / slope_mv


def _determination(run: RunState) -> tuple[dict[str, Any] | None, list[str], str | None]:
    """The end point, warnings about it, and why it is withheld (None: it is not)."""
    at_ph = run.plan.end_points.at_ph
    assert at_ph is not None
    try:
        curve = run_curve(run)
    except CurveError as error:
        return None, [], f"the points make no curve: {error}"
    common = common_ph_sd(run.plan, run.world.elapsed_s, run.scale.slope_mv)
    found = volume_at_ph(curve, at_ph, common_ph_sd=common)
    if found is None:
        return None, [], "the points do not lie on both sides of the end point pH"
    point = end_point_json(run.plan, found, beyond_ml=_beyond_ml(run), temperature_c=run.temperature_c)
    told, contradicting = last_look(curve, [one.at_s for one in sure_points(run)], point, slowness=run.slowness)
    told += [*_slow(run, point), *_by_itself(run, point), *_lost(run, point)]
    more, withheld = judged(run.plan, found, point)
    return point, [*more, *told], contradicting or withheld


def _lost(run: RunState, point: dict[str, Any]) -> list[str]:
    """Widen by titrant that went missing among points which are not evaluated."""
    lost = lost_among_left_out_ml(run)
    if lost > 0.0:
        _widen(point, lost)
    return [left_out.told(lost)] if lost > 0.0 else []


def last_look(
    curve: Curve, at_s: Sequence[float], point: dict[str, Any], *, slowness: float | None
) -> tuple[list[str], str | None]:
    """Do the points hang together? What no acid or base could give is withheld.

    Args:
        curve: the points.
        at_s: when each was taken.
        point: the end point; widened by a mishap that the points show.
        slowness: learned lag over the record's, None where not known.

    Returns:
        Warnings, and why the number is withheld (None: it is not).
    """
    with np.errstate(all="ignore"), warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)  # numbers that no formula likes end as "not sound"
        priors = known_beforehand(curve, None)
        fit = fit_charge_balance(curve, priors=priors)
        if fit is None:
            return [], None
        explained = explain(curve, fit, at_s, priors=priors)
        if not explained.holds or believed(explained.curve, explained.fit, allowed=spread_allowed(slowness)) is None:
            return [], contradiction(fit, explained)
    for mishap in explained.mishaps:
        by_ml, since_min = abs(mishap.amount), max(0.0, at_s[-1] - mishap.after_s) / 60.0
        of_signal = mishap.kind in {"shift", "drift"}
        if of_signal:
            by_ml *= abs(point["ml_per_ph"])
        if mishap.kind in {"leak", "drift"}:
            by_ml *= since_min
        _widen(point, by_ml if of_signal or point["volume_ml"] >= mishap.after_ml else 0.0)
    return [mishap_told(mishap) for mishap in explained.mishaps], None


def _widen(point: dict[str, Any], by_ml: float) -> None:
    for key in ("standard_uncertainty_ml", "own_standard_uncertainty_ml"):
        point[key] = round(math.hypot(point[key], by_ml), DIGITS)


def _beyond_ml(run: RunState) -> float:
    return math.hypot(position_sd_ml(run), run.world.doubt_ml, run.lag_left_ml)


def _by_itself(run: RunState, point: dict[str, Any]) -> list[str]:
    """Widen by what may have come uncounted where pH went on at the end without a dose, more than the lag explains."""
    standing = [one for one in run.points if one.delivered_ml == run.points[-1].delivered_ml and one.ph is not None]
    first, last = standing[0], standing[-1]
    lasted_s = last.at_s - first.at_s
    if first.ph is None or last.ph is None or lasted_s <= 0.0:
        return []
    explained_ml = last.volume_ml - first.volume_ml
    more_ml = point["ml_per_ph"] * (last.ph - first.ph) - explained_ml
    noise_ph = math.hypot(first.potential_sd_mv, last.potential_sd_mv, STRAIGHTNESS_MV) / run.scale.slope_mv
    still_ml = _STILL_PRECISIONS * pump_precision_ml(run.plan) + _STILL_SHARE * explained_ml
    if more_ml <= still_ml + _STILL_SDS * noise_ph * abs(point["ml_per_ph"]):
        return []
    _widen(point, more_ml / lasted_s * run.world.elapsed_s)
    return [
        f"at the end pH went on by {last.ph - first.ph:+.2f} in {lasted_s:.0f} s without a dose (a leak, a reaction, a "
        "probe slower than its record?); the uncertainty is widened by what may have come so in the whole run"
    ]


def _slow(run: RunState, point: dict[str, Any]) -> list[str]:
    """Widen by what a probe slower than its record may cost, and say so."""
    slow = run.slowness
    if slow is None or slow <= NOTABLE_SLOWNESS:
        return []
    cost_ml = SLOWNESS_COST * (slow - 1.0) * pump_precision_ml(run.plan)
    _widen(point, cost_ml)
    return [f"the probe answers {slow:.1f} times as slowly as its record says: clean it, or repeat the response check"]
