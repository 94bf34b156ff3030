"""Export of a record: CSV with units in the header, a Frictionless data package, JSON.

Source of the package's keys: the Data Package and Table Schema specifications (v1) of frictionlessdata.io, from memory.
"""

from __future__ import annotations

import csv
import hashlib
import io
from collections.abc import Mapping
from typing import Any

from controller.records.record import Record, points, printable
from controller.records.reevaluation import added_evaluations

#: file name: (title, columns as (name, Table Schema type, what it is))
TABLES: dict[str, tuple[str, tuple[tuple[str, str, str], ...]]] = {
    "points.csv": (
        "Points of the titration curve",
        (
            ("at_s", "number", "run time, s"),
            ("volume_ml", "number", "titrant volume seen by the probe, mL"),
            ("delivered_ml", "number", "titrant volume delivered, mL"),
            ("potential_mv", "number", "potential, mV"),
            ("ph", "number", "pH by the calibration of the record"),
            ("settled", "boolean", "whether the reading settled within the time allowed"),
            ("volume_sd_ml", "number", "standard deviation that the run gave the volume, mL"),
            ("potential_sd_mv", "number", "standard deviation that the run gave the potential, mV"),
        ),
    ),
    "doses.csv": (
        "Every dose with its reason",
        (
            ("at_s", "number", "run time at its end, s"),
            ("number", "integer", "number of the dose"),
            ("volume_ml", "number", "volume as the pump reports it, mL"),
            ("delivered_ml", "number", "titrant volume delivered since the start, mL"),
            ("reason", "string", "why this volume"),
        ),
    ),
    "end_points.csv": (
        "End points and every estimator's word on them",
        (
            ("evaluation", "string", "with the run, or the number of an added one"),
            ("end_point", "integer", "number of the end point, from 1"),
            ("reported", "boolean", "whether this estimate is the one that is reported"),
            ("estimator", "string", "name of the estimator"),
            ("volume_ml", "number", "end point volume, mL"),
            ("standard_uncertainty_ml", "number", "its standard uncertainty, mL (reported estimates)"),
            ("ph", "number", "pH there"),
            ("potential_mv", "number", "potential there, mV"),
        ),
    ),
    "results.csv": (
        "Amounts with their uncertainty",
        (
            ("evaluation", "string", "with the run, or the number of an added one"),
            ("sample_id", "string", "the sample"),
            ("value", "number", "the amount, in the unit beside it"),
            ("unit", "string", "its unit"),
            ("substance", "string", "substance as which it is reported"),
            ("end_point", "string", "end point that it counts to"),
            ("standard_uncertainty", "number", "standard uncertainty, in the same unit"),
            ("expanded_uncertainty", "number", "expanded uncertainty, in the same unit"),
            ("coverage_factor", "number", "expanded over standard uncertainty"),
        ),
    ),
    "budget.csv": (
        "Uncertainty budget of each amount",
        (
            ("evaluation", "string", "with the run, or the number of an added one"),
            ("quantity", "string", "input quantity"),
            ("value", "number", "its value, in its unit"),
            ("unit", "string", "its unit"),
            ("standard_uncertainty", "number", "its standard uncertainty, in its unit"),
            ("distribution", "string", "what is assumed of its error"),
            ("degrees_of_freedom", "number", "of its standard uncertainty; empty: infinite"),
            ("sensitivity", "number", "change of the amount per unit of the quantity"),
            ("contribution", "number", "sensitivity times standard uncertainty, in the amount's unit"),
            ("share", "number", "part of the variance of the amount"),
            ("shared_id", "string", "cause that enters once, where it is shared"),
        ),
    ),
    "readings.csv": (
        "Every reading of the probe",
        (
            ("at_s", "number", "run time, s"),
            ("delivered_ml", "number", "titrant volume delivered before it, mL"),
            ("potential_mv", "number", "potential, mV"),
            ("temperature_c", "number", "temperature, °C"),
            ("status", "string", "the meter's word for the reading"),
        ),
    ),
}


def tables(record: Record) -> dict[str, str]:
    """Return CSV text by file name."""
    return {
        "points.csv": _table("points.csv", points(record)),
        "readings.csv": _table("readings.csv", _readings(record)),
        "doses.csv": _table("doses.csv", _doses(record)),
        "end_points.csv": _table("end_points.csv", _end_points(record)),
        "results.csv": _table("results.csv", _results(record)),
        "budget.csv": _table("budget.csv", _budgets(record)),
    }


