"""Blanks and the probe's response from records of runs: what they come to, ready for the calibration's record."""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Sequence
from contextlib import suppress
from pathlib import Path
from typing import Any

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from configs.method import MethodSettings
from controller.calibration.blank import Blank, blank_of
from controller.calibration.findings import Finding, Verdict
from controller.calibration.planning import common, no_pump, probe_of, vessel_of
from controller.calibration.plans import BlankPlan, ResponsePlan
from controller.calibration.store import Calibration
from controller.calibration.validity import end_point_words
from controller.planning.blank_runs import SeenBlank, mean_course, seen_at_ph
from controller.planning.lots import SettledLot, closed_run, sources_of
from controller.planning.responsecheck import response_of
from controller.records.encoding import plan_from_json
from controller.records.record import read_record
from drivers.absent import ABSENT

#: relative standard uncertainty that the curve adds to a lag found so: on the nominal bench (24 seeds) the slow time
#: came out 12 % too long, the share 5 % too small
CURVE_TIME_UNCERTAINTY, CURVE_SHARE_UNCERTAINTY = 0.12, 0.07


def blank_lot(
    method: MethodSettings,
    bench: BenchSettings,
    *,
    records: Sequence[Path],
    volumes_ml: Sequence[float | None],
    lot_id: str,
    today: dt.date,
    last: Calibration | None,
    at_ph: float | None = None,
    expires: str | None = None,
) -> SettledLot:
    """Return a blank from runs without sample, or from volumes typed in.

    Args:
        method: of the samples that it is for.
        bench: its rules.
        records: runs without sample.
        volumes_ml: typed in; None: not detectable.
        lot_id: name of the blank.
        today: of the settling.
        last: the blank in force so far.
        at_ph: where the sample's titration ends; None: nothing tells, an end point of the blank's own run counts.
        expires: last day of use.

    Raises:
        HalfdropError: no blank, a negative one, or a run that did not come to that pH.
    """
    rules = bench.calibration_rules.blank
    seen = [_seen(path, at_ph, coarse_ml=rules.detection_limit_ml) for path in records]
    volumes: list[float | None] = [*volumes_ml, *(one.volume_ml for one in seen)]
    limits_ml = [one.detection_limit_ml for one in seen if one.detection_limit_ml is not None]
    limit_ml = max(limits_ml) if limits_ml and not volumes_ml else rules.detection_limit_ml
    told = any(one.probe_calibration for one in seen)  # by how their pH went
    end_point_ph = at_ph if told or method.end_points.at_ph is not None else None
    found = blank_of(
        volumes,
        lot_id=lot_id,
        detection_limit_ml=limit_ml,
        end_point_ph=end_point_ph,
        own_standard_uncertainty_ml=max((one.own_standard_uncertainty_ml for one in seen), default=0.0),
    )
    plan = BlankPlan(
        **common("blank", lot_id, bench=bench, today=today, replaces=last),
        method_title=f"Blank of {method.title}",
        due_days=rules.days,
        probe=probe_of(bench, ABSENT.key),
        pump=no_pump(),
        vessel=vessel_of(bench),
        questions=(),
        runs=sources_of(records),
        volumes_ml=tuple(volumes),
        method=method.name,
        titrant_lot_id=method.titrant.lot_id,
        detection_limit_ml=limit_ml,
        end_point_ph=end_point_ph,
        expires=expires,
    )
    enough = Finding(
        limits="at least one", quantity="number of blanks", value=found.count, low=1, high=1e3, unit="", condition=True
    )
    word = "not detectable: 0 mL" if not found.detectable else f"{found.mean_ml:.4f} mL"
    spread = "" if found.standard_deviation_ml is None else f", s = {found.standard_deviation_ml:.4f} mL"
    if not found.detectable:  # what lies below the detection limit counts as 0: a scatter of zeros says nothing
        spread = f", each below {limit_ml:.4f} mL"
    text = (
        f"blank {lot_id} at {end_point_words(end_point_ph)}: {word}, u = {found.standard_uncertainty_ml:.4f} mL, "
        f"n = {found.count}{spread}"
    )
    return SettledLot(
        plan=plan,
        verdict=Verdict(findings=(enough,)),
        notes=(text,),
        warnings=("one blank alone: its uncertainty is that of the detection limit",) if found.count == 1 else (),
        details={**blank_to_json(found), **_scale_to_json(seen)},
    )


