"""Which pump and probe a lab folder last worked with, where no device is asked (bench show, predict)."""

from __future__ import annotations

import contextlib
import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from controller.calibration.store import calibrations
from controller.records.record import list_records
from drivers.absent import ABSENT

#: newest records that are looked at
_MOST_RECORDS = 50


@dataclass(frozen=True, slots=True, kw_only=True)
class LastDevices:
    """Identities; None: nothing on record tells."""

    pump: str | None = None
    probe: str | None = None


def last_devices(runs: Path, folder: Path) -> LastDevices:
    """Return the devices of the newest run, else of the newest accepted calibrations.

    Args:
        runs: the lab folder's records.
        folder: its calibrations.
    """
    for path in reversed(list_records(runs)[-_MOST_RECORDS:] if runs.is_dir() else []):
        with contextlib.suppress(OSError, ValueError, KeyError, TypeError):
            with path.open("rb") as file:
                plan: dict[str, Any] = json.loads(file.readline())["header"]["plan"]
            return LastDevices(pump=str(plan["pump"]["identity"]), probe=str(plan["probe"]["identity"]))
    accepted = [one for one in calibrations(folder) if one.accepted and one.subject != ABSENT.key]
    return LastDevices(
        pump=next((one.subject for one in reversed(accepted) if one.kind == "burette"), None),
        probe=next((one.subject for one in reversed(accepted) if one.kind in ("probe", "response")), None),
    )
