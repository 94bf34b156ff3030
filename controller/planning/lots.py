"""Titrant lots from the records of their runs: what they come to, ready for the calibration's record."""

from __future__ import annotations

import datetime as dt
import hashlib
import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from configs.benchfile import BenchSettings
from configs.catalogue import substance
from configs.errors import HalfdropError
from configs.method import MethodSettings
from controller.calibration.carbonate import CarbonateJudgement, judge_carbonate
from controller.calibration.findings import Verdict
from controller.calibration.planning import common, no_pump, probe_of, vessel_of
from controller.calibration.plans import CalibrationPlan, SourceRun, TitrantPlan
from controller.calibration.store import Calibration, calibrations
from controller.calibration.titrant import Standardisation
from controller.curves.evaluate_record import curve_of
from controller.evaluation.budget_table import budget_to_json
from controller.evaluation.carbonate import carbonate_gap
from controller.evaluation.carried import carry
from controller.evaluation.control import trend
from controller.evaluation.evaluate import evaluate
from controller.evaluation.statistics import StatisticsError
from controller.planning.amounts import standardisation_of, statistics_to_json
from controller.planning.taking import day_of
from controller.records.encoding import plan_from_json
from controller.records.record import read_record
from controller.titration.plan import RunPlan
from drivers.absent import ABSENT