def _seen(path: Path, at_ph: float | None, *, coarse_ml: float) -> SeenBlank:
    """What a run says at a pH; one that looked for equivalence in doses too coarse for that, by its end points."""
    plan, result = closed_run(path)
    if at_ph is not None and plan.end_points.at_ph is not None:
        return seen_at_ph(path, at_ph)
    if at_ph is not None:
        with suppress(HalfdropError):  # its doses were too far apart, or it did not come there
            found = seen_at_ph(path, at_ph)
            if found.own_standard_uncertainty_ml <= coarse_ml:
                return found
    points = result["end_points"]
    if not points and "no end point" not in str(result.get("reason")):
        what = f"it ended before it could find one ({result.get('reason')})"
        raise HalfdropError(what, where=path.stem, remedy="Leave it out, or titrate the blank again")
    return SeenBlank(
        volume_ml=float(points[0]["volume_ml"]) if points else None,
        own_standard_uncertainty_ml=float(points[0]["standard_uncertainty_ml"]) if points else 0.0,
        ml_per_ph=0.0,
        ph_standard_uncertainty=0.0,
        probe_calibration="",
        course=(),
        detection_limit_ml=None,
    )


def _scale_to_json(seen: Sequence[SeenBlank]) -> dict[str, Any]:
    """What the blank's volume owes to the pH scale, and its volumes at other pH."""
    one_scale = len({one.probe_calibration for one in seen}) == 1 and seen[0].probe_calibration
    return {
        "ml_per_ph": sum(one.ml_per_ph for one in seen) / len(seen) if seen else 0.0,
        "ph_standard_uncertainty": max((one.ph_standard_uncertainty for one in seen), default=0.0),
        "probe_calibration": seen[0].probe_calibration if one_scale else None,
        "course": mean_course([one.course for one in seen]),
    }


def response_record(
    bench: BenchSettings, path: Path, *, probe_identity: str, today: dt.date, last: Calibration | None
) -> SettledLot:
    """Return the probe's lag from a run with a response check.

    Raises:
        HalfdropError: the run held after no dose, or no lag follows from it.
    """
    rules, record = bench.calibration_rules.probe, read_record(path)
    run_plan = plan_from_json(record.header.get("plan"), where=str(path))
    found = response_of(run_plan, record.entries)
    lag = found.lag
    plan = ResponsePlan(
        **common("response", probe_identity, bench=bench, today=today, replaces=last),
        method_title="Response of the probe, from holds before an end point",
        due_days=rules.days,
        probe=probe_of(bench, ABSENT.key),
        pump=no_pump(),
        vessel=vessel_of(bench),
        questions=(),
        runs=sources_of([path]),
        largest_film_s=rules.largest_film_s,
        largest_slow_share=rules.largest_slow_share_percent / 100.0,
    )
    limits = "house limits, bench file"
    findings = (
        Finding(limits=limits, quantity="film time", value=lag.film_s, low=None, high=rules.largest_film_s, unit="s",
                standard_uncertainty=found.film_standard_uncertainty_s),
        Finding(limits=limits, quantity="slow share", value=100.0 * lag.slow_share, low=None,
                high=rules.largest_slow_share_percent, unit="%",
                standard_uncertainty=100.0 * found.share_standard_uncertainty),
    )  # fmt: skip
    times = (
        found.bulk_standard_uncertainty_s / lag.bulk_s,
        found.film_standard_uncertainty_s / lag.film_s,
        found.slow_standard_uncertainty_s / lag.slow_s,
    )
    note = (
        f"bulk {lag.bulk_s:.2f} s, film {lag.film_s:.2f} s, slow layer {lag.slow_s:.0f} s "
        f"(u = {found.slow_standard_uncertainty_s:.0f} s) with a share of {100 * lag.slow_share:.2f} % "
        f"(u = {100 * found.share_standard_uncertainty:.2f} %; chi-square {found.chi_square:.2f}, "
        f"{found.readings} readings)"
    )
    return SettledLot(
        plan=plan,
        verdict=Verdict(findings=findings),
        notes=(note,),
        warnings=(),
        details={
            "response": {
                "bulk_s": lag.bulk_s,
                "film_s": lag.film_s,
                "slow_s": lag.slow_s,
                "slow_share": lag.slow_share,
                "dead_time_s": lag.dead_time_s,
                "time_relative_uncertainty": math.hypot(CURVE_TIME_UNCERTAINTY, max(times)),
                "share_relative_uncertainty": math.hypot(
                    CURVE_SHARE_UNCERTAINTY, found.share_standard_uncertainty / lag.slow_share
                ),
                "chi_square": found.chi_square,
            }
        },
    )


def blank_to_json(found: Blank) -> dict[str, Any]:
    """Return a blank as plain data."""
    freedom = found.degrees_of_freedom
    return {
        "mean_ml": found.mean_ml,
        "standard_deviation_ml": found.standard_deviation_ml,
        "count": found.count,
        "standard_uncertainty_ml": found.standard_uncertainty_ml,
        "degrees_of_freedom": freedom if math.isfinite(freedom) else None,
        "detectable": found.detectable,
        "end_point_ph": found.end_point_ph,
    }
