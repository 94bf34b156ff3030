"""Records of calibrations taken over into a plan: their hashes, and what speaks against them (warned or refused)."""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from configs.errors import HalfdropError
from controller.calibration.store import Calibration, in_force
from controller.calibration.validity import Validity


class NotInForceError(HalfdropError):
    """A calibration that is missing, past its date or failed, where the bench's rules refuse that."""


@dataclass(slots=True, kw_only=True)
class Taking:
    """What one plan takes over.

    Attributes:
        folder: the lab folder's calibrations.
        today: UTC day of the run.
        refuse: whether what is past its date refuses the run; else it is warned about.
        warnings: doubts so far, in words.
        hashes: SHA-256 of what was taken, by name.
    """

    folder: Path
    today: dt.date
    refuse: bool
    warnings: list[str] = field(default_factory=list)
    hashes: dict[str, str] = field(default_factory=dict)

    def doubt(self, where: str, problems: Iterable[str], remedy: str) -> None:
        """Warn, or refuse where the rules say so.

        Raises:
            NotInForceError: there is a problem, and the rules refuse it.
        """
        for problem in problems:
            if self.refuse:
                raise NotInForceError(
                    problem, where=where, remedy=f"{remedy}, or set calibration_rules.expired to warn"
                )
            self.warnings.append(f"{where}: {problem}; {remedy[0].lower()}{remedy[1:]}")

    def taken(self, kind: str, subject: str, where: str, remedy: str) -> Calibration | None:
        """Take the calibration of a subject that is in force; None where there is none.

        Raises:
            NotInForceError: something speaks against it, and the rules refuse that.
        """
        record = in_force(self.folder, kind, subject)
        if record is None:
            return None
        self.hashes[f"calibration {kind}"] = record.sha256
        due = record.plan.get("due_days")
        validity = Validity(
            start=day_of(record.on),
            start_word="made",
            days_from_start=due if isinstance(due, int) else None,
            expires=day_of(record.plan.get("expires")),
        )
        problems = list(validity.problems_on(self.today))
        if not record.passed:
            problems.append(f"it did not pass ({record.result.get('verdict')})")
        self.doubt(where, problems, remedy)
        return record


def day_of(text: Any) -> dt.date | None:
    """Return a day from "2026-12-01", None where it is none."""
    try:
        return dt.date.fromisoformat(text) if isinstance(text, str) else None
    except ValueError:
        return None