@dataclass(frozen=True, slots=True, kw_only=True)
class SettledLot:
    """A lot or blank as its core needs it: plan, verdict, what is told, and the details of the result."""

    plan: CalibrationPlan
    verdict: Verdict
    notes: tuple[str, ...]
    warnings: tuple[str, ...]
    details: dict[str, Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class Preparation:
    """What the operator says of the titrant; days as "2026-12-01"."""

    text: str = ""
    prepared_on: str | None = None
    expires: str | None = None


def titrant_lot(
    method: MethodSettings,
    bench: BenchSettings,
    folder: Path,
    records: Sequence[Path],
    *,
    lot_id: str,
    today: dt.date,
    last: Calibration | None,
    preparation: Preparation,
    carbonate_run: Path | None = None,
) -> SettledLot:
    """Return a titrant's lot from the runs of its standardisation.

    `carbonate_run` is a titration of strong acid with it, well past the end point.

    Raises:
        HalfdropError: a run that cannot be used, days that cannot be, or figures from which no concentration follows.
    """
    rules = bench.calibration_rules.titrant
    check_preparation(preparation, today=today)
    pairs = [_completed(path) for path in records]
    titrant, nominal = substance(method.titrant.substance), method.titrant.concentration_mol_l
    for path, (run_plan, _) in zip(records, pairs, strict=True):
        if run_plan.titrant.lot_id != lot_id:
            what = f"it titrated with lot {run_plan.titrant.lot_id!r}, the lot to be standardised is {lot_id!r}"
            raise HalfdropError(what, where=path.stem, remedy="Name the runs of one lot")
    found = standardisation_of(
        [plan for plan, _ in pairs],
        [result for _, result in pairs],
        nominal_mol_l=nominal * titrant.equivalents,
        rsd_limit_percent=rules.rsd_percent,
    )
    first = pairs[0][0]
    plan = TitrantPlan(
        **common("titrant", lot_id, bench=bench, today=today, replaces=last),
        method_title=method.title,
        due_days=rules.restandardise_after_days,
        probe=probe_of(bench, ABSENT.key),
        pump=no_pump(),
        vessel=vessel_of(bench),
        questions=(),
        runs=sources_of(records),
        substance=titrant.name,
        acid=titrant.strong == "acid",
        nominal_mol_l=nominal,
        temperature_c=first.chemistry.temperature_c,
        rsd_limit_percent=rules.rsd_percent,
        standard=first.report_as.substance if first.report_as is not None else "",
        standard_lot_id=method.standard.lot_id if method.standard is not None else "not named",
        certificate=method.standard.certificate if method.standard is not None else None,
        preparation=preparation.text,
        prepared_on=preparation.prepared_on,
        expires=preparation.expires,
    )
    drift = drift_of(folder, lot_id, today, found.concentration_mol_l, found.budget.expanded_uncertainty)
    carbonate = None if carbonate_run is None else _carbonate(carbonate_run, lot_id, found.concentration_mol_l)
    doubts = [] if carbonate is None or carbonate.accepted else [carbonate.text]
    trace = first.traceability
    doubts += [text for text in (trace.warnings if trace is not None else ()) if text.startswith("standard ")]
    return SettledLot(
        plan=plan,
        verdict=found.verdict,
        notes=(*_replicate_notes(found), *([] if carbonate is None else [carbonate.text])),
        warnings=(*found.warnings, *drift.get("warnings", []), *doubts),
        details={
            "lot": _lot_to_json(found),
            "replicates": _statistics(found),
            "drift": drift or None,
            "expires": preparation.expires,
            "carbonate": None if carbonate is None else asdict(carbonate),
        },
    )


def check_preparation(preparation: Preparation, *, today: dt.date) -> None:
    """Refuse days that are none, a titrant that was prepared in time to come, and one that is past its date.

    Raises:
        HalfdropError: with the option to correct.
    """
    named = {"--prepared-on": preparation.prepared_on, "--expires": preparation.expires}
    for option, text in named.items():
        if text is not None and day_of(text) is None:
            raise HalfdropError(f"got {text!r}, allowed: a day as 2027-06-30", where=option, remedy="Correct it")
    prepared, expires = day_of(preparation.prepared_on), day_of(preparation.expires)
    if prepared is not None and prepared > today:
        what = f"{prepared.isoformat()} is still to come (today is {today.isoformat()})"
        raise HalfdropError(what, where="--prepared-on", remedy="Correct it")
    if expires is not None and expires < today:
        what = f"the lot expired on {expires.isoformat()} (today is {today.isoformat()})"
        raise HalfdropError(what, where="--expires", remedy="Prepare a new lot, or correct the day")


def _carbonate(path: Path, lot_id: str, concentration_mol_l: float) -> CarbonateJudgement:
    """Judge the carbonate by the gap between both branches.

    Raises:
        HalfdropError: another lot, or a branch is not there.
    """
    record = read_record(path)
    plan = plan_from_json(record.header.get("plan"), where=str(path))
    if plan.titrant.lot_id != lot_id:
        what = f"it titrated with lot {plan.titrant.lot_id!r}, not {lot_id!r}"
        raise HalfdropError(what, where=path.stem, remedy="Name a run with this lot")
    result = (record.closing or {}).get("result") or {}
    detected = [float(point["volume_ml"]) for point in result.get("end_points", [])]
    curve = curve_of(plan, record, where=str(path))
    found = evaluate(curve, end_points_expected=1, detected_ml=detected)
    gap = carbonate_gap(curve, end_point_ml=found.end_points[0].volume_ml) if found.end_points else None
    if gap is None:
        raise HalfdropError(
            "it is not the curve of a strong acid with 4 points or more below pH 4.5 and above pH 10",
            where=path.stem,
            remedy="Titrate strong acid, and go at least 2 mL past the end point",
        )
    return judge_carbonate(gap, concentration_mol_l=concentration_mol_l)


def drift_of(folder: Path, lot_id: str, today: dt.date, value: float, expanded_uncertainty: float) -> dict[str, Any]:
    """Return the lot's accepted concentrations with this one, and their trend from three on; empty for the first."""
    before = [one for one in calibrations(folder, kind="titrant", subject=lot_id) if one.accepted]
    told = [(one.on, one.result["lot"]) for one in before]
    entries = [
        *((on, float(lot["concentration_mol_l"]), lot.get("expanded_uncertainty_mol_l")) for on, lot in told),
        (today.isoformat(), value, expanded_uncertainty),
    ]
    if len(entries) < 2:
        return {}
    chart: dict[str, Any] = {
        "entries": [
            {"on": on, "concentration_mol_l": c, "expanded_uncertainty_mol_l": u} for on, c, u in entries
        ],
        "warnings": [],
    }  # fmt: skip
    days = [float(dt.date.fromisoformat(on).toordinal()) for on, _, _ in entries]
    try:
        line = trend(days, [c for _, c, _ in entries])
    except StatisticsError:
        return chart
    chart["change_percent_per_month"] = 100.0 * line.change_per_day * 30.0 / value
    chart["significant"] = line.significant
    if line.significant:
        chart["warnings"].append(
            f"the titrant drifts by {chart['change_percent_per_month']:+.2f} % a month ({line.count} standardisations)"
        )
    return chart


def _lot_to_json(found: Standardisation) -> dict[str, Any]:
    carried = carry("titrant concentration", found.budget)
    own = carried.own_degrees_of_freedom
    return {
        "concentration_mol_l": carried.value,
        "standard_uncertainty_mol_l": carried.standard_uncertainty,
        "expanded_uncertainty_mol_l": found.budget.expanded_uncertainty,
        "coverage_factor": found.budget.coverage_factor,
        "causes": [
            {
                "shared_id": part.shared_id,
                "contribution_mol_l": part.contribution,
                "distribution": part.distribution,
                "degrees_of_freedom": part.degrees_of_freedom if math.isfinite(part.degrees_of_freedom) else None,
            }
            for part in carried.parts
        ],
        "own_standard_uncertainty_mol_l": carried.own_standard_uncertainty,
        "own_degrees_of_freedom": own if math.isfinite(own) else None,
        "budget": budget_to_json(found.budget, model=found.model, quantities=found.quantities),
    }


def _statistics(found: Standardisation) -> dict[str, Any]:
    return statistics_to_json(found.concentrations_mol_l)


def _replicate_notes(found: Standardisation) -> list[str]:
    summary = found.summary
    notes = [f"replicate {n}: {c:.6f} mol/L" for n, c in enumerate(found.concentrations_mol_l, start=1)]
    rsd = "" if summary.rsd_percent is None else f", RSD {summary.rsd_percent:.3f} %"
    notes.append(
        f"concentration {found.concentration_mol_l:.6f} mol/L, u = {found.standard_uncertainty_mol_l:.2g} mol/L, "
        f"n = {summary.count}{rsd}"
    )
    test = found.outlier
    if test is not None and not test.outlier:
        notes.append(
            f"Grubbs' test: replicate {test.index + 1} lies farthest, no outlier ({test.statistic:.3f} against "
            f"{test.critical:.3f} at {100 * test.significance:g} %)"
        )
    return notes


def sources_of(records: Sequence[Path]) -> tuple[SourceRun, ...]:
    """Return the runs that a calibration rests on, with their hashes."""
    return tuple(SourceRun(run=path.stem, sha256=hashlib.sha256(path.read_bytes()).hexdigest()) for path in records)


def closed_run(path: Path) -> tuple[RunPlan, dict[str, Any]]:
    """Return plan and result of a closed record.

    Raises:
        HalfdropError: it has no result.
    """
    record = read_record(path)
    result = (record.closing or {}).get("result")
    if not isinstance(result, dict):
        raise HalfdropError("it has no result", where=path.stem, remedy="Leave it out, or titrate again")
    return plan_from_json(record.header.get("plan"), where=str(path)), result


def _completed(path: Path) -> tuple[RunPlan, dict[str, Any]]:
    plan, result = closed_run(path)
    if result.get("outcome") != "completed":
        raise HalfdropError("its run was not completed", where=path.stem, remedy="Leave it out, or titrate again")
    return plan, {**result, "run": path.stem}
