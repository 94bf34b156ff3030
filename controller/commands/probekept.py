"""After a run: what it learned of its probe goes into the probe's record."""

from __future__ import annotations

from pathlib import Path

from configs.errors import HalfdropError
from controller.calibration.probe_record import keep_learned
from controller.commands.output import say
from controller.labfolder import Lab


def keep_in_probe_record(lab: Lab, record: Path) -> None:
    """Keep a closed run's lag in its probe's record; that it could not be kept is said, and costs no result."""
    try:
        keep_learned(lab.calibrations, lab.runs, record)
    except HalfdropError as error:  # the runs' records hold the same
        say(f"halfdrop: {error}")
