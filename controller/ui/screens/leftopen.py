"""A run without an end and without a process: what may become of it, and the start of what was chosen."""

from __future__ import annotations

import subprocess
import sys
from functools import partial
from pathlib import Path
from typing import Any

from textual.app import App

from configs.errors import HalfdropError
from controller.labfolder import Lab
from controller.records.archive_index import ArchiveIndex
from controller.records.record import list_records, printable, read_record, summarise
from controller.records.seriesrecord import FOLDER, read_state
from controller.running.commandclient import say_hello
from controller.running.launch import start_run, taken_up
from controller.ui.screens.dialogs import Choice, Text, printable_lines
from controller.ui.texts import local_time_text
from drivers.clock import SystemClock

GO_ON, EVALUATE, CLOSE, LEAVE = "go-on", "evaluate", "close", "leave"
_LEAVE = ("l", "Leave it for now", LEAVE)
_EVALUATE = ("e", "End it, evaluate what is there", EVALUATE)
_CLOSE = ("c", "Close the record as it is, unevaluated", CLOSE)
#: a record that was written to within this time may be one that is being begun, s
_MOST_LOOKED_AT = 20


def left_open(lab: Lab) -> list[Path]:
    """Return the runs without an end that no process takes commands for, newest first; the index must be up to date."""
    found = ArchiveIndex(lab.runs).find(outcome="open", most=_MOST_LOOKED_AT)
    records = [lab.runs / f"{one.run}.jsonl" for one in found]
    return [path for path in records if not _listens(path) and summarise(path).get("outcome") is None]


def see_to(app: App[Any], lab: Lab, record: Path) -> None:
    """Ask what is to become of a record that was left open, and do it."""
    told = summarise(record)
    sample, method = printable(str(told.get("sample_id"))), printable(str(told.get("method")))
    text = (
        f"{sample}, {method}, begun {local_time_text(told.get('started_utc'))}: its record has no end, and its "
        "process is gone.\n\nLook at bench and vessel first: does anything move, is liquid where it should not be, is "
        "the probe still immersed? This bench starts nothing else before."
    )
    if record.parent.name == "calibrations":
        answers = [_CLOSE, _LEAVE]
    else:
        answers = [("g", "Go on with it", GO_ON), _EVALUATE, _LEAVE]
    app.push_screen(Choice("A run was left open", text, answers, stacked=True), partial(_chosen, app, lab, record))


def _chosen(app: App[Any], lab: Lab, record: Path, answer: str | None) -> None:
    if answer in (GO_ON, EVALUATE):
        app.notify("the record is read and the devices are asked")
        app.run_worker(partial(_take_up, app, lab, record, answer == EVALUATE), thread=True, group="left-open")
    elif answer == CLOSE:
        app.run_worker(partial(_close, app, lab, record), thread=True, group="left-open")


def _take_up(app: Any, lab: Lab, record: Path, evaluate_only: bool) -> None:
    named = None if evaluate_only else series_of(lab, record)
    arguments = [named or record.stem, "--attended", *(["--evaluate-only"] if evaluate_only else [])]
    try:
        taken_up(start_run(lab, arguments, command=("resume",)), record, SystemClock())
    except HalfdropError as error:
        app.call_from_thread(_not_taken_up, app, lab, record, str(error), evaluate_only)
    else:
        app.call_from_thread(app.open_run, record)


def _not_taken_up(app: App[Any], lab: Lab, record: Path, text: str, evaluate_only: bool) -> None:
    answers = [_CLOSE, _LEAVE] if evaluate_only else [_EVALUATE, _CLOSE, _LEAVE]
    dialog = Choice("It could not be taken up", printable_lines(text), answers, stacked=True)
    app.push_screen(dialog, partial(_chosen, app, lab, record))


def _close(app: Any, lab: Lab, record: Path) -> None:
    arguments = [sys.executable, "-P", "-m", "controller.cli", "runs", "close", str(record), "--lab", str(lab.path)]
    done = subprocess.run(arguments, capture_output=True, text=True, check=False, stdin=subprocess.DEVNULL)
    if done.returncode == 0:
        app.call_from_thread(app.open_run, record)
    else:
        app.call_from_thread(app.push_screen, Text("It was not closed", printable_lines(done.stderr.strip())))


def series_of(lab: Lab, record: Path) -> str | None:
    """Return the name of the open series that this run belongs to, None where it is a run of its own."""
    sample = (read_record(record).header.get("plan") or {}).get("sample") or {}
    folder = lab.path / FOLDER
    for path in reversed(list_records(folder)) if folder.is_dir() else ():
        try:
            state = read_state(path)
        except HalfdropError:
            continue
        if not state.closed and state.under_way is not None and state.under_way[0] == sample.get("sample_id"):
            return path.stem
    return None


def _listens(record: Path) -> bool:
    try:
        say_hello(record)
    except HalfdropError:
        return False
    return True
