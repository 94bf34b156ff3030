"""halfdrop resume: go on with a run that broke off, or end it and evaluate what is there."""

from __future__ import annotations

import argparse

from controller.commands.resumerun import resume_run
from controller.commands.runs import record_path
from controller.commands.series import is_series, resume_series
from controller.commands.titration import tell
from controller.labfolder import find_lab


def resume(given: argparse.Namespace) -> int:
    """Resume a run or a series; exit status as of `run`."""
    lab = find_lab(given.lab).writable()
    if (series := is_series(given.run, lab)) is not None:
        return resume_series(series, lab, given)
    result = resume_run(given, lab, record_path(given.run, given))
    tell(result, as_json=given.json)
    return result.exit_status
