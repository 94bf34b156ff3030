"""Deciding a record again: the core is fed what was observed, and must decide what it decided then, byte for byte.

A record is a pure function of its plan and of what was observed; this is where that is checked. Resume rests on the
same dialogue.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

from configs.errors import HalfdropError
from configs.version import __version__
from controller.journal import encode
from controller.records.encoding import plan_from_json
from controller.records.header import versions
from controller.records.record import Record
from controller.titration.actions import Action, Decisions, Finish, Observation, Report, from_entry, to_entry
from controller.titration.core import titrate
from controller.titration.plan import RunPlan

#: what the journal adds to a line of the dialogue
LINE_KEYS = frozenset({"line", "utc", "run_s", "previous_sha256"})
#: entries by others than core and devices ("runner": questions afterwards)
_BY = "by"
#: of the versions in a header, those that may change the last bit of a number
_LAST_BIT = ("program", "python", "numpy", "blas", "machine", "cpu_features")


class ReplayError(HalfdropError):
    """A record that cannot be decided again."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Exchanged:
    """One action of the core as recorded, and what it was told; `answer` None where nothing was written any more.

    `entry` is the action as the record holds it, less what the journal adds; `line` its number in the record.
    """

    line: int
    run_s: float
    entry: dict[str, Any]
    answer: Observation | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Difference:
    """The first action that is decided otherwise now."""

    line: int
    run_s: float
    recorded: dict[str, Any]
    decided: dict[str, Any]

    def fields(self) -> list[str]:
        """Return the fields in which they differ."""
        names = [*self.recorded, *(key for key in self.decided if key not in self.recorded)]
        return [name for name in names if self.recorded.get(name) != self.decided.get(name)]

    def to_json(self) -> dict[str, Any]:
        """Return the difference as plain data."""
        return {"line": self.line, "run_s": self.run_s, "recorded": self.recorded, "decided": self.decided}


@dataclass(frozen=True, slots=True, kw_only=True)
class Replayed:
    """What came of deciding a record again.

    Attributes:
        decisions: actions that were compared and found identical.
        difference: the first that is not; None: all are.
        finished: the record holds the core's finish, and it was reached.
        reasons: what may explain a difference, in words.
    """

    decisions: int
    difference: Difference | None
    finished: bool
    reasons: tuple[str, ...]

    @property
    def identical(self) -> bool:
        """True where every recorded decision was decided again."""
        return self.difference is None

    def to_json(self) -> dict[str, Any]:
        """Return the outcome as plain data."""
        return {
            "identical": self.identical,
            "decisions": self.decisions,
            "finished": self.finished,
            "difference": None if self.difference is None else self.difference.to_json(),
            "reasons": list(self.reasons),
        }


def plan_of_record(record: Record) -> RunPlan:
    """Return the plan in a record's header.

    Raises:
        PlanVersionError: a newer program wrote it.
        SettingsError: it is not a plan.
    """
    return plan_from_json(record.header.get("plan"), where=f"{record.path}: header")


def dialogue(record: Record) -> Iterator[Exchanged]:
    """Yield the exchanges of core and world in their order; what others wrote (events, later questions) is left out.

    Raises:
        ReplayError: an observation that answers nothing.
    """
    pending: dict[str, Any] | None = None
    for entry in record.entries:
        if _BY in entry or "event" in entry:
            continue
        if "action" in entry:
            if pending is not None:
                yield _exchanged(pending, None)
            pending = entry
        elif pending is None:
            raise ReplayError(
                "an observation that answers no action",
                where=f"{record.path}: line {entry.get('line')}",
                remedy="Verify the record: halfdrop runs verify",
            )
        else:
            answer = from_entry(_bare(entry), where=f"{record.path}: line {entry.get('line')}")
            yield _exchanged(pending, answer)  # type: ignore[arg-type]  # observations carry "observation"
            pending = None
    if pending is not None:
        yield _exchanged(pending, None)


def _exchanged(entry: dict[str, Any], answer: Observation | None) -> Exchanged:
    return Exchanged(
        line=int(entry.get("line", 0)), run_s=float(entry.get("run_s", 0.0)), entry=_bare(entry), answer=answer
    )


