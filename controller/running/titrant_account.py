"""How much titrant is left in a reservoir whose pump does not know: a running account by pump, in the lab folder.

What was there when the bottle was changed, less what went through the tip since. The account is written whole or not at
all; where its file is missing or unreadable, the records say the same, but for what was pushed outside runs (a check of
the bench, priming by hand, emptying), which stands in the account alone. A dose in doubt counts whole.
"""

from __future__ import annotations

import contextlib
import json
import os
from collections.abc import Iterable
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from configs.errors import HalfdropError
from controller.lock import sync_folder, sync_to_disk
from controller.records.record import list_records, read_record

if TYPE_CHECKING:
    from configs.benchfile import PumpSettings

FILE_NAME = "titrant-left.json"
#: records whose titrant is counted, by name, so that none is counted twice
MOST_NAMES = 5000


@dataclass(frozen=True, slots=True, kw_only=True)
class TitrantAccount:
    """One pump's. Volumes mL.

    Attributes:
        pump: its identity.
        filled_ml: in the reservoir when it was changed.
        changed_utc: when that was ("" where the bench file does not say: all records count).
        used_ml: through the tip since.
        records: names of the records that are counted in it.
    """

    pump: str
    filled_ml: float
    changed_utc: str
    used_ml: float = 0.0
    records: tuple[str, ...] = ()

    def reservoir_left_ml(self, *, syringe_ml: float, contents_ml: float) -> float:
        """What is left in the reservoir, at worst: the syringe was full when the bottle was changed.

        Args:
            syringe_ml: what the full syringe holds.
            contents_ml: what it holds now.
        """
        drawn_ml = self.used_ml - (syringe_ml - contents_ml)
        return max(0.0, self.filled_ml - max(0.0, drawn_ml))

    def with_record(self, path: Path) -> TitrantAccount:
        """Count one more record, once.

        Raises:
            HalfdropError: it cannot be read.
        """
        if path.stem in self.records:
            return self
        record = read_record(path)
        if _pump_of(record.header) != self.pump or str(record.header.get("started_utc", "")) < self.changed_utc:
            return self
        used_ml = _used_ml(record.entries)
        return replace(self, used_ml=round(self.used_ml + used_ml, 9), records=(*self.records, path.stem)[-MOST_NAMES:])


def account_of(lab: Path, runs: Path, *, pump: str, filled_ml: float, changed_utc: str | None) -> TitrantAccount:
    """Return a pump's account up to the last closed record; it begins anew with every change of the bottle.

    Args:
        lab: the lab folder.
        runs: its records.
        pump: identity.
        filled_ml: as the bench file says.
        changed_utc: when the bottle was changed, as the bench file says.
    """
    wanted = TitrantAccount(pump=pump, filled_ml=filled_ml, changed_utc=changed_utc or "")
    kept = _read(lab).get(pump)
    account = wanted
    if kept is not None and (kept.filled_ml, kept.changed_utc) == (wanted.filled_ml, wanted.changed_utc):
        account = kept
    for path in list_records(runs):  # those of before are known by name; what is missing is counted now
        with contextlib.suppress(HalfdropError):
            account = account.with_record(path)
    return account


def keep(lab: Path, account: TitrantAccount) -> None:
    """Write the account, whole or not at all.

    Raises:
        HalfdropError: it cannot be written; the records still say it.
    """
    accounts = {**_read(lab), account.pump: account}
    new = lab / f".{FILE_NAME}.{os.getpid()}"
    try:
        with new.open("w", encoding="utf-8") as file:
            json.dump([asdict(one) for one in accounts.values()], file, ensure_ascii=False, indent=1)
            file.flush()
            sync_to_disk(file.fileno())
        new.replace(lab / FILE_NAME)
        sync_folder(lab)
    except OSError as error:
        new.unlink(missing_ok=True)
        raise HalfdropError(
            f"the account of titrant cannot be written ({error.strerror})",
            where=str(lab / FILE_NAME),
            remedy="Make room or the folder writable; the records hold the same",
        ) from error


def book_outside_runs(lab: Path, runs: Path, bench: PumpSettings, pump: str, moved_ml: float) -> None:
    """Count what was pushed through the tip without a record; nothing where there is no reservoir to count.

    Args:
        lab: the lab folder.
        runs: its records.
        bench: what the bench file says of the pump, which does not tell its reservoir.
        pump: identity.
        moved_ml: what went through the tip.

    Raises:
        HalfdropError: it cannot be written.
    """
    if bench.refill == "none" or not moved_ml > 0.0:
        return
    account = account_of(lab, runs, pump=pump, filled_ml=bench.reservoir_ml, changed_utc=bench.reservoir_changed_utc)
    keep(lab, replace(account, used_ml=round(account.used_ml + moved_ml, 9)))


def _read(lab: Path) -> dict[str, TitrantAccount]:
    try:
        told = json.loads((lab / FILE_NAME).read_text(encoding="utf-8"))
        accounts = [TitrantAccount(**{**one, "records": tuple(one["records"])}) for one in told]
        if not all(isinstance(one.used_ml, float | int) and one.used_ml >= 0.0 for one in accounts):
            return {}
    except (OSError, ValueError, TypeError, KeyError, RecursionError):
        return {}
    return {one.pump: one for one in accounts}


def _pump_of(header: dict[str, Any]) -> str | None:
    pump = (header.get("plan") or {}).get("pump") or {}
    return pump.get("identity") if isinstance(pump, dict) else None


def _used_ml(entries: Iterable[dict[str, Any]]) -> float:
    """Everything through the tip; a dose without an answer counts as it was asked for."""
    used_ml, asked_ml = 0.0, 0.0
    for entry in entries:
        if entry.get("action") == "dose":
            asked_ml = float(entry.get("volume_ml") or 0.0)
        elif entry.get("observation") in ("dosed", "primed"):
            used_ml, asked_ml = used_ml + float(entry.get("volume_ml") or 0.0), 0.0
        elif entry.get("observation") == "failed" and entry.get("number") is not None:
            highest_ml = entry.get("highest_ml")
            used_ml, asked_ml = used_ml + (asked_ml if highest_ml is None else float(highest_ml)), 0.0
        elif entry.get("observation") in ("refused", "command", "back", "resumed"):
            asked_ml = 0.0
    return used_ml + asked_ml
