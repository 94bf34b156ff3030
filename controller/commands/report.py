"""halfdrop runs report: one record as a page to read, print and file."""

from __future__ import annotations

import argparse
import os
import sys
from pathlib import Path

from configs.errors import HalfdropError
from controller.commands.output import print_json
from controller.commands.runs import record_path
from controller.labfolder import find_lab
from controller.records.record import printable, read_record

DONE, NOT_TRUSTED = 0, 1
FOLDER = "reports"
_STDOUT = "-"
_LAB_FOLDERS = ("runs", "calibrations")


def report(given: argparse.Namespace) -> int:
    """Write the report; exit status 1 where the record is not intact."""
    import hashlib

    from controller.journal import utc_text
    from controller.records.verification import verify
    from controller.report.contents import report_contents
    from controller.report.page import render
    from controller.report.series_of_runs import found_replicates
    from drivers.clock import SystemClock

    path = _found(given)
    record = read_record(path)
    named = [read_record(record_path(name, given)) for name in given.replicate or []]
    others = named or found_replicates(record)
    page = render(report_contents(record, written_utc=utc_text(SystemClock().utc_s()), replicates=others))
    state = verify(path)
    if given.to == _STDOUT:
        sys.stdout.write(page)
        return DONE if state.state == "intact" else NOT_TRUSTED
    target = _target(path) if given.to is None else Path(given.to)
    _write(target, page)
    if given.json:
        sha256 = hashlib.sha256(page.encode()).hexdigest()
        print_json({"run": path.stem, "report": str(target), "sha256": sha256, "record": state.to_json()})
    else:
        print(f"wrote {printable(str(target))}")
        print(f"record: {state.state} ({printable(state.what)})")
    return DONE if state.state == "intact" else NOT_TRUSTED


def _found(given: argparse.Namespace) -> Path:
    """A record of the runs folder, or else of the calibrations folder."""
    try:
        return record_path(given.run, given)
    except HalfdropError:
        folder = find_lab(given.lab).path / "calibrations"
        inside = folder / f"{Path(given.run).stem}.jsonl"
        if Path(given.run).name == given.run and inside.is_file():
            return inside
        raise


def _target(record: Path) -> Path:
    """A record of a lab folder has its report in the folder's `reports`, any other beside itself."""
    name = f"{record.stem}.html"
    return record.parent.parent / FOLDER / name if record.parent.name in _LAB_FOLDERS else record.with_name(name)


def _write(target: Path, page: str) -> None:
    """Write by rename; only an earlier report is ever replaced.

    Raises:
        HalfdropError: another file is in the way, or it cannot be written.
    """
    from controller.report.page import GENERATOR

    try:
        if target.exists() and GENERATOR not in target.read_text(encoding="utf-8", errors="replace"):
            raise HalfdropError(
                "a file that is no report is in the way", where=str(target), remedy="Name another with --to"
            )
        target.parent.mkdir(parents=True, exist_ok=True)
        unfinished = target.with_name(f"{target.name}.{os.getpid()}.part")
        unfinished.write_text(page, encoding="utf-8", newline="\n")
        unfinished.replace(target)
    except OSError as error:
        raise HalfdropError(
            f"it cannot be written ({error.strerror})", where=str(target), remedy="Name another file with --to"
        ) from error
