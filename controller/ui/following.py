"""What comes after a run: the next record of the same process, as in replicates, a series, a standardisation."""

from __future__ import annotations

from pathlib import Path

from controller.records.record import list_records
from controller.running.commandclient import SUFFIX, read_announcement


def next_record(record: Path, pid: int | None, calibrations_before: frozenset[Path] | None) -> Path | None:
    """Return the record that the process of a finished run writes now, None where there is none.

    Args:
        record: of the run that is over.
        pid: of its process, None where it is not known.
        calibrations_before: those that were there before a calibration was started; a newer one is its outcome, even
            when it is closed already. None: no calibration was started.
    """
    lab = record.parent.parent
    for folder in (record.parent, lab / "calibrations"):
        for announced in sorted(folder.glob(f"*{SUFFIX}"), reverse=True):
            told, path = read_announcement(announced), announced.with_suffix(".jsonl")
            if told is not None and told.pid == pid and path != record and path.is_file():
                return path
    if calibrations_before is None or not (lab / "calibrations").is_dir():
        return None
    return next((path for path in list_records(lab / "calibrations") if path not in calibrations_before), None)
