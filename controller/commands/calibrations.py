"""halfdrop calibrate list and history: what is in force, and how it moved."""

from __future__ import annotations

import argparse
import datetime as dt
from pathlib import Path
from typing import Any

from controller.calibration.probe_record import learned_times, probes_on_record
from controller.calibration.slowing import slowing_warnings
from controller.calibration.store import Calibration, calibrations, in_force
from controller.commands.calibrationlines import FOLLOWED, due_day, figure_of
from controller.commands.output import print_json, print_table, say
from controller.labfolder import find_lab
from controller.records.record import printable

#: kinds whose subject is a probe
OF_THE_PROBE = ("probe", "response")
#: newest runs of a method whose lag is shown
MOST_RUNS = 30

#: decimal places of a figure in the history, by its unit; others have `_PLACES_OF_OTHERS`
_PLACES = {"%": 2, "mV": 2, "s": 2, "mL": 4, "mol/L": 6}
_PLACES_OF_OTHERS = 5


def list_calibrations(given: argparse.Namespace) -> int:
    """List every calibration: in force, accepted before, not accepted, broken off."""
    lab = find_lab(given.lab)
    say(lab.says())
    found = calibrations(lab.calibrations)
    rows = [calibration_entry(one, in_force(lab.calibrations, one.kind, one.subject)) for one in found]
    if given.json:
        print_json({"lab": str(lab.path), "calibrations": rows})
    elif rows:
        print_table(
            ("on", "kind", "subject", "state", "verdict", "due"),
            [
                tuple(printable(str(row[key])) for key in ("on", "kind", "subject", "state", "verdict", "due"))
                for row in rows
            ],
        )
    else:
        print("no calibrations yet")
    return 0


def history(given: argparse.Namespace) -> int:
    """Show how the figures of one kind of calibration moved, with their trend."""
    lab = find_lab(given.lab)
    say(lab.says())
    found = [one for one in calibrations(lab.calibrations, kind=given.kind) if one.accepted]
    subjects = sorted({one.subject for one in found})
    told = {subject: followed([one for one in found if one.subject == subject]) for subject in subjects}
    if given.kind in OF_THE_PROBE:  # runs may have learned of a probe that was never calibrated here
        for probe in probes_on_record(lab.calibrations):
            if probe not in told and (figures := learned_figures(lab.calibrations, probe)):
                _with_warnings(figures, lab.calibrations, probe)
                told[probe] = figures
    if given.json:
        print_json({"lab": str(lab.path), "kind": given.kind, "history": told})
        return 0
    for subject, figures in told.items():
        print(printable(subject))
        for figure in figures:
            head = f"  {figure['quantity']}" + (f" ({figure['unit']}): " if figure["unit"] else ": ")
            print(head + ", ".join(f"{on} {_rounded(value, figure['unit'])}" for on, value in figure["entries"]))
            if figure["text"]:
                print(f"    {figure['text']}")
    if not told:
        print(f"no accepted calibration of kind {given.kind}")
    return 0


def calibration_entry(one: Calibration, kept: Calibration | None) -> dict[str, Any]:
    """Return what a list shows of a calibration; `kept` is the one in force of its subject."""
    if kept is not None and kept.path == one.path:
        state = "in force"
    elif not one.intact:
        state = "record not intact"
    else:
        state = "replaced" if one.accepted else "not accepted"
    return {
        "on": one.on,
        "kind": one.kind,
        "subject": one.subject,
        "state": state,
        "verdict": str(one.result.get("verdict", "broken off")),
        "due": due_day({**one.plan, "on": one.on}),
        "record": one.path.stem,
        "sha256": one.sha256,
    }


def followed(entries: list[Calibration]) -> list[dict[str, Any]]:
    """Return the followed figures of one subject's calibrations, oldest first, with their trend in words.

    Of a probe they include what runs learned of its lag.
    """
    told: list[dict[str, Any]] = []
    for quantity, unit, path in FOLLOWED[entries[0].kind]:
        series = [(one.on, value) for one in entries if (value := figure_of(one, path)) is not None]
        if series:
            told.append({"quantity": quantity, "unit": unit, "entries": series, "text": _trend_text(series, unit)})
    if entries[0].kind in OF_THE_PROBE:
        told += learned_figures(entries[0].path.parent, entries[0].subject)
        _with_warnings(told, entries[0].path.parent, entries[0].subject)
    return told


def learned_figures(folder: Path, probe: str) -> list[dict[str, Any]]:
    """Return the fast lag that runs learned of a probe, method by method, as `followed` does."""
    entries = learned_times(folder, probe)
    told = []
    for method in sorted({one.method for one in entries}):
        series = [(one.utc[:10], one.sum_s) for one in entries if one.method == method][-MOST_RUNS:]
        told.append(
            {
                "quantity": f"fast lag in runs of {method}",
                "unit": "s",
                "entries": series,
                "text": _trend_text(series, "s"),
            }
        )
    return told


def _with_warnings(figures: list[dict[str, Any]], folder: Path, probe: str) -> None:
    """Put what names a slowing probe under its last figure."""
    if figures:
        texts = (figures[-1]["text"], *slowing_warnings(folder, probe))
        figures[-1]["text"] = "; ".join(text for text in texts if text)


def _rounded(value: float, unit: str) -> str:
    """A figure with no more places than it can mean anything in."""
    return f"{round(value, _PLACES.get(unit, _PLACES_OF_OTHERS)):.7g}"


def _trend_text(series: list[tuple[str, float]], unit: str) -> str:
    from controller.evaluation.control import trend
    from controller.evaluation.statistics import StatisticsError

    if len(series) < 3:
        return ""
    days = [float(dt.date.fromisoformat(on).toordinal()) for on, _ in series]
    try:
        line = trend(days, [value for _, value in series])
    except (StatisticsError, ValueError):
        return ""
    of_unit = f" {unit}" if unit else ""
    return (
        f"change {30.0 * line.change_per_day:+.3g}{of_unit} a month, "
        f"{'significant' if line.significant else 'not significant'}"
    )
