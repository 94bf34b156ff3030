"""What a report says of one record, gathered from its plain data: everything here is text, the page only places it."""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from configs.errors import HalfdropError
from configs.version import __version__
from controller.curves.evaluate_record import evaluate_points
from controller.records.record import Record
from controller.records.reevaluation import added_evaluations
from controller.records.verification import verify
from controller.report import tables
from controller.report.budget import budget_table
from controller.report.calibration_part import calibration_part
from controller.report.calibrations import FOLDER, calibrations_in_force
from controller.report.cautions import cautions_of
from controller.report.drift import drift_chart
from controller.report.headline import headline
from controller.report.instruments import instruments
from controller.report.plots import Mark, curve_figure, gran_figure, residual_figure
from controller.report.points import identity_table, points_table
from controller.report.probe import probe_in_this_run
from controller.report.series import Series, series_of
from controller.report.series_of_runs import together
from controller.report.wording import DASH, Facts, facts_of, local_time, number, span, with_uncertainty
from controller.running.outcome import NOT_CONFIRMED


@dataclass(frozen=True, slots=True, kw_only=True)
class Figure:
    """A picture as a data address, its text alternative and its caption."""

    address: str
    alternative: str
    caption: str


def report_contents(record: Record, *, written_utc: str, replicates: Sequence[Record] = ()) -> dict[str, Any]:
    """Return everything that the page shows.

    Args:
        record: the run.
        written_utc: when the report is written, ISO 8601.
        replicates: further runs of the same sample, for mean and spread.

    Raises:
        HalfdropError: the record cannot be read.
    """
    header, plan = record.header, _dict(record.header.get("plan"))
    closing = record.closing or {}
    result = _dict(closing.get("result"))
    offset = header.get("lab_utc_offset")
    again = _evaluated_again(record, plan)
    figures, missing = _figures(record, result)
    return {
        "title": str(plan.get("method_title") or "Titration"),
        "sample_id": str(_dict(plan.get("sample")).get("sample_id") or "not named"),
        "calibration": calibration_part(plan, result, offset),
        "facts": _facts(record, plan, result, offset),
        "alerts": _alerts(record, plan, closing),
        "warnings": _warnings(header, plan, result),
        "notes": [str(one) for one in result.get("notes") or []],
        "outcome": _outcome(record, closing),
        "figures": figures,
        "missing": missing,
        **_amounts(record, result, replicates),
        **_evaluated(record, result, again, offset),
        "calibrations": calibrations_in_force(_dict(header.get("hashes")), record.path.parent.parent / FOLDER, offset),
        "instruments": [*instruments(header), *probe_in_this_run(closing)],
        "sample": _sample(_dict(plan.get("sample")), offset) if plan.get("titrant") else [],
        **_course(record, plan, again, offset),
        "record": _record_facts(record),
        "hashes": [(str(name), str(value)) for name, value in _dict(header.get("hashes")).items()],
        "written": local_time(written_utc, offset),
        "program": __version__,
    }


def _amounts(record: Record, result: dict[str, Any], replicates: Sequence[Record]) -> dict[str, Any]:
    """The amount, that of the mean where there are replicates, with its budget."""
    repeated = together([record, *replicates])
    mean = repeated.amount if repeated is not None else None
    amount = mean or result.get("result")
    return {
        "amount": headline(amount),
        "mean_of": repeated.count if repeated is not None and mean else 0,
        "budget": budget_table(amount),
        "replicates": repeated,
    }


def _evaluated(record: Record, result: dict[str, Any], again: dict[str, Any], offset: Any) -> dict[str, Any]:
    """End points, estimators, half-equivalence, candidates, and the evaluations kept beside the record."""
    added = [one.to_json() for one in added_evaluations(record.path)]
    return {
        "end_points": tables.end_points(result),
        "estimators": tables.estimators(result, again),
        "half_equivalence": tables.half_equivalence(result),
        "identity": identity_table(again.get("identity")),
        "evaluations": tables.evaluations(result, added, offset),
    }


