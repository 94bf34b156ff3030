"""Replicates: which runs belong together, and what they say together."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from configs.errors import HalfdropError
from controller.planning.amounts import amount_of_replicates
from controller.records.encoding import plan_from_json
from controller.records.record import Record, list_records, read_record
from controller.report.tables import Table, replicates

#: a series is looked for among so many records before and after
_NEIGHBOURS = 60


@dataclass(frozen=True, slots=True, kw_only=True)
class Together:
    """Table of the runs, mean and spread in words, and the amount of the mean with its budget where there is one."""

    table: Table
    said: tuple[str, ...]
    amount: dict[str, Any] | None
    count: int


def found_replicates(record: Record) -> list[Record]:
    """Return the other replicates of a run's own series, as the records beside it tell; empty where it has none.

    A run that says "2 of 3" belongs with the nearest "1 of 3" before and "3 of 3" after it, of one method and sample.
    """
    own = _place(record.header)
    if own is None:
        return []
    number, count = own
    near = [one for one in _neighbours(record) if _what(one[1]) == _what(record.header)]
    started = str(record.header.get("started_utc"))
    before = [one for one in near if str(one[1].get("started_utc")) < started][::-1]
    after = [one for one in near if str(one[1].get("started_utc")) > started]
    first = _walk(before, range(number - 1, 0, -1), count)[::-1]
    return [read_record(path) for path in [*first, *_walk(after, range(number + 1, count + 1), count)]]


def _neighbours(record: Record) -> list[tuple[Path, dict[str, Any]]]:
    """Path and header of the records beside it in time, oldest first."""
    paths = list_records(record.path.parent)
    at = next((i for i, path in enumerate(paths) if path.name == record.path.name), None)
    if at is None:
        return []
    found = []
    for path in paths[max(0, at - _NEIGHBOURS) : at + _NEIGHBOURS + 1]:
        try:
            with path.open("rb") as file:
                header = json.loads(file.readline()).get("header")
        except (OSError, ValueError, AttributeError):
            continue
        if isinstance(header, dict) and path != record.path:
            found.append((path, header))
    return sorted(found, key=lambda one: str(one[1].get("started_utc")))


def _walk(near: Sequence[tuple[Path, dict[str, Any]]], numbers: range, count: int) -> list[Path]:
    found: list[Path] = []
    wanted = list(numbers)
    for path, header in near:
        place = _place(header)
        if not wanted or (place is not None and place != (wanted[0], count)):
            break  # complete, or another series of the same sample begins here
        if place is not None:
            found.append(path)
            wanted.pop(0)
    return found


def _plan(header: dict[str, Any]) -> dict[str, Any]:
    plan = header.get("plan")
    return plan if isinstance(plan, dict) else {}


def _place(header: dict[str, Any]) -> tuple[int, int] | None:
    trace = _plan(header).get("traceability")
    replicate = trace.get("replicate") if isinstance(trace, dict) else None
    if not isinstance(replicate, dict):
        return None
    number, count = replicate.get("number"), replicate.get("count")
    return (number, count) if isinstance(number, int) and isinstance(count, int) and count > 1 else None


def _what(header: dict[str, Any]) -> tuple[Any, Any]:
    plan = _plan(header)
    return plan.get("method_name"), (plan.get("sample") or {}).get("sample_id")


def together(records: Sequence[Record]) -> Together | None:
    """Return what runs of one sample say together; None for fewer than two."""
    records = sorted(records, key=lambda one: str(one.header.get("started_utc")))
    named = [(one.path.stem, _result(one).get("result")) for one in records]
    made = replicates(named)
    if made is None:
        return None
    table, said = made
    amount, why = _mean([one for one in records if _result(one).get("result")])
    return Together(table=table, said=(*said, *why), amount=amount, count=len(records))


def _mean(records: Sequence[Record]) -> tuple[dict[str, Any] | None, list[str]]:
    """The mean's amount with the whole budget, shared causes counted once; the reason where there is none."""
    if len(records) < 2:
        return None, []
    try:
        plans = [plan_from_json(one.header.get("plan"), where=one.path.stem) for one in records]
        results = [{**_result(one), "run": one.path.stem} for one in records]
        found = amount_of_replicates(plans, results)
    except HalfdropError as error:
        return None, [f"No uncertainty budget of the mean: {error}"]
    amount: dict[str, Any] = found["result"]
    return amount, [f"Warning: {text}" for text in found["warnings"]]


def _result(record: Record) -> dict[str, Any]:
    result = (record.closing or {}).get("result")
    return result if isinstance(result, dict) else {}
