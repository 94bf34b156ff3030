"""Where the probe was left after its last run: rinsed and stored, or standing in the titrated solution since then.

A glass membrane suffers in alkaline solutions and when it dries, and a junction clogs; how long it stood is looked up
in the records, so that the next run and the bench can tell.
"""

from __future__ import annotations

import contextlib
import datetime as dt
import json
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import chain
from pathlib import Path
from typing import Any

from controller.calibration.probe_record import probe_of_header, stored_utc
from controller.records.record import NotARecordError, Record, list_records, read_record
from drivers.absent import ABSENT

#: standing longer than this is warned about before the next run, s (common practice: store it between samples)
LONG_S = 3600.0
STORED = "yes"
#: newest records that are looked through for one of this probe
_MOST_RECORDS = 200


@dataclass(frozen=True, slots=True, kw_only=True)
class ProbeLeft:
    """The last record of a probe of which nobody said that it was rinsed and stored.

    Attributes:
        probe: its identity.
        run: name of the record.
        since_utc_s: POSIX seconds of its end.
        answered_no: whether somebody said that it was not; else nobody said anything.
        ph: the last that was read, None where no pH was followed.
        titration: whether it stands in a titrated solution; else in a buffer.
    """

    probe: str
    run: str
    since_utc_s: float
    answered_no: bool
    ph: float | None
    titration: bool

    def stood_s(self, now_utc_s: float) -> float:
        """Return how long it has stood there, at most."""
        return max(0.0, now_utc_s - self.since_utc_s)

    def text(self, now_utc_s: float) -> str:
        """Return it in words, with what to do."""
        where = "the titrated solution" if self.titration else "the last buffer"
        ph = "" if self.ph is None else f", pH {self.ph:.1f}"
        said = "it was not rinsed and stored" if self.answered_no else "nobody said that it was rinsed and stored"
        return (
            f"the probe has stood in {where} of {self.run}{ph}, for up to {span_text(self.stood_s(now_utc_s))}: "
            f"{said}; rinse it, leave it in its storage solution for a while, and check a buffer"
        )


def probe_left(runs: Path, calibrations: Path, probe: str | None = None) -> ProbeLeft | None:
    """Return where a probe was left; None where it was stored, or has no record.

    Args:
        runs: the lab folder's records.
        calibrations: its calibrations.
        probe: its identity; None: the one that was used last.
    """
    found = [one for folder in (runs, calibrations) if (one := _newest(folder, probe)) is not None]
    newest = max(found, key=lambda record: str(record.header.get("started_utc")), default=None)
    if newest is None or (newest.closing or {}).get("probe_stored") == STORED:
        return None
    ended = _utc_s(newest.entries[-1].get("utc") if newest.entries else newest.header.get("started_utc"))
    used = probe_of_header(newest.header) or ""
    stored = _utc_s(stored_utc(calibrations, used))
    if ended is None or (stored is not None and stored >= ended):
        return None
    plan = newest.header.get("plan") or {}
    return ProbeLeft(
        probe=used,
        run=newest.path.stem,
        since_utc_s=ended,
        answered_no=(newest.closing or {}).get("probe_stored") == "no",
        ph=_last_ph(newest),
        titration="titrant" in plan,
    )


def span_text(seconds: float) -> str:
    """Return a time in the unit that a person would use."""
    if seconds < 5400.0:
        return f"{seconds / 60.0:.0f} min"
    return f"{seconds / 3600.0:.0f} h" if seconds < 48 * 3600.0 else f"{seconds / 86400.0:.0f} days"


def _newest(folder: Path, probe: str | None) -> Record | None:
    """The newest record that the probe has to do with; of others only the first line is read."""
    records = list_records(folder) if folder.is_dir() else []
    for path in reversed(records[-_MOST_RECORDS:]):
        with contextlib.suppress(NotARecordError, OSError, ValueError, AttributeError, TypeError):
            with path.open("rb") as file:
                used = probe_of_header(json.loads(file.readline())["header"])
            if used not in (None, ABSENT.key) and probe in (None, used):
                return read_record(path)
    return None


def _last_ph(record: Record) -> float | None:
    points: Iterator[dict[str, Any]] = (one for one in reversed(record.entries) if one.get("what") == "point")
    ph = next(chain(points, ({},))).get("ph")
    return float(ph) if isinstance(ph, int | float) else None


def _utc_s(text: Any) -> float | None:
    try:
        return dt.datetime.fromisoformat(str(text).replace("Z", "+00:00")).timestamp()
    except ValueError:
        return None
