"""What the demo shows: a lab folder of its own, and a whole run on its simulated bench in a process of its own."""

from __future__ import annotations

import tempfile
from pathlib import Path

from controller.benchwork.pace import FAST
from controller.labfolder import Lab, find_lab, init_lab

METHOD, SAMPLE_ID = "juice-acidity", "press 3, Tuesday"
#: how many times real time a run on the screen passes, unless told otherwise; + and - change it there
WATCHED_TIME_SCALE = "10"


def start_watched(
    lab: Lab | None = None, *, seed: int = 1, time_scale: str | None = None
) -> tuple[Lab, Path, float | None]:
    """Start the demo's run in its own process, as any run on the screen.

    Returns:
        The lab folder (a new one where none is given), the run's record, and how many times real time passes.
    """
    from controller.running.launch import record_of, start_run
    from drivers.clock import SystemClock

    if lab is None:
        folder = new_folder()
        init_lab(folder)
        lab = find_lab(str(folder))
    scale = time_scale or WATCHED_TIME_SCALE
    arguments = [METHOD, "--sample-id", SAMPLE_ID, "--seed", str(seed), "--operator", "virtual chemist"]
    started = start_run(lab, [*arguments, "--time-scale", scale])
    return lab, record_of(started, SystemClock()), None if scale == FAST else float(scale)


def new_folder() -> Path:
    """Return where a lab folder for the demo may be made."""
    return Path(tempfile.mkdtemp(prefix="halfdrop-demo-")) / "cider-lab"
