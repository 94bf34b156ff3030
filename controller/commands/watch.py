"""The terminal UI: on a lab folder, on one run, or for the demo; plain lines where there is no terminal."""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

from configs.errors import HalfdropError
from controller.labfolder import Lab, LabError, find_lab

DONE = 0
_LOOK_S = 0.5


def has_terminal() -> bool:
    """Tell whether a screen can be shown and keys can be read."""
    return sys.stdin.isatty() and sys.stdout.isatty()


def watch(given: argparse.Namespace) -> int:
    """Follow a run: on the screen, or as lines."""
    from controller.commands.runs import record_path
    from controller.running.commandclient import running

    lab = _lab(given.lab, needed=given.run is None)
    record = record_path(given.run, given) if given.run else None
    if record is None:
        assert lab is not None
        record = running(lab.runs)
    if record is None:
        raise HalfdropError(
            "no run goes on in this lab folder", where="watch", remedy="Start one, or name a record to look at"
        )
    if has_terminal():
        return show(lab, record)
    return _follow(record)


def open_screen(given: argparse.Namespace) -> int:
    """Open the terminal UI on the lab folder; where there is none yet, it offers to make one."""
    return show(_lab(getattr(given, "lab", None), needed=False), None)


def show(lab: Lab | None, record: Path | None, *, speed: float | None = None) -> int:
    """Show the UI until it is left."""
    from controller.ui.app import HalfdropApp

    return HalfdropApp(lab=lab, record=record, speed=speed, start_demo=_start_demo).run() or DONE


def _start_demo() -> tuple[Lab, Path, float | None]:
    from controller.commands.demolab import start_watched

    return start_watched()


def _lab(named: str | None, *, needed: bool) -> Lab | None:
    try:
        return find_lab(named)
    except LabError:
        if needed or named:
            raise
        return None


def _follow(record: Path) -> int:
    """Print what the run says until it is over or its process is gone."""
    from controller.running.commandclient import SUFFIX
    from controller.ui.runview import RunView
    from controller.ui.tail import RecordTail
    from controller.ui.texts import clock_text
    from drivers.clock import SystemClock

    tail, view, clock, said = RecordTail(record), RunView(name=record.stem), SystemClock(), 0
    while True:
        listens = record.with_suffix(SUFFIX).exists()
        for entry in tail.poll():
            view.feed(entry)
        for one in view.sentences[said:]:
            print(f"[{clock_text(one.at_s)}] {one.text}", flush=True)
        said = len(view.sentences)
        if view.over:
            return DONE
        if not listens and not tail.more:
            raise HalfdropError(
                "its record is open and no process runs it",
                where=record.stem,
                remedy="See to the bench, then close it",
            )
        clock.wait(0.0 if tail.more else _LOOK_S)