def _course(record: Record, plan: dict[str, Any], again: dict[str, Any], offset: Any) -> dict[str, Any]:
    """What was asked, what went against the plan, every dose and every point."""
    return {
        "questions": tables.questions(record.entries),
        "incidents": tables.incidents(record.entries),
        "cautions": cautions_of(plan),
        "doses": tables.doses(record.entries),
        "points": points_table(record, again),
        "settings": _settings(plan, offset),
    }


def _dict(value: Any) -> dict[str, Any]:
    return value if isinstance(value, dict) else {}


def _evaluated_again(record: Record, plan: dict[str, Any]) -> dict[str, Any]:
    """The evaluation of the record's points by this program, an unknown substance ranked; empty where it fails."""
    try:
        return evaluate_points(record, identify=_dict(plan.get("chemistry")).get("analyte") is None)
    except HalfdropError:
        return {}


def _sample(sample: dict[str, Any], offset: Any) -> Facts:
    """What was weighed or measured in; uncertainties of what was not stay out."""
    absent = [f"{part}_standard_uncertainty_{unit}" for part, unit in (("mass", "g"), ("volume", "ml"))
              if sample.get(f"{part}_{unit}") is None]  # fmt: skip
    if sample.get("mass_g") is None:
        absent += ["purity_fraction", "purity_standard_uncertainty"]
    return facts_of(sample, offset, leave_out=("sample_id", *absent))


def _warnings(header: dict[str, Any], plan: dict[str, Any], result: dict[str, Any]) -> list[str]:
    """Every warning once: of the start, of what is in force, of the result."""
    parts = header.get("warnings"), _dict(plan.get("traceability")).get("warnings"), result.get("warnings")
    return list(dict.fromkeys(str(one) for part in parts for one in part or []))


def _outcome(record: Record, closing: dict[str, Any]) -> str:
    if record.closing is None:
        return "open: no closing line (still running, or broken off)"
    reason = closing.get("reason")
    return f"{closing.get('outcome')}{f': {reason}' if reason else ''}"


def _facts(record: Record, plan: dict[str, Any], result: dict[str, Any], offset: Any) -> Facts:
    header = record.header
    titrant = _dict(plan.get("titrant"))
    concentration, u = with_uncertainty(titrant.get("concentration_mol_l"), titrant.get("standard_uncertainty_mol_l"))
    doses = DASH if result.get("doses") is None else str(result["doses"])
    volume = number(result.get("titrant_ml"), 4)
    told = [
        ("Started", local_time(header.get("started_utc"), offset)),
        ("Operator", str(header.get("operator") or "not named")),
        ("Method", str(plan.get("method_name") or DASH)),
        ("Record", record.path.stem),
    ]
    if not titrant:
        return [*told, ("Took", span(result.get("duration_s")))]
    return [
        *told,
        ("Titrant", f"{titrant.get('name') or DASH}, {concentration} mol/L (u = {u})"),
        ("Course", f"{doses} doses, {volume} mL, {span(result.get('duration_s'))}"),
    ]


def _alerts(record: Record, plan: dict[str, Any], closing: dict[str, Any]) -> list[str]:
    found = []
    part = _dict(_dict(closing.get("result")).get("calibration"))
    if part and not part.get("accepted"):
        found.append(f"This calibration is not in force: {part.get('verdict')}.")
    if closing.get("stop_confirmed") is False:
        found.append(NOT_CONFIRMED)
    if closing.get("outcome") not in (None, "completed"):
        found.append(f"The run did not complete: {closing.get('reason') or closing.get('outcome')}.")
    if record.closing is None:
        found.append("The record has no closing line: the run is still going on or was broken off.")
    if (state := verify(record.path)).state == "edited":
        found.append(f"The record is not as the program wrote it ({state.what}). Do not use these numbers.")
    if plan.get("seed") is not None:
        what = "nothing real was measured" if part else "no real sample was titrated"
        found.append(f"Simulated bench (seed {plan['seed']}): {what}.")
    return found


