"""What the screens do with a record: verify it, write its tables, have its report written."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

from textual.screen import Screen

from configs.errors import HalfdropError
from controller.records.record import read_record
from controller.records.verification import verify
from controller.ui.screens.dialogs import Text, printable_lines


def verify_for(screen: Screen[Any], record: Path) -> None:
    """Verify a record and show the finding; for a thread of its own."""
    try:
        found = verify(record)
        text = f"{record.name}\n\n{found.state}: {found.what}"
    except HalfdropError as error:
        text = str(error)
    text += "\n\nIntact means: as the program wrote it. Whoever rewrites every hash makes a new record."
    screen.app.call_from_thread(screen.app.push_screen, Text("Is the record as it was written?", printable_lines(text)))


def write_tables(record: Path, folder: Path) -> list[str]:
    """Write a record's tables and their data package; return the names of the files."""
    from controller.report.export import data_package, tables

    read = read_record(record)
    files = dict(tables(read))
    files["datapackage.json"] = json.dumps(data_package(read, files), indent=2, ensure_ascii=False) + "\n"
    folder.mkdir(parents=True, exist_ok=True)
    for name, text in files.items():
        (folder / name).write_text(text, encoding="utf-8", newline="")
    return list(files)


def report_for(screen: Screen[Any], record: Path) -> None:
    """Write a record's report in a process of its own and say where it is; for a thread of its own."""
    arguments = [sys.executable, "-P", "-m", "controller.cli", "runs", "report", str(record)]
    lab = getattr(screen.app, "lab", None)
    if lab is not None:
        arguments += ["--lab", str(lab.path)]
    done = subprocess.run(arguments, capture_output=True, text=True, check=False, stdin=subprocess.DEVNULL)
    said = done.stdout if done.returncode == 0 else done.stderr
    told = Text("The report" if done.returncode == 0 else "No report was written", printable_lines(said.strip()))
    screen.app.call_from_thread(screen.app.push_screen, told)