def data_package(record: Record, files: Mapping[str, str]) -> dict[str, Any]:
    """Return the descriptor (`datapackage.json`) of these CSV files."""
    plan = record.header.get("plan") or {}
    return {
        "profile": "tabular-data-package",
        "name": "".join(c if c.isalnum() or c in "-_." else "-" for c in record.path.stem.lower()),
        "title": f"{plan.get('method_title', 'Titration')}: {(plan.get('sample') or {}).get('sample_id', '')}",
        "created": record.header.get("started_utc"),
        "resources": [_resource(name, text) for name, text in files.items()],
    }


def whole(record: Record) -> dict[str, Any]:
    """Return a record as one JSON object: header, points, doses, closing line, evaluations added beside it."""
    return {
        "run": str(record.path),
        "header": record.header,
        "points": points(record),
        "doses": _doses(record),
        "closing": record.closing,
        "added_evaluations": [one.to_json() for one in added_evaluations(record.path)],
    }


def neutral(text: str) -> str:
    """Return text that no spreadsheet takes for a formula, and no terminal for a command.

    A leading = + - @, tab or return gets an apostrophe; control characters become a replacement mark.
    """
    guarded = f"'{text}" if text[:1] in ("=", "+", "-", "@", "\t", "\r") else text
    return printable(guarded)


def _readings(record: Record) -> list[dict[str, Any]]:
    rows, delivered_ml = [], 0.0
    for entry in record.entries:
        if entry.get("observation") == "dosed":
            delivered_ml += entry["volume_ml"]
        elif entry.get("observation") == "reading":
            rows.append({"status": "ok", **entry, "delivered_ml": round(delivered_ml, 9)})
    return rows


def _doses(record: Record) -> list[dict[str, Any]]:
    rows, delivered_ml, reasons = [], 0.0, dict[Any, str]()
    for entry in record.entries:
        if entry.get("action") == "dose":
            reasons[entry.get("number")] = str(entry.get("reason") or "")
        elif entry.get("observation") == "dosed":
            delivered_ml += entry["volume_ml"]
            reason = reasons.get(entry.get("number"), "")
            rows.append({**entry, "delivered_ml": round(delivered_ml, 9), "reason": reason})
    keys = [column[0] for column in TABLES["doses.csv"][1]]
    return [{key: row.get(key) for key in keys} for row in rows]


def _evaluations(record: Record) -> list[tuple[str, dict[str, Any]]]:
    """The result of the run, then those added beside it."""
    own = (record.closing or {}).get("result") or {}
    added = [(f"added {one.number}", one.content["result"]) for one in added_evaluations(record.path)
             if one.state == "intact"]  # fmt: skip
    return [("with the run", own), *added]


def _results(record: Record) -> list[dict[str, Any]]:
    sample = ((record.header.get("plan") or {}).get("sample") or {}).get("sample_id")
    found = [(evaluation, result.get("result")) for evaluation, result in _evaluations(record)]
    return [{**amount, "evaluation": evaluation, "sample_id": sample} for evaluation, amount in found if amount]


def _budgets(record: Record) -> list[dict[str, Any]]:
    budgets = [(name, (result.get("result") or {}).get("budget") or {}) for name, result in _evaluations(record)]
    return [{**row, "evaluation": name} for name, budget in budgets for row in budget.get("rows") or []]


def _end_points(record: Record) -> list[dict[str, Any]]:
    rows = []
    for evaluation, result in _evaluations(record):
        for index, point in enumerate(result.get("end_points") or []):
            shared = {"evaluation": evaluation, "end_point": index + 1}
            rows.append({**shared, **point, "reported": True})
            rows += [
                {**shared, "reported": False, "estimator": name, "volume_ml": volumes[index]}
                for name, volumes in (result.get("estimators") or {}).items()
                if index < len(volumes) and name != point.get("estimator")
            ]
    return rows


def _table(name: str, rows: list[dict[str, Any]]) -> str:
    names = [column[0] for column in TABLES[name][1]]
    out = io.StringIO(newline="")
    writer = csv.writer(out)
    writer.writerow(names)
    writer.writerows([_cell(row.get(key)) for key in names] for row in rows)
    return out.getvalue()


def _cell(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    return repr(value) if isinstance(value, int | float) else neutral(str(value))


def _resource(name: str, text: str) -> dict[str, Any]:
    title, columns = TABLES[name]
    data = text.encode()
    return {
        "profile": "tabular-data-resource",
        "name": name.removesuffix(".csv"),
        "path": name,
        "title": title,
        "format": "csv",
        "mediatype": "text/csv",
        "encoding": "utf-8",
        "bytes": len(data),
        "hash": f"sha256:{hashlib.sha256(data).hexdigest()}",
        "schema": {
            "fields": [{"name": key, "type": kind, "description": what} for key, kind, what in columns],
            "missingValues": [""],
        },
    }
