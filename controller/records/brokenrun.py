"""A record that breaks off, and the core as it was there."""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

from configs.errors import HalfdropError
from controller.records.record import Record, record_of
from controller.records.reopening import check_open, whole_lines
from controller.replay import Difference, Rebuilt, plan_of_record, rebuild
from controller.titration.actions import Action, Dose, Dosed, Failed, Observation, Reading
from controller.titration.plan import RunPlan
from drivers.clock import Clock, real_seconds_scale

#: how every record begins
_HEADER = b'{"line":1,"utc":"'


class ResumeRefusedError(HalfdropError):
    """The run cannot go on; what is there can be evaluated. `difference` is set where the decisions differ."""

    def __init__(self, what: str, *, where: str, remedy: str, difference: Difference | None = None) -> None:
        super().__init__(what, where=where, remedy=remedy)
        self.difference = difference


@dataclass(frozen=True, slots=True, kw_only=True)
class BrokenRun:
    """A record without an end, and the core as it was where the record breaks off."""

    path: Path
    data: bytes
    record: Record
    plan: RunPlan
    built: Rebuilt
    carried_out: Sequence[tuple[Action, Observation]]

    @property
    def last_run_s(self) -> float:
        """Run time of the last whole line."""
        return float(self.record.entries[-1]["run_s"]) if self.record.entries else 0.0

    @property
    def pending_dose(self) -> Dose | None:
        """The dose whose fate the record does not hold."""
        pending = self.built.pending
        return pending if isinstance(pending, Dose) and self.built.recorded else None

    def last_numbers(self) -> range:
        """Numbers that the pump may know its last dose by: the last of which something may have come, or one after it.

        A dose of which nothing came may never have begun: then the pump does not know its number.
        """
        first = last = self.plan.pump.last_dose_number
        for _, answer in self.carried_out:
            if isinstance(answer, Dosed | Failed) and answer.number:
                last = max(last, answer.number)
                most_ml = answer.volume_ml if isinstance(answer, Dosed) else answer.highest_ml
                if most_ml is None or most_ml > 0.0:
                    first = last
        return range(first, last + 1)

    def start_count(self) -> int:
        """The pump's start count as last recorded."""
        told = [one.get("pump_start_count") for one in self.record.of("resumed")]
        return next((one for one in reversed(told) if isinstance(one, int)), self.plan.pump.start_count)

    def last_reading(self) -> Reading | None:
        """Return the last good reading."""
        return next(
            (
                answer
                for _, answer in reversed(self.carried_out)
                if isinstance(answer, Reading) and answer.status == "ok"
            ),
            None,
        )

    def disturbed(self) -> bool:
        """True where a dose was delivered, or may have been, since the last point."""
        if self.pending_dose is not None:
            return True
        for exchange in reversed(self.built.exchanges):
            if exchange.entry.get("what") == "point":
                return False
            if isinstance(exchange.answer, Dosed | Failed):
                return True
        return False


def read_broken(path: Path) -> BrokenRun:
    """Read a record that breaks off, and rebuild its core.

    Raises:
        NotARecordError, PlanVersionError: foreign, or of a newer program.
        ResumeRefusedError: closed, edited, or decided otherwise by this program.
    """
    try:
        data = path.read_bytes()
    except OSError as error:
        raise HalfdropError(
            f"it cannot be read ({error.strerror})", where=str(path), remedy="See 'halfdrop runs list'"
        ) from error
    mended = whole_lines(data)
    if not mended.count(b"\n") and _HEADER.startswith(mended[: len(_HEADER)]):
        raise ResumeRefusedError(
            "it breaks off in its first line: nothing was begun", where=str(path), remedy="Start the run again"
        )
    record = record_of(mended, path)
    try:
        check_open(mended, str(path))
    except HalfdropError as refused:
        raise ResumeRefusedError(refused.what, where=refused.where, remedy=refused.remedy) from None
    plan = plan_of_record(record)
    carried_out: list[tuple[Action, Observation]] = []
    built = rebuild(
        record,
        plan,
        on_exchange=lambda action, exchange: (
            carried_out.append((action, exchange.answer)) if exchange.answer is not None else None
        ),
    )
    if built.difference is not None:
        raise ResumeRefusedError(
            f"this program decides otherwise at line {built.difference.line} "
            f"({', '.join(built.difference.fields())} differ)",
            where=str(path),
            remedy="Look at it with 'halfdrop replay RUN'; 'halfdrop evaluate' works on what is there",
            difference=built.difference,
        )
    return BrokenRun(path=path, data=data, record=record, plan=plan, built=built, carried_out=carried_out)


def gap_s(broken: BrokenRun, clock: Clock) -> float:
    """Return the time since the record's last line, s of run time: by UTC, or by the file's own time where longer.

    A scaled clock writes a UTC of its own, which says nothing after a new start; the file's time does.
    """
    last = broken.record.entries[-1] if broken.record.entries else {"utc": broken.record.header.get("started_utc")}
    by_utc_s = clock.utc_s() - datetime.fromisoformat(str(last["utc"])).timestamp()
    scale = real_seconds_scale(clock)
    if scale == 1.0:
        return round(max(0.0, by_utc_s), 3)
    by_file_s = (time.time() - broken.path.stat().st_mtime) * scale
    return round(max(0.0, by_utc_s, by_file_s), 3)
