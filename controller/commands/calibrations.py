"""halfdrop calibrate list and history: what is in force, and how it moved."""

from __future__ import annotations

import argparse
import datetime as dt
from typing import Any

from controller.calibration.store import Calibration, calibrations, in_force
from controller.commands.calibrationlines import FOLLOWED, due_day, figure_of
from controller.commands.output import print_json, print_table, say
from controller.labfolder import find_lab
from controller.records.record import printable

#: a probe that needs this many times the response of its first calibrations is named as slowing
SLOWING = 2.0


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
    if given.json:
        print_json({"lab": str(lab.path), "kind": given.kind, "history": told})
        return 0
    for subject, figures in told.items():
        print(printable(subject))
        for figure in figures:
            print(f"  {figure['quantity']}: " + ", ".join(f"{on} {value:.6g}" for on, value in figure["entries"]))
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
    """Return the followed figures of one subject's calibrations, oldest first, with their trend in words."""
    told = []
    for quantity, unit, path in FOLLOWED[entries[0].kind]:
        series = [(one.on, value) for one in entries if (value := figure_of(one, path)) is not None]
        if series:
            told.append({"quantity": quantity, "unit": unit, "entries": series, "text": _trend_text(quantity, series)})
    return told


def _trend_text(quantity: str, series: list[tuple[str, float]]) -> str:
    from controller.evaluation.control import trend
    from controller.evaluation.statistics import StatisticsError

    if len(series) < 3:
        return ""
    days = [float(dt.date.fromisoformat(on).toordinal()) for on, _ in series]
    values = [value for _, value in series]
    try:
        line = trend(days, values)
    except StatisticsError:
        return ""
    text = (
        f"change {30.0 * line.change_per_day:+.3g} a month, {'significant' if line.significant else 'not significant'}"
    )
    first = sum(values[:3]) / 3
    if quantity in ("response time", "film time") and values[-1] > SLOWING * first > 0:
        text += f"; the probe is slowing: {values[-1]:.0f} s, it was {first:.0f} s: clean or replace it"
    return text
