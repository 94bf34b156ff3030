"""Blanks and the probe's response from records of runs: what they come to, ready for the calibration's record."""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Sequence
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
) -> SettledLot:
    """Return a blank from runs without sample, or from volumes typed in; what found no end point is not detectable.

    Raises:
        HalfdropError: no blank, or a negative one.
    """
    rules = bench.calibration_rules.blank
    volumes: list[float | None] = list(volumes_ml)
    for path in records:
        _, result = closed_run(path)
        points = result["end_points"]
        if not points and "no end point" not in str(result.get("reason")):
            what = f"it ended before it could find one ({result.get('reason')})"
            raise HalfdropError(what, where=path.stem, remedy="Leave it out, or titrate the blank again")
        volumes.append(float(points[0]["volume_ml"]) if points else None)
    found = blank_of(volumes, lot_id=lot_id, detection_limit_ml=rules.detection_limit_ml, end_point_ph=None)
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
        detection_limit_ml=rules.detection_limit_ml,
    )
    enough = Finding(limits="at least one", quantity="number of blanks", value=found.count, low=1, high=1e3, unit="")
    word = "not detectable: 0 mL" if not found.detectable else f"{found.mean_ml:.4f} mL"
    text = f"blank {lot_id}: {word}, u = {found.standard_uncertainty_ml:.4f} mL, n = {found.count}"
    return SettledLot(
        plan=plan,
        verdict=Verdict(findings=(enough,)),
        notes=(text,),
        warnings=("one blank alone: its uncertainty is that of the detection limit",) if found.count == 1 else (),
        details=blank_to_json(found),
    )


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
        f"bulk {lag.bulk_s:.2f} s, film {lag.film_s:.2f} s, slow layer {lag.slow_s:.0f} +- "
        f"{found.slow_standard_uncertainty_s:.0f} s with a share of {100 * lag.slow_share:.2f} +- "
        f"{100 * found.share_standard_uncertainty:.2f} % (chi-square {found.chi_square:.2f}, {found.readings} readings)"
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