def _figures(record: Record, result: dict[str, Any]) -> tuple[list[Figure], list[str]]:
    calibration = result.get("calibration")
    if isinstance(calibration, dict):
        chart = drift_chart(calibration)
        return ([Figure(address=_address(chart[0]), alternative=chart[1], caption=chart[2])] if chart else []), []
    marks = [
        Mark(volume_ml=float(one["volume_ml"]), standard_uncertainty_ml=one.get("standard_uncertainty_ml"))
        for one in result.get("end_points") or []
    ]
    try:
        series = series_of(record, [mark.volume_ml for mark in marks])
    except HalfdropError as error:
        return [], [f"No figures: {error}"]
    drawn = [
        (curve_figure(series, marks), *_curve_words(series, marks)),
        (gran_figure(series), *_gran_words(series)),
        (residual_figure(series), *_residual_words(series)),
    ]
    figures = [Figure(address=_address(svg), alternative=alt, caption=text) for svg, alt, text in drawn if svg]
    return figures, list(series.missing.values())


def _address(svg: str) -> str:
    return f"data:image/svg+xml;base64,{base64.b64encode(svg.encode()).decode()}"


def _curve_words(series: Series, marks: list[Mark]) -> tuple[str, str]:
    signal, volume = series.curve.signal, series.curve.volume_ml
    ends = ", ".join(number(mark.volume_ml, 4) for mark in marks)
    alternative = (
        f"Titration curve: {series.unit} from {number(float(signal[0]), 2)} to {number(float(signal[-1]), 2)} over "
        f"{number(float(volume[-1]), 3)} mL of titrant in {len(volume)} points; "
        f"{f'end points at {ends} mL' if marks else 'no end point'}. Under it a tick for each of "
        f"{len(series.doses_ml)} doses and the slope of the curve."
    )
    caption = (
        "Curve, ruler of doses (one tick per dose, along the volume axis) and slope between neighbouring points; "
        "dashed: end points. Volumes are those seen by the probe."
    )
    return alternative, caption + (" On the right the band is ± 2 u of the end point." if marks else "")


def _gran_words(series: Series) -> tuple[str, str]:
    told = "; ".join(
        f"{line.name}: zero at {number(line.intercept_ml, 4)} mL, u = {number(line.standard_uncertainty_ml, 4)} mL"
        for line in series.gran
    )
    caption = (
        f"Gran plot, both functions scaled to mL of titrant. {told}. The line before the end point is straight for one "
        "proton only; overlapping protons bend it."
    )
    return f"Gran plot. {told}.", caption


def _residual_words(series: Series) -> tuple[str, str]:
    if series.fit is None:
        return "", ""
    quality = f"reduced chi-square {number(series.fit.chi_square, 2)}, {'sound' if series.fit.sound else 'not sound'}"
    largest = max(
        (abs(r / s) for r, s in zip(series.fit.residual_ml, series.fit.residual_sd_ml, strict=True)), default=0.0
    )
    alternative = (
        f"Residuals of the charge-balance fit over titrant volume; {quality}; largest {number(largest, 1)} SD."
    )
    return alternative, f"Residuals of the charge-balance fit: volume less fit, in standard deviations ({quality})."


def _settings(plan: dict[str, Any], offset: Any) -> list[tuple[str, Facts]]:
    keys = ("chemistry", "dosing", "settling", "end_points", "limits", "vessel", "report_as")
    found = [(key.replace("_", " ").capitalize(), facts_of(plan.get(key), offset)) for key in keys]
    return [(title, facts) for title, facts in found if facts]


def _record_facts(record: Record) -> Facts:
    found = verify(record.path)
    data = record.path.read_bytes()
    versions = _dict(record.header.get("versions"))
    last = _dict(record.closing).get("last_sha256")
    return [
        ("File", record.path.name),
        ("State", f"{found.state} ({found.what})"),
        ("SHA-256 of the file", hashlib.sha256(data).hexdigest()),
        ("SHA-256 of its last line", str(last or DASH)),
        ("SHA-256 of the plan", str(record.header.get("plan_sha256") or DASH)),
        ("Account", str(record.header.get("account") or DASH)),
        *[(f"Version: {name}", str(value)) for name, value in versions.items()],
    ]
