"""Starts a run in a process of its own, which goes on whatever becomes of the one that started it."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from configs.errors import HalfdropError
from controller.labfolder import Lab
from controller.records.record import list_records, summarise
from controller.running.commandclient import SUFFIX, read_announcement
from drivers.clock import Clock

#: a run that has not announced itself by then is not going to, s
LONGEST_START_S = 30.0
_LOOK_S = 0.05
_LOG_LINES = 6
#: how an error begins on the command line
_ERROR = "halfdrop: "
#: processes that this one started and will not wait for; kept, so that none is given up while it runs
_LEFT_RUNNING: list[subprocess.Popen[bytes]] = []


class RunNotStartedError(HalfdropError):
    """The run ended before its first line; what it said stands in the text."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Started:
    """A process that was started, where its messages and its record go, and the records that were there before."""

    process: subprocess.Popen[bytes]
    log: Path
    records: Path
    before: frozenset[Path]


def start_run(
    lab: Lab,
    arguments: Sequence[str],
    *,
    answers: Mapping[str, str] | None = None,
    command: Sequence[str] = ("run",),
    records: Path | None = None,
) -> Started:
    """Start `halfdrop run ARGUMENTS --headless` on a lab folder, detached from terminal and parent.

    Args:
        lab: where the record goes.
        arguments: of the command; of `halfdrop run` the method first.
        answers: to the questions before the first dose; None: a simulated bench answers for itself.
        command: another command that writes a record ("calibrate", "probe").
        records: folder of its records; default: the lab's runs.
    """
    stamp = datetime.now(UTC).strftime("%Y-%m-%dT%H%M%S%fZ")
    log = lab.writable().path / "logs" / f"run-{stamp}.log"
    log.parent.mkdir(exist_ok=True)
    given = [*arguments, "--lab", str(lab.path), "--headless"]
    if answers is not None:
        file = log.with_suffix(".answers.yaml")
        file.write_text(json.dumps(dict(answers), ensure_ascii=False, indent=1), encoding="utf-8")  # JSON is YAML too
        given += ["--answers", str(file)]
    folder = records or lab.runs
    folder.mkdir(exist_ok=True)
    before = frozenset(list_records(folder))
    with log.open("wb") as sink:
        process = subprocess.Popen(
            [sys.executable, "-P", "-m", "controller.cli", *command, *given],
            stdin=subprocess.DEVNULL,
            stdout=sink,
            stderr=subprocess.STDOUT,
            **_detached(),
        )
    _LEFT_RUNNING[:] = [one for one in _LEFT_RUNNING if one.poll() is None] + [process]
    return Started(process=process, log=log, records=folder, before=before)


def record_of(started: Started, clock: Clock) -> Path:
    """Wait until a started run has its record, and return it.

    Raises:
        RunNotStartedError: it ended before, or does not begin within `LONGEST_START_S`.
    """
    until_s = clock.now_s() + LONGEST_START_S
    while clock.now_s() < until_s:
        ended = started.process.poll() is not None
        new = [path for path in list_records(started.records) if path not in started.before]
        for path in new:
            told = read_announcement(path) if path.with_suffix(SUFFIX).exists() else None
            if ended or (told is not None and told.pid == started.process.pid):
                return path
        if ended:
            raise RunNotStartedError(
                f"the run did not begin: {_said(started.log)}", where="run", remedy=f"See {started.log}"
            )
        clock.wait(_LOOK_S)
    raise RunNotStartedError(
        f"the run did not begin within {LONGEST_START_S:g} s", where="run", remedy=f"See {started.log}"
    )


def taken_up(started: Started, record: Path, clock: Clock) -> None:
    """Wait until a started process has taken up an existing record: it takes commands for it, or has ended it.

    Raises:
        RunNotStartedError: it gave up before, or takes longer than `LONGEST_START_S`.
    """
    until_s = clock.now_s() + LONGEST_START_S
    while clock.now_s() < until_s:
        ended = started.process.poll() is not None
        told = read_announcement(record)
        if told is not None and told.pid == started.process.pid:
            return
        if ended:
            if summarise(record).get("outcome") is not None:
                return
            raise RunNotStartedError(
                f"it was not taken up: {_said(started.log)}", where=record.stem, remedy=f"See {started.log}"
            )
        clock.wait(_LOOK_S)
    raise RunNotStartedError(
        f"nothing was heard of it within {LONGEST_START_S:g} s", where=record.stem, remedy=f"See {started.log}"
    )


def _said(log: Path) -> str:
    try:
        lines = log.read_text(encoding="utf-8", errors="replace").strip().splitlines()
    except OSError:
        lines = []
    told = [line.removeprefix(_ERROR) for line in lines if line.startswith(_ERROR)]
    return " / ".join(told or lines[-_LOG_LINES:]).rstrip(". ") or "it said nothing"


def _detached() -> dict[str, Any]:
    if os.name == "posix":
        return {"start_new_session": True}
    new_group, detached = 0x00000200, 0x00000008  # of the Windows API; subprocess names them only there
    return {"creationflags": new_group | detached}