def _bare(entry: dict[str, Any]) -> dict[str, Any]:
    return {key: value for key, value in entry.items() if key not in LINE_KEYS}


@dataclass(slots=True, kw_only=True)
class Rebuilt:
    """A core that was fed a record.

    Attributes:
        decisions: the core, waiting for the answer to `pending`; used up where the record is finished.
        pending: the action that has no answer yet; None where the core has finished.
        recorded: `pending` stands in the record already.
        exchanges: everything that was fed.
        difference: the first other decision; the core was fed no further.
    """

    decisions: Decisions
    pending: Action | None
    recorded: bool
    exchanges: list[Exchanged]
    difference: Difference | None


def rebuild(
    record: Record, plan: RunPlan | None = None, *, on_exchange: Callable[[Action, Exchanged], None] | None = None
) -> Rebuilt:
    """Feed a record's observations to a fresh core.

    Args:
        record: as read.
        plan: another plan than the record's own.
        on_exchange: called with every action as decided now and the exchange it stands in.

    Raises:
        ReplayError, EntryError, PlanVersionError, SettingsError: the record cannot be read.
    """
    decisions = titrate(plan_of_record(record) if plan is None else plan)
    built = Rebuilt(decisions=decisions, pending=next(decisions), recorded=False, exchanges=[], difference=None)
    for exchange in dialogue(record):
        action = built.pending
        if action is None:
            raise ReplayError(
                "the core had finished before this line",
                where=f"{record.path}: line {exchange.line}",
                remedy="Verify the record: halfdrop runs verify",
            )
        decided = to_entry(action)
        if encode(decided) != encode(exchange.entry):
            built.difference = Difference(
                line=exchange.line, run_s=exchange.run_s, recorded=exchange.entry, decided=_plain(decided)
            )
            return built
        built.exchanges.append(exchange)
        if on_exchange is not None:
            on_exchange(action, exchange)
        _advance(built, action, exchange)
    return built


def _advance(built: Rebuilt, action: Action, exchange: Exchanged) -> None:
    built.recorded = True
    if isinstance(action, Finish):
        built.decisions.close()
        built.pending = None
    elif isinstance(action, Report) or exchange.answer is not None:
        built.pending = built.decisions.send(exchange.answer)
        built.recorded = False


def _plain(entry: dict[str, Any]) -> dict[str, Any]:
    import json

    found: dict[str, Any] = json.loads(encode(entry))
    return found


def replay(
    record: Record, plan: RunPlan | None = None, *, on_exchange: Callable[[Action, Exchanged], None] | None = None
) -> Replayed:
    """Decide a record again, by its own plan or another.

    Raises:
        ReplayError, EntryError, PlanVersionError, SettingsError: the record cannot be read.
    """
    built = rebuild(record, plan, on_exchange=on_exchange)
    finished = built.difference is None and built.pending is None
    built.decisions.close()
    return Replayed(
        decisions=len(built.exchanges),
        difference=built.difference,
        finished=finished,
        reasons=tuple(_reasons(record, plan)),
    )


def _reasons(record: Record, plan: RunPlan | None) -> list[str]:
    """Return what is not as it was when the record was written."""
    then, now = record.header.get("versions") or {}, versions()
    told = []
    for name in _LAST_BIT:
        if then.get(name) != now.get(name):
            what = name.replace("_", " ")
            told.append(f"{what}: {then.get(name, 'not recorded')} then, {now.get(name, 'unknown')} now")
    planned = (record.header.get("plan") or {}).get("program_version")
    if planned != __version__ and not any(text.startswith("program:") for text in told):
        told.append(f"the plan was made by program version {planned}, this is {__version__}")
    if plan is not None:
        from controller.records.encoding import plan_to_json

        told += [f"settings: {text}" for text in _changed(record.header.get("plan") or {}, plan_to_json(plan), "")]
    return told


def _changed(then: dict[str, Any], now: dict[str, Any], path: str) -> list[str]:
    found = []
    for key in [*then, *(one for one in now if one not in then)]:
        old, new = then.get(key), now.get(key)
        if isinstance(old, dict) and isinstance(new, dict):
            found += _changed(old, new, f"{path}{key}.")
        elif encode({"": old}) != encode({"": new}):
            found.append(f"{path}{key}: {old!r} then, {new!r} now")
    return found
