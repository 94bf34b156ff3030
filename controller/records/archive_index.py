"""An index of a lab folder's records, so that a long archive lists at once. The records stay the truth.

It is a SQLite file that may be deleted at any time: what is missing or changed (by size and time of the file) is read
from the records again. Damaged, of another version, or in a folder that cannot be written: it is built anew, at worst
in memory.
"""

from __future__ import annotations

import contextlib
import json
import os
import sqlite3
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from controller.commands.output import amount_text
from controller.records.record import summarise

INDEX_VERSION = 1
FILE = ".archive-index.sqlite"
_COLUMNS = (
    "run", "size", "changed_ns", "readable", "started_utc", "method", "sample_id", "operator", "outcome", "reason",
    "amount", "end_points", "doses", "duration_s", "search",
)  # fmt: skip
_TABLE = """
CREATE TABLE IF NOT EXISTS runs (
    run TEXT PRIMARY KEY, size INTEGER NOT NULL, changed_ns INTEGER NOT NULL, readable INTEGER NOT NULL,
    started_utc TEXT, method TEXT, sample_id TEXT, operator TEXT, outcome TEXT, reason TEXT, amount TEXT,
    end_points TEXT NOT NULL, doses INTEGER, duration_s REAL, search TEXT NOT NULL
) WITHOUT ROWID
"""
_BATCH = 200


@dataclass(frozen=True, slots=True, kw_only=True)
class IndexedRun:
    """One line of the archive; `outcome` "open" where the record has no closing line, "unreadable" where it is none."""

    run: str
    started_utc: str | None
    method: str
    sample_id: str
    operator: str
    outcome: str
    reason: str
    amount: str
    end_points_ml: tuple[float, ...]
    doses: int | None
    duration_s: float | None


class ArchiveIndex:
    """The index of one folder of records. Every call opens the file anew, so any thread may call.

    Args:
        runs: the folder of the records.
        file: the index; default: in that folder.
    """

    def __init__(self, runs: Path, file: Path | None = None) -> None:
        self.runs = runs
        self._file: Path | None = file or runs / FILE
        self._memory: sqlite3.Connection | None = None

    def refresh(self, on_progress: Callable[[int, int], None] | None = None) -> int:
        """Bring the index up to date with the folder; return how many records were read for it.

        Args:
            on_progress: called with (read so far, to read).
        """
        there = _files(self.runs)
        with self._open() as index:
            known = {
                run: (size, changed) for run, size, changed in index.execute("SELECT run, size, changed_ns FROM runs")
            }
            gone = [(run,) for run in known if run not in there]
            index.executemany("DELETE FROM runs WHERE run = ?", gone)
            stale = [run for run, stamp in there.items() if known.get(run) != stamp]
            for begin in range(0, len(stale), _BATCH):
                batch = stale[begin : begin + _BATCH]
                index.executemany(
                    f"INSERT OR REPLACE INTO runs VALUES ({', '.join('?' * len(_COLUMNS))})",
                    [_row(self.runs / f"{run}.jsonl", *there[run]) for run in batch],
                )
                index.commit()
                if on_progress is not None:
                    on_progress(begin + len(batch), len(stale))
            return len(stale)

    def find(self, words: str = "", *, outcome: str | None = None, most: int = 200, after: int = 0) -> list[IndexedRun]:
        """Return runs, newest first, in which every word occurs (sample, method, operator, outcome, reason, name).

        Args:
            words: separated by blanks; case does not count.
            outcome: only these ("completed", "stopped", "failed", "abandoned", "open", "unreadable").
            most: how many.
            after: how many to pass over.
        """
        where, values = _conditions(words, outcome)
        with self._open() as index:
            rows = index.execute(
                f"SELECT {', '.join(_COLUMNS)} FROM runs {where} ORDER BY run DESC LIMIT ? OFFSET ?",
                [*values, most, after],
            )
            return [_indexed(dict(zip(_COLUMNS, row, strict=True))) for row in rows]

    def count(self, words: str = "", *, outcome: str | None = None) -> int:
        """Return how many runs `find` would give without a limit."""
        where, values = _conditions(words, outcome)
        with self._open() as index:
            return int(index.execute(f"SELECT COUNT(*) FROM runs {where}", values).fetchone()[0])

    @contextlib.contextmanager
    def _open(self) -> Iterator[sqlite3.Connection]:
        index = self._connection()
        try:
            yield index
            index.commit()
        finally:
            if index is not self._memory:
                index.close()

    def _connection(self) -> sqlite3.Connection:
        if self._file is not None:
            for _ in range(2):  # what is there may be damaged or of another version: then once more without it
                try:
                    return _opened(self._file)
                except sqlite3.DatabaseError:
                    with contextlib.suppress(OSError):
                        self._file.unlink(missing_ok=True)
            self._file = None
        if self._memory is None:
            self._memory = sqlite3.connect(":memory:", check_same_thread=False)
            self._memory.execute(_TABLE)
        return self._memory


