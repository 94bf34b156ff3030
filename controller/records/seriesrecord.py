"""The record of a series: which runs it asks for, what became of each. Written like a run's record, line by line.

It lies in the lab folder's `series/`, is hash-chained and closed as a run's record is, and names the runs by the names
of their own records. An open one is gone on with.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from configs.errors import HalfdropError
from controller.journal import RECORD_VERSION, Clock, Journal, Sink, encode
from controller.planning.series import SeriesItem
from controller.records.recordfile import new_record
from controller.records.reopening import ReopenedJournal, ReopenedSink, check_open, whole_lines

FOLDER = "series"
KIND = "halfdrop series"


class SeriesJournal(Journal):
    """Writes the record of a series that begins."""

    def begin(self, header: Mapping[str, Any]) -> None:
        """Write the header as line 1 and bring it to the medium.

        Raises:
            RecordError: it cannot be written.
        """
        self.started_s = self._clock.now_s()
        self._append(f'"record":"{KIND}","record_version":{RECORD_VERSION},"header":{encode(header)}')
        self.barrier()


@dataclass(frozen=True, slots=True, kw_only=True)
class SeriesState:
    """What a series' record says.

    Attributes:
        items: the samples in order.
        ended: outcome and run's name by (sample id, replicate), of those that ended; outcome "skipped" without a run.
        under_way: (sample id, replicate) of a run that began and has no end here.
        closed: the series has its end.
        header: everything else that it was begun with.
    """

    path: Path
    data: bytes
    items: tuple[SeriesItem, ...]
    ended: dict[tuple[str, int], tuple[str, str | None]]
    under_way: tuple[str, int] | None
    closed: bool
    header: dict[str, Any]


def new_series(
    lab: Path, *, clock: Clock, label: str, items: Sequence[SeriesItem], about: Mapping[str, Any]
) -> SeriesJournal:
    """Begin the record of a series.

    Raises:
        HalfdropError: the folder cannot be written to.
    """
    folder = lab / FOLDER
    try:
        folder.mkdir(exist_ok=True)
    except OSError as error:
        raise HalfdropError(
            f"cannot be made ({error.strerror})", where=str(folder), remedy="Make the lab folder writable"
        ) from error
    sink = new_record(folder, utc_s=clock.utc_s(), label=label)
    journal = SeriesJournal(sink, clock, name=str(sink.path))
    journal.begin({**about, "items": [item.to_json() for item in items]})
    return journal


def read_state(path: Path) -> SeriesState:
    """Read the record of a series.

    Raises:
        HalfdropError: it is none, or it was edited.
    """
    try:
        data = path.read_bytes()
    except OSError as error:
        raise HalfdropError(
            f"it cannot be read ({error.strerror})", where=str(path), remedy="Name the record of a series"
        ) from error
    mended = whole_lines(data)
    entries = [_object(line) for line in mended.split(b"\n")[:-1]]
    first = entries[0] if entries else None
    if first is None or first.get("record") != KIND or not isinstance(first.get("header"), dict):
        raise HalfdropError("no record of a series", where=str(path), remedy="Name one of the lab folder's series/")
    if not isinstance(first.get("record_version"), int) or first["record_version"] > RECORD_VERSION:
        raise HalfdropError(
            f"record version {first.get('record_version')}; this program reads up to {RECORD_VERSION}",
            where=str(path),
            remedy="Use a newer halfdrop",
        )
    known = [entry for entry in entries[1:] if entry is not None]
    closed = any("closing" in entry for entry in known)
    if not closed:
        check_open(mended, str(path))
    header = first["header"]
    ended: dict[tuple[str, int], tuple[str, str | None]] = {}
    under_way: tuple[str, int] | None = None
    for entry in known:
        if entry.get("event") == "titration-begun":
            under_way = (entry["sample_id"], entry["replicate"])
        elif entry.get("event") == "titration-ended":
            ended[entry["sample_id"], entry["replicate"]] = (entry["outcome"], entry.get("run"))
            under_way = None
    return SeriesState(
        path=path,
        data=data,
        items=tuple(SeriesItem(**item) for item in header["items"]),
        ended=ended,
        under_way=under_way,
        closed=closed,
        header=header,
    )


def reopen_series(state: SeriesState, clock: Clock) -> ReopenedJournal:
    """Open the record of a series for what comes next.

    Raises:
        HalfdropError: it is closed, or was edited.
    """
    sink: Sink = ReopenedSink(state.path)
    last = _object(whole_lines(state.data).split(b"\n")[-2]) or {}
    journal = ReopenedJournal(sink, clock, data=state.data, run_s=float(last.get("run_s", 0.0)), name=str(state.path))
    journal.write_resumed()
    return journal


def _object(line: bytes) -> dict[str, Any] | None:
    try:
        found = json.loads(line)
    except ValueError:
        return None
    return found if isinstance(found, dict) else None