def _opened(file: Path) -> sqlite3.Connection:
    index = sqlite3.connect(file, timeout=5.0)
    try:
        (version,) = index.execute("PRAGMA user_version").fetchone()
        if version not in (0, INDEX_VERSION):
            raise sqlite3.DatabaseError("another version")
        index.execute(_TABLE)
        if version == 0:
            index.execute(f"PRAGMA user_version = {INDEX_VERSION}")
        index.execute(f"SELECT {', '.join(_COLUMNS)} FROM runs LIMIT 1").fetchall()
        index.execute("PRAGMA synchronous = OFF")  # it can be built anew at any time
    except BaseException:
        index.close()
        raise
    return index


def _files(runs: Path) -> dict[str, tuple[int, int]]:
    """Size and time of every record in the folder, by its name."""
    found = {}
    try:
        with os.scandir(runs) as entries:
            for entry in entries:
                if entry.name.endswith(".jsonl") and entry.is_file():
                    told = entry.stat()
                    found[entry.name.removesuffix(".jsonl")] = (told.st_size, told.st_mtime_ns)
    except OSError:
        return {}
    return found


def _row(path: Path, size: int, changed_ns: int) -> tuple[Any, ...]:
    told = summarise(path)
    volumes = [point["volume_ml"] for point in told.get("end_points") or [] if isinstance(point, dict)]
    amount = amount_text(told["result"]) if told.get("result") else ""
    outcome = told.get("outcome") or ("open" if told["readable"] else "unreadable")
    words = (
        path.stem, told.get("method"), told.get("sample_id"), told.get("operator"), outcome, told.get("reason"), amount,
    )  # fmt: skip
    return (
        path.stem,
        size,
        changed_ns,
        int(told["readable"]),
        told.get("started_utc"),
        _text(told.get("method")),
        _text(told.get("sample_id")),
        _text(told.get("operator")),
        outcome,
        _text(told.get("reason")),
        amount,
        json.dumps(volumes),
        told.get("doses"),
        told.get("duration_s"),
        " ".join(_text(word) for word in words).casefold(),
    )


def _text(value: Any) -> str:
    return "" if value is None else str(value)


def _indexed(row: dict[str, Any]) -> IndexedRun:
    return IndexedRun(
        run=row["run"],
        started_utc=row["started_utc"],
        method=row["method"],
        sample_id=row["sample_id"],
        operator=row["operator"],
        outcome=row["outcome"],
        reason=row["reason"],
        amount=row["amount"],
        end_points_ml=tuple(json.loads(row["end_points"])),
        doses=row["doses"],
        duration_s=row["duration_s"],
    )


def _conditions(words: str, outcome: str | None) -> tuple[str, list[Any]]:
    conditions, values = [], []
    for word in words.casefold().split():
        conditions.append("search LIKE ? ESCAPE '\\'")
        escaped = word.replace("\\", "\\\\").replace("%", "\\%").replace("_", "\\_")
        values.append(f"%{escaped}%")
    if outcome:
        conditions.append("outcome = ?")
        values.append(outcome)
    return (f"WHERE {' AND '.join(conditions)}" if conditions else ""), values
